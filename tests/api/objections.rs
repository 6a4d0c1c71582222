//! Rigs whose profiles have batches refused for what is odd about their data

use std::sync::Arc;

use bitassay::{bundle::Bundle, certify::certify};
use serde_json::{Value, json};

use crate::{
    client::{Client, Reply},
    server::{Running, Solving, profile},
};

/// A server with the real core and two rigs of the same kind: `strict` refuses, `easy` does not.
fn with_rigs(refuse_on: Value) -> (Running, Client) {
    let running = Running::solving(Solving { certifier: Arc::new(certify), ..Solving::default() });
    let client = running.client();
    let mut profile = profile();
    profile["setting_distribution"] = json!([[0.5], [0.5]]);
    client.put_rig("easy", &profile, &[]).expect(201);
    profile["refuse_on"] = refuse_on;
    client.put_rig("strict", &profile, &[]).expect(201);
    (running, client)
}

fn batch(counts: Value) -> Value {
    json!({ "counts": counts, "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z" })
}

fn good() -> Value {
    batch(json!([[[78_000, 22_000]], [[22_000, 78_000]]]))
}

fn bundle(client: &Client, reply: &Reply) -> Bundle {
    let path = reply.header("location").unwrap();
    Bundle::join(&client.get(path).expect(200).body, &client.get(&format!("{path}/witness")).expect(200).body).unwrap()
}

/// The refused record, held against the one that `easy` was given for the same batch.
fn refused(client: &Client, reason: &str, batch: &Value) -> (Bundle, Bundle) {
    let reply = client.post_batch("strict", reason, batch).expect(422);
    let problem = reply.json();
    assert_eq!((&problem["type"], &problem["reason"]), (&json!("urn:bitassay:problem:refused"), &json!(reason)));
    assert!(problem["detail"].as_str().unwrap().contains("profile refuses such data"), "{problem}");
    assert_eq!(client.post_batch("strict", reason, batch).body, reply.body);
    let taken = client.post_batch("easy", reason, batch).expect(201);
    let (refused, taken) = (bundle(client, &reply), bundle(client, &taken));
    assert_eq!((&refused.record["verdict"], &refused.record["certified_bits"]), (&json!("refused"), &json!(0)));
    assert_eq!((&refused.record["targets"][0]["certified_bits"], &refused.record["bits_per_round"]), (&json!(0), &json!(0.0)));
    for figure in ["guessing_probability_bound", "min_entropy_per_round", "witness"] {
        assert_eq!(refused.record["targets"][0][figure], taken.record["targets"][0][figure]);
    }
    assert_eq!((refused.verify(), taken.verify()), (Ok(()), Ok(())));
    (refused, taken)
}

/// The refused record with the verdict and the bits that it would have had.
fn beautified(refused: &Bundle, taken: &Bundle) -> Bundle {
    let mut forged = refused.clone();
    for member in ["verdict", "reason", "targets", "certified_bits", "bits_per_round"] {
        forged.record[member] = taken.record[member].clone();
    }
    forged
}

fn first_discrepancy(bundle: &Bundle) -> String {
    bundle.verify().expect_err("a forged record is believed")[0].to_string()
}

#[test]
fn settings_that_are_not_drawn_as_declared() {
    let (_running, client) = with_rigs(json!(["setting-imbalance"]));
    client.post_batch("strict", "good", &good()).expect(201);
    let (refused, taken) = refused(&client, "setting-imbalance", &batch(json!([[[78_000, 22_000]], [[26_000, 78_000]]])));
    assert_eq!(taken.record["verdict"], "certified");
    let forged = beautified(&refused, &taken);
    assert!(first_discrepancy(&forged).starts_with("/verdict"), "{}", first_discrepancy(&forged));
    // Bits in a record that says it is refused.
    let mut boastful = refused.clone();
    boastful.record["certified_bits"] = taken.record["certified_bits"].clone();
    assert!(first_discrepancy(&boastful).starts_with("/certified_bits"));
    let mut boastful = refused.clone();
    boastful.record["targets"][0]["certified_bits"] = json!(1);
    assert!(first_discrepancy(&boastful).starts_with("/targets/0/certified_bits"));
}

