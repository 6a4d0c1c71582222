//! The `bitassay` command as a whole process.

use std::{
    io::{BufRead, BufReader},
    path::Path,
    process::{Child, Command, Stdio},
};

use bitassay::http::openapi::document;

use crate::client::Client;

fn bitassay() -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_bitassay"));
    for (name, _) in std::env::vars().filter(|(name, _)| name.starts_with("BITASSAY_")) {
        command.env_remove(name);
    }
    command
}

/// A server as a process of its own.
struct Process {
    child: Child,
    client: Client,
}

impl Process {
    fn start(database: &Path) -> Self {
        Self::listening("127.0.0.1:0", database)
    }

    fn listening(address: &str, database: &Path) -> Self {
        let mut command = bitassay();
        command.args(["serve", "--listen", address, "--database"]).arg(database).stderr(Stdio::piped());
        let mut child = command.spawn().unwrap();
        let mut lines = BufReader::new(child.stderr.take().unwrap()).lines();
        let first = lines.next().unwrap().unwrap();
        let address = first.strip_prefix("listening on ").unwrap_or_else(|| panic!("{first}"));
        let client = Client::new(address.to_owned());
        // The rest is read as well, so that the process never waits for room to write.
        std::thread::spawn(move || lines.for_each(drop));
        Self { child, client }
    }
}

impl Drop for Process {
    fn drop(&mut self) {
        drop(self.child.kill());
        drop(self.child.wait());
    }
}

#[cfg(unix)]
#[test]
fn a_termination_signal_ends_the_server_well() {
    let folder = tempfile::tempdir().unwrap();
    let mut process = Process::start(&folder.path().join("ledger.sqlite"));
    process.client.get("/readyz").expect(200);
    let sent = Command::new("kill").args(["-TERM", &process.child.id().to_string()]).status().unwrap();
    assert!(sent.success());
    assert!(process.child.wait().unwrap().success());
}

#[cfg(unix)]
#[test]
fn a_service_that_is_well_is_told_from_one_that_is_not() {
    let folder = tempfile::tempdir().unwrap();
    let mut process = Process::start(&folder.path().join("ledger.sqlite"));
    let ask = |url: &str| bitassay().args(["health", "--url", url]).output().unwrap();
    let url = process.client.base().to_owned();
    assert!(ask(&url).status.success());
    process.child.kill().unwrap();
    process.child.wait().unwrap();
    let output = ask(&url);
    assert_eq!(output.status.code(), Some(2));
    assert_eq!(String::from_utf8(output.stderr).unwrap().lines().count(), 1);
}

#[test]
fn the_world_is_not_listened_to() {
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("ledger.sqlite");
    for address in ["0.0.0.0:0", "[::]:0", "192.0.2.1:80"] {
        let output = bitassay().args(["serve", "--listen", address, "--database"]).arg(&database).output().unwrap();
        assert_eq!(output.status.code(), Some(2), "{address}");
        let words = String::from_utf8(output.stderr).unwrap();
        assert!(words.contains("needs tokens, and none was ever created") && words.lines().count() == 1, "{words}");
    }
    assert!(!database.exists());
    // Neither is a database enough that has no tokens.
    drop(Process::start(&database));
    let output = bitassay().args(["serve", "--listen", "0.0.0.0:0", "--database"]).arg(&database).output().unwrap();
    assert_eq!(output.status.code(), Some(2));
    // With a token, it is.
    assert!(bitassay().args(["token", "create", "--role", "operator", "--database"]).arg(&database).output().unwrap().status.success());
    let process = Process::listening("0.0.0.0:0", &database);
    process.client.get("/v1/rigs").expect(401);
    process.client.get("/livez").expect(200);
}

