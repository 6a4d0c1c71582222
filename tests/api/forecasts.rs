//! `/v1/forecasts`, and the `forecast` command.

use std::process::Command;

use serde_json::{Value, json};

use crate::server::{Running, with_rig};

const JSON: (&str, &str) = ("content-type", "application/json");

fn request() -> Value {
    json!({
        "scenario": { "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1, "leakage": 0.1, "targets": [[0, 0]] },
        "behaviour": [[[0.75, 0.25]], [[0.25, 0.75]]],
        "rounds": ["plug-in", "independent"], "total_rounds": 1_000_000, "entropy": "guessing", "level": "lean",
        "sweep": { "leakage": { "from": 0.01, "to": 0.3, "points": 12 } },
        "thresholds": { "leakage": 0.01 },
    })
}

fn post(running: &Running, request: &Value, accept: &str) -> crate::client::Reply {
    running.client().call("POST", "/v1/forecasts", &[JSON, ("accept", accept)], Some(request.to_string().as_bytes()))
}

/// A picture is one element `svg` whose elements are all closed, with labels as text.
fn is_a_picture(text: &str) {
    assert!(text.starts_with("<svg ") && text.trim_end().ends_with("</svg>"), "{text}");
    let mut open: Vec<&str> = vec![];
    for tag in text.split('<').skip(1) {
        let tag = tag.split('>').next().unwrap();
        if let Some(name) = tag.strip_prefix('/') {
            assert_eq!(open.pop(), Some(name));
        } else if !tag.ends_with('/') {
            open.push(tag.split([' ', '\n']).next().unwrap());
        }
    }
    assert!(open.is_empty(), "{open:?}");
    for label in [
        "bits per target round",
        "leakage ε",
        "10⁻¹",
        "min-entropy, limit of many rounds",
        "10⁶ independent rounds",
        "nothing may be released",
    ] {
        assert!(text.contains(label), "{label} is missing");
    }
    assert!(!text.contains("NaN") && !text.contains("inf"), "{text}");
}

#[test]
fn a_forecast_comes_as_json_as_csv_and_as_a_picture() {
    let (running, _) = with_rig();
    let before = running.rows();
    let reply = post(&running, &request(), "*/*").expect(200);
    assert_eq!((reply.header("content-type"), reply.header("vary")), (Some("application/json"), Some("Accept")));
    let forecast = reply.json();
    assert!(forecast["note"].as_str().unwrap().contains("no bits may be released on it"));
    assert_eq!((forecast["curves"].as_array().unwrap().len(), forecast["curves"][0]["points"].as_array().unwrap().len()), (2, 12));
    assert!(forecast["thresholds"][0]["certifies_at"].as_f64().unwrap() > 0.1);

    let rows = post(&running, &request(), "text/csv").expect(200);
    assert_eq!(rows.header("content-type"), Some("text/csv; charset=utf-8; header=present"));
    let mut reader = csv::Reader::from_reader(rows.body.as_slice());
    let columns = reader.headers().unwrap().clone();
    let records: Vec<csv::StringRecord> = reader.records().collect::<Result<_, _>>().unwrap();
    assert_eq!(records.len(), 24);
    let at = |row: usize, name: &str| records[row].get(columns.iter().position(|column| column == name).unwrap()).unwrap().to_owned();
    assert_eq!((at(0, "rounds"), at(0, "leakage"), at(12, "rounds")), ("plug-in".into(), "0.01".into(), "independent".into()));
    let of = |i: usize| forecast["curves"][1]["points"][i]["bits_per_target_round"].as_f64().unwrap();
    assert!((0..12).all(|i| at(12 + i, "bits_per_target_round").parse::<f64>().unwrap() == of(i)));

    let picture = post(&running, &request(), "image/svg+xml").expect(200);
    assert_eq!(picture.header("content-type"), Some("image/svg+xml"));
    is_a_picture(picture.text());
    assert_eq!(running.rows(), before, "nothing is recorded");
}

#[test]
fn what_cannot_be_forecast_is_refused_with_a_pointer() {
    let (running, _) = with_rig();
    post(&running, &request(), "text/html").expect(406);
    let with = |pointer: &str, value: Value| {
        let mut request = request();
        *request.pointer_mut(pointer).unwrap() = value;
        request
    };
    let mut more = request();
    more["more"] = json!(1);
    for (request, status, pointer) in [
        (with("/sweep", json!({ "moonlight": {} })), 400, "/sweep"),
        (with("/sweep/leakage", json!({ "from": 0.1 })), 400, "/sweep/leakage"),
        (with("/rounds/0", json!("sometimes")), 400, "/rounds/0"),
        (more, 400, "/more"),
        (with("/sweep/leakage/to", json!(2.0)), 422, "/sweep/leakage/to"),
        (with("/rounds/0", json!("memory")), 422, "/rounds/0"),
        (with("/scenario/leakage", json!(-1.0)), 422, "/scenario/leakage"),
    ] {
        let problem = post(&running, &request, "*/*").expect(status).json();
        assert_eq!(problem["pointer"], pointer, "{request}: {problem}");
    }
}

/// A stored budget stands for its figure, as in a profile.
#[test]
fn a_forecast_may_name_a_stored_budget() {
    let (running, client) = with_rig();
    let budget = json!({ "carrier_dimension": 1, "contributions": [{ "source": "side-mode", "weight": 0.1 }] });
    let digest = client.call("POST", "/v1/leakage", &[JSON], Some(budget.to_string().as_bytes())).json()["digest"].clone();
    let sweep = json!({ "visibility": { "from": 0.9, "to": 1.0, "points": 2 } });
    let forecast = |leakage: &Value| {
        let mut request = request();
        request["sweep"] = sweep.clone();
        request["thresholds"] = json!({});
        request["scenario"]["leakage"] = leakage.clone();
        post(&running, &request, "*/*")
    };
    let (stored, stated) = (forecast(&digest).expect(200).json(), forecast(&json!(0.1)).expect(200).json());
    assert_eq!(stored["curves"], stated["curves"]);
    let unknown = json!(format!("sha256:{}", "0".repeat(64)));
    assert_eq!(forecast(&unknown).expect(422).json()["pointer"], "/scenario/leakage");
}

/// Too much work is refused with the figure, and not begun.
#[test]
fn a_grid_that_would_take_too_long_is_refused() {
    let (running, _) = with_rig();
    let even = |outcomes: usize| vec![1.0 / outcomes as f64; outcomes];
    let request = json!({
        "scenario": { "preparations": 4, "measurements": 2, "outcomes": 2, "carrier_dimension": 2, "leakage": 0.001, "targets": [[0, 0]] },
        "behaviour": vec![vec![even(2); 2]; 4], "rounds": ["plug-in"], "entropy": "guessing", "level": "keen",
        "sweep": { "leakage": { "from": 1e-5, "to": 0.1, "points": 500 } },
    });
    let problem = post(&running, &request, "*/*").expect(422).json();
    assert_eq!(problem["pointer"], "/sweep");
    assert!(problem["detail"].as_str().unwrap().contains("the limit is 300 s"), "{problem}");
}

#[test]
fn the_command_prints_and_draws() {
    let folder = tempfile::tempdir().unwrap();
    let (file, picture) = (folder.path().join("request.json"), folder.path().join("picture.svg"));
    std::fs::write(&file, request().to_string()).unwrap();
    let run = |format: &str| {
        let mut command = Command::new(env!("CARGO_BIN_EXE_bitassay"));
        let output = command.arg("forecast").arg(&file).args(["--format", format, "--picture"]).arg(&picture).output().unwrap();
        assert!(output.status.success() && output.stderr.is_empty(), "{}", String::from_utf8_lossy(&output.stderr));
        String::from_utf8(output.stdout).unwrap()
    };
    let table = run("table");
    for words in [
        "bits per target round",
        "[2] min-entropy, 10⁶ independent rounds",
        "outside-model",
        "zero-bound",
        "share their witnesses",
        "no bits may be released",
    ] {
        assert!(table.contains(words), "{words}: {table}");
    }
    is_a_picture(&std::fs::read_to_string(&picture).unwrap());
    let forecast: Value = serde_json::from_str(&run("json")).unwrap();
    assert_eq!(forecast["swept"], "leakage");
    assert_eq!(run("csv").lines().count(), 25);

    let mut bracketed = request();
    (bracketed["bracket"], bracketed["attacks"]) = (json!(true), json!(4));
    std::fs::write(&file, bracketed.to_string()).unwrap();
    let table = run("table");
    assert!(
        table.contains("an explicit attack with the expected behaviour leaves b of this entropy, so no bound on it can be higher"),
        "{table}"
    );
    assert_eq!(table.matches("..0.").count(), 2, "what is outside the model is not attacked: {table}");
    let picture = std::fs::read_to_string(&picture).unwrap();
    assert!(
        picture.contains("<polygon")
            && picture.contains("what an explicit attack leaves of this entropy, at the ticks: no bound on it can be higher"),
        "{picture}"
    );
    let rows = run("csv");
    let attacked = |row: &str| row.split(',').nth(12).unwrap().parse::<f64>().is_ok();
    assert_eq!(rows.lines().skip(1).filter(|row| attacked(row)).count(), 2, "{rows}");

    std::fs::write(&file, "{}").unwrap();
    let output = Command::new(env!("CARGO_BIN_EXE_bitassay")).arg("forecast").arg(&file).output().unwrap();
    let said = String::from_utf8(output.stderr).unwrap();
    assert_eq!((output.status.code(), said.lines().count()), (Some(2), 1), "{said}");
}