#[test]
fn outcomes_that_drifted() {
    let (_running, client) = with_rigs(json!(["few-rounds", "outcome-drift"]));
    client.post_batch("strict", "good", &good()).expect(201);
    client.post_batch("easy", "good", &good()).expect(201);
    let drifted = batch(json!([[[77_000, 23_000]], [[22_000, 78_000]]]));
    let (refused, taken) = refused(&client, "outcome-drift", &drifted);
    assert!(first_discrepancy(&beautified(&refused, &taken)).starts_with("/verdict"));
    // What was refused is not what the next batch is compared with.
    client.post_batch("strict", "drifted-again", &drifted).expect(422);
    client.post_batch("strict", "good-again", &good()).expect(201);
}

#[test]
fn settings_with_few_rounds_of_an_estimate() {
    let running = Running::solving(Solving { certifier: Arc::new(certify), ..Solving::default() });
    let client = running.client();
    let mut profile = profile();
    profile["rounds"] = json!("plug-in");
    client.put_rig("easy", &profile, &[]).expect(201);
    profile["refuse_on"] = json!(["few-rounds"]);
    client.put_rig("strict", &profile, &[]).expect(201);
    let (refused, taken) = refused(&client, "few-rounds", &batch(json!([[[78_000, 22_000]], [[22, 77]]])));
    assert_eq!(taken.record["verdict"], "estimate");
    let mut forged = beautified(&refused, &taken);
    // The counts show it, whatever the concerns say.
    forged.record["concerns"] = json!([]);
    assert!(first_discrepancy(&forged).starts_with("/verdict"));
}

#[test]
fn lost_rounds_that_were_left_out() {
    let (_running, client) = with_rigs(json!(["fair-sampling"]));
    let mut lossy = good();
    lossy["lost_rounds"] = json!({ "counts": [[1000], [1000]], "treatment": { "as-outcome": 1 } });
    client.post_batch("strict", "counted", &lossy).expect(201);
    lossy["lost_rounds"]["treatment"] = json!("fair-sampling");
    let (refused, taken) = refused(&client, "fair-sampling", &lossy);
    assert!(first_discrepancy(&beautified(&refused, &taken)).starts_with("/verdict"));
}

#[test]
fn blocks_of_rounds_with_memory() {
    let running = Running::new();
    let client = running.client();
    let mut profile = profile();
    profile["rounds"] = json!("memory");
    profile["refuse_on"] = json!(["setting-imbalance"]);
    client.put_rig("strict", &profile, &[]).expect(201);
    let order =
        json!({ "expected_behaviour": [[[0.78, 0.22]], [[0.22, 0.78]]], "setting_distribution": [[0.5], [0.5]], "rounds": 200_000 });
    let committed = client.post_commitment("strict", &order).expect(201).json();
    let mut uneven = batch(json!([[[79_000, 22_000]], [[21_000, 78_000]]]));
    uneven["started_at"] = committed["recorded_at"].clone();
    uneven["ended_at"] = json!("2100-01-01T00:00:00Z");
    let reply = client.post_batch("strict", "k", &uneven).expect(422);
    assert_eq!(reply.json()["reason"], "setting-imbalance");
    let refused = bundle(&client, &reply);
    let block = &refused.record["block"];
    assert_eq!((&block["certified_bits"], block["min_entropy"].as_f64().unwrap() > 1000.0), (&json!(0), true));
    assert_eq!(block["net_bits_per_round"].as_f64().unwrap(), -block["setting_cost_per_round"].as_f64().unwrap());
    assert_eq!(refused.verify(), Ok(()));
    let mut boastful = refused.clone();
    boastful.record["block"]["certified_bits"] = json!(1000);
    assert!(first_discrepancy(&boastful).starts_with("/block/certified_bits"));
}

#[test]
fn another_reason_goes_before() {
    let (_running, client) = with_rigs(json!(["setting-imbalance"]));
    let noise = batch(json!([[[50_000, 50_000]], [[30_000, 30_000]]]));
    let reply = client.post_batch("strict", "k", &noise).expect(422);
    assert_eq!(reply.json()["reason"], "zero-bound");
    assert_eq!(bundle(&client, &reply).verify(), Ok(()));
}

#[test]
fn what_cannot_be_objected_to() {
    let running = Running::new();
    let client = running.client();
    let cases = [
        (json!(["few-rounds", "few-rounds"]), 422, "/refuse_on/1"),
        (json!(["few-rounds", "setting-imbalance"]), 422, "/refuse_on/1"),
        (json!(["bad-weather"]), 400, "/refuse_on/0"),
    ];
    for (refuse_on, status, pointer) in cases {
        let mut profile = profile();
        profile["refuse_on"] = refuse_on;
        assert_eq!(client.put_rig("bench", &profile, &[]).expect(status).json()["pointer"], pointer, "{profile}");
    }
}
