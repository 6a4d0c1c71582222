//! `serve`'s settings: a file, the environment, flags.

use std::{path::Path, process::Command};

fn serve(arguments: &[&str], environment: &[(&str, &str)], folder: &Path) -> std::process::Output {
    let mut command = Command::new(env!("CARGO_BIN_EXE_bitassay"));
    for (name, _) in std::env::vars().filter(|(name, _)| name.starts_with("BITASSAY_")) {
        command.env_remove(name);
    }
    command.arg("serve").args(arguments).envs(environment.iter().copied()).current_dir(folder).output().unwrap()
}

fn printed(arguments: &[&str], environment: &[(&str, &str)], folder: &Path) -> toml::Table {
    let output = serve(&[arguments, &["--print-config"]].concat(), environment, folder);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    String::from_utf8(output.stdout).unwrap().parse().unwrap()
}

#[test]
fn flags_go_before_the_environment_and_that_before_the_file() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("bitassay.toml"), "solvers = 3\nqueue = 4\nrate = 5\nlog-format = \"json\"\n").unwrap();
    let environment = [("BITASSAY_QUEUE", "40"), ("BITASSAY_RATE", "50"), ("BITASSAY_CONFIG", "bitassay.toml")];
    let found = printed(&["--rate", "500"], &environment, folder.path());
    let numbers = ["solvers", "queue", "rate", "burst"].map(|name| found[name].as_integer().unwrap());
    assert_eq!(numbers, [3, 40, 500, 2000]);
    assert_eq!(found["log-format"].as_str(), Some("json"));
    assert_eq!(found["listen"].as_str(), Some("127.0.0.1:8080"));
    // Nothing was started for that.
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 1);
}

#[test]
fn what_is_printed_can_be_read_again() {
    let folder = tempfile::tempdir().unwrap();
    let first = printed(&["--solvers", "7", "--log", "debug"], &[], folder.path());
    std::fs::write(folder.path().join("again.toml"), first.to_string()).unwrap();
    assert_eq!(printed(&["--config", "again.toml"], &[], folder.path()), first);
}

/// The help says of each setting what it is without being set, and where else it can be set.
#[test]
fn the_help_tells_every_setting() {
    let folder = tempfile::tempdir().unwrap();
    let help = String::from_utf8(serve(&["--help"], &[], folder.path()).stdout).unwrap();
    let words = help.split_whitespace().collect::<Vec<_>>().join(" ");
    for (name, value) in printed(&[], &[], folder.path()) {
        let value = value.as_str().map_or_else(|| value.to_string(), str::to_owned);
        let section = words.split(&format!("--{name} <")).nth(1).unwrap_or_else(|| panic!("--{name} is not in the help"));
        let section = section.split(" --").next().unwrap();
        assert!(section.contains(&format!("[default: {value}]")), "--{name} has another default than {value}: {section}");
        assert!(section.contains(&format!("[env: BITASSAY_{}=]", name.to_uppercase().replace('-', "_"))), "{section}");
    }
}

#[test]
fn what_cannot_be_is_told_by_name() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("typo.toml"), "solver = 3\n").unwrap();
    std::fs::write(folder.path().join("many.toml"), "solvers = 257\n").unwrap();
    std::fs::write(folder.path().join("word.toml"), "queue = \"long\"\n").unwrap();
    for (arguments, word) in [
        (&["--config", "typo.toml"], "solver"),
        (&["--config", "many.toml"], "solvers is from 1 to 256"),
        (&["--config", "word.toml"], "queue"),
        (&["--config", "missing.toml"], "cannot read missing.toml"),
        (&["--head-seconds", "0"], "head-seconds"),
        (&["--rate", "0"], "--rate"),
        (&["--log", "a=b=c"], "how much to log"),
    ] {
        let output = serve(arguments, &[], folder.path());
        assert_eq!(output.status.code(), Some(2), "{arguments:?}");
        let told = String::from_utf8(output.stderr).unwrap();
        assert!(told.contains(word), "{arguments:?}: {told}");
    }
}