#[test]
fn bad_usage_is_told_in_words() {
    let folder = tempfile::tempdir().unwrap();
    let nowhere = folder.path().join("missing").join("ledger.sqlite");
    let output = bitassay().args(["serve", "--listen", "127.0.0.1:0", "--database"]).arg(nowhere).output().unwrap();
    assert_eq!(output.status.code(), Some(2));
    assert_eq!(String::from_utf8(output.stderr).unwrap().lines().count(), 1);
    assert_eq!(bitassay().arg("certainly").output().unwrap().status.code(), Some(2));
}

#[test]
fn the_interface_can_be_printed() {
    let output = bitassay().arg("openapi").output().unwrap();
    assert!(output.status.success());
    assert_eq!(String::from_utf8(output.stdout).unwrap(), document().unwrap());
}

/// A reader that has seen enough ends the command quietly, and never with success.
#[test]
fn a_reader_that_stops_ends_the_command_quietly() {
    use std::{
        io::Read,
        process::{Command, Stdio},
    };
    let mut command = Command::new(env!("CARGO_BIN_EXE_bitassay"));
    let mut child = command.arg("openapi").stdout(Stdio::piped()).stderr(Stdio::piped()).spawn().unwrap();
    // Taken and dropped at once: the document is longer than a pipe holds.
    drop(child.stdout.take());
    let mut said = String::new();
    child.stderr.take().unwrap().read_to_string(&mut said).unwrap();
    assert_eq!((child.wait().unwrap().code(), said.as_str()), (Some(141), ""));
}

/// The attack on the noisy 2→1 code comes out with its model, next to the bound.
#[test]
fn an_attack_is_printed_with_its_model() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("request.json");
    let right = 0.5 * (1.0 + 0.99 / 2f64.sqrt());
    let answers = |x: usize, y: usize| if x >> y & 1 == 0 { [right, 1.0 - right] } else { [1.0 - right, right] };
    let behaviour: Vec<Vec<[f64; 2]>> = (0..4).map(|x| (0..2).map(|y| answers(x, y)).collect()).collect();
    let request = serde_json::json!({
        "scenario": { "preparations": 4, "measurements": 2, "outcomes": 2, "carrier_dimension": 2, "leakage": 0, "targets": [[0, 0]] },
        "behaviour": behaviour, "rounds": "plug-in", "level": "sharp" });
    std::fs::write(&file, request.to_string()).unwrap();
    let output = bitassay().arg("attack").arg(&file).output().unwrap();
    let words = String::from_utf8(output.stderr).unwrap();
    assert_eq!(output.status.code(), Some(0), "{words}");
    assert!(words.contains("an adversary guesses at least 0.88185") && words.lines().count() == 1, "{words}");
    let report: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    let target = &report["targets"][0];
    let (attack, bound) = (target["attack"].as_f64().unwrap(), target["bound"].as_f64().unwrap());
    assert!(attack <= bound && bound - attack < 1e-5, "{attack} {bound}");
    // The figure is the one that the printed weights, states and measurements give.
    let number = |value: &serde_json::Value| (value[0].as_f64().unwrap(), value[1].as_f64().unwrap());
    let mut guessed = 0.0;
    for strategy in target["model"]["strategies"].as_array().unwrap() {
        let state: Vec<(f64, f64)> = strategy["states"][0].as_array().unwrap().iter().map(number).collect();
        let element = &strategy["measurements"][0][strategy["guess"].as_u64().unwrap() as usize];
        let mut probability = 0.0;
        for (i, (a, b)) in state.iter().enumerate() {
            for (j, (c, d)) in state.iter().enumerate() {
                let (re, im) = number(&element[i][j]);
                // The real part of (a − ib)(re + i im)(c + id).
                probability += (a * c + b * d) * re - (a * d - b * c) * im;
            }
        }
        guessed += strategy["weight"].as_f64().unwrap() * probability;
    }
    assert!((guessed - attack).abs() < 1e-9, "{guessed} {attack}");
    std::fs::write(&file, "{}").unwrap();
    assert_eq!(bitassay().arg("attack").arg(&file).output().unwrap().status.code(), Some(2));
}
