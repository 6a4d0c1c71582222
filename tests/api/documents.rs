//! `certify` and `verify` on documents, as a person runs them.

use std::{
    io::Write,
    process::{Command, Output, Stdio},
};

use serde_json::{Value, json};

/// Runs a command with a document on standard input.
fn run(arguments: &[&str], input: &str) -> Output {
    let mut command = Command::new(env!("CARGO_BIN_EXE_bitassay"));
    let mut child = command.args(arguments).stdin(Stdio::piped()).stdout(Stdio::piped()).stderr(Stdio::piped()).spawn().unwrap();
    child.stdin.take().unwrap().write_all(input.as_bytes()).unwrap();
    child.wait_with_output().unwrap()
}

fn status(output: &Output) -> i32 {
    output.status.code().unwrap()
}

fn printed(output: &Output) -> Value {
    serde_json::from_slice(&output.stdout).unwrap()
}

fn request(right: u64) -> Value {
    json!({
        "scenario": { "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1, "leakage": 0.1, "targets": [[0, 0]] },
        "counts": [[[right, 1_000_000 - right]], [[1_000_000 - right, right]]],
        "rounds": "independent",
    })
}

#[test]
fn certified_counts_end_with_0_and_are_verified() {
    let certified = run(&["certify", "--bundle", "-"], &request(790_000).to_string());
    assert_eq!(status(&certified), 0);
    let bundle = printed(&certified);
    assert_eq!(bundle["record"]["verdict"], "certified");
    assert!(String::from_utf8_lossy(&certified.stderr).starts_with("certified: "));

    let verified = run(&["verify", "-"], &bundle.to_string());
    assert_eq!((status(&verified), &printed(&verified)["verified"]), (0, &json!(true)));

    let mut changed = bundle.clone();
    changed["record"]["certified_bits"] = json!(bundle["record"]["certified_bits"].as_u64().unwrap() + 1);
    let refuted = run(&["verify", "-"], &changed.to_string());
    assert_eq!((status(&refuted), &printed(&refuted)["verified"]), (3, &json!(false)));
    assert!(String::from_utf8_lossy(&refuted.stderr).contains("/certified_bits"));
}

#[test]
fn refused_counts_end_with_3_and_are_printed_all_the_same() {
    // More than 0.8 is out of reach of a vacuum bounded to 0.1; a fair coin shows nothing.
    for (right, reason) in [(820_000, "outside-model"), (500_000, "zero-bound")] {
        let refused = run(&["certify", "--bundle", "-"], &request(right).to_string());
        assert_eq!(status(&refused), 3);
        let bundle = printed(&refused);
        assert_eq!((&bundle["record"]["verdict"], &bundle["record"]["reason"]), (&json!("refused"), &json!(reason)));
        assert_eq!(status(&run(&["verify", "-"], &bundle.to_string())), 0);
    }
}

/// Probabilities in place of counts give an estimate: the ideal 2→1 code on a qubit, 0.2284 bit (arXiv:1108.1480).
#[test]
fn a_behaviour_is_estimated() {
    let right = 0.853_553_390_593_273_8;
    let answer = |good: bool| if good { [right, 1.0 - right] } else { [1.0 - right, right] };
    let behaviour: Vec<Vec<[f64; 2]>> = (0..4).map(|x| (0..2).map(|y| answer(x >> y & 1 == 0)).collect()).collect();
    let document = json!({
        "scenario": { "preparations": 4, "measurements": 2, "outcomes": 2, "carrier_dimension": 2, "leakage": 0, "targets": [[0, 0]] },
        "behaviour": behaviour, "rounds": "plug-in", "level": "lean",
    });
    let estimated = run(&["certify", "-"], &document.to_string());
    let record = printed(&estimated);
    assert_eq!((status(&estimated), &record["verdict"], &record["certified_bits"]), (0, &json!("estimate"), &json!(0)));
    let entropy = record["targets"][0]["min_entropy_per_round"].as_f64().unwrap();
    assert!((entropy - 0.228_446_7).abs() < 1e-5, "{entropy}");
}

#[test]
fn bad_input_ends_with_2_and_one_line_that_names_the_culprit() {
    let mut negative = request(790_000);
    negative["counts"][1][0][1] = json!(-3);
    let mut memory = request(790_000);
    memory["rounds"] = json!("memory");
    for (document, culprit) in [(negative.to_string(), "/counts/1/0/1"), (memory.to_string(), "/rounds"), ("{".to_owned(), "EOF")] {
        let output = run(&["certify", "-"], &document);
        let said = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!((status(&output), output.stdout.len(), said.lines().count()), (2, 0, 1), "{said}");
        assert!(said.contains(culprit), "{said}");
    }
    let missing = run(&["certify", "/nonexistent/batch.json"], "");
    assert_eq!(status(&missing), 2);
}

/// The demo shows each verdict and a commitment, and does not touch a database that exists.
#[test]
fn the_demo_certifies_and_refuses() {
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("demo.sqlite");
    let arguments = ["demo", "--database", database.to_str().unwrap()];
    let shown = run(&arguments, "");
    let text = String::from_utf8_lossy(&shown.stdout).into_owned();
    assert_eq!(status(&shown), 0, "{}", String::from_utf8_lossy(&shown.stderr));
    for (day, expected) in [
        ("clear", "certified"),
        ("salt-spray", "certified"),
        ("bright-pulses", "refused"),
        ("fog", "refused"),
        ("clear, again", "certified"),
    ] {
        let row = text.lines().find(|line| line.starts_with(day)).unwrap_or_else(|| panic!("{text}"));
        assert!(row.contains(expected), "{row}");
    }
    assert!(text.contains("outside-model: ") && text.contains("zero-bound: ") && text.contains("\"refusals\": 2"), "{text}");
    assert_eq!(status(&run(&arguments, "")), 2);
}
