//! `/v1/rigs/{rig}/yield`

use serde_json::{Value, json};

use crate::server::{batch, profile, with_rig};

#[test]
fn a_yield_adds_up_what_was_certified_and_what_it_cost() {
    let (_running, client) = with_rig();
    client.put_rig("other", &profile(), &[]).expect(201);
    client.post_batch("other", "k", &batch(1000)).expect(201);
    let empty = client.get("/v1/rigs/bench/yield").expect(200).json();
    assert_eq!((&empty["batches"], &empty["latest"], &empty["mean_bits_per_round"]), (&json!(0), &Value::Null, &Value::Null));

    client.post_batch("bench", "a", &batch(1000)).expect(201); // 4000 rounds, 400 bits
    client.post_batch("bench", "b", &batch(3000)).expect(201); // 6000 rounds, 600 bits
    let refused = client.post_batch("bench", "c", &batch(1001)).expect(422).json(); // 4001 rounds
    let sum = client.get("/v1/rigs/bench/yield").expect(200).json();
    assert_eq!(sum["batches"], 3);
    assert_eq!((&sum["certified"], &sum["estimates"], &sum["refusals"]), (&json!(2), &json!(0), &json!(1)));
    assert_eq!((&sum["total_bits"], &sum["total_rounds"]), (&json!(1000), &json!(14001)));
    let mean = sum["mean_bits_per_round"].as_f64().unwrap();
    assert!(mean <= 1000.0 / 14001.0 && mean > 0.0714, "{mean}");
    assert_eq!((&sum["latest"]["certification"], &sum["latest"]["verdict"]), (&refused["certification"], &json!("refused")));
    let record = client.get(refused["certification"].as_str().unwrap()).json();
    let failure = record["failure"]["total"].as_f64().unwrap();
    assert!((sum["total_failure"].as_f64().unwrap() - 3.0 * failure).abs() < 1e-15);

    let newest = client.get("/v1/rigs/bench/yield?batches=2").expect(200).json();
    assert_eq!((&newest["batches"], &newest["total_bits"], &newest["batches_asked"]), (&json!(2), &json!(600), &json!(2)));
    let since = format!("/v1/rigs/bench/yield?since={}", record["recorded_at"].as_str().unwrap());
    assert_eq!(client.get(&since).expect(200).json()["batches"], 1);
}
