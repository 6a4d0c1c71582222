//! `/v1/leakage`, and profiles and batches that refer to a budget

use std::sync::Arc;

use bitassay::{bundle::Bundle, certify::certify};
use serde_json::{Value, json};
use sha2::{Digest, Sha256};

use crate::{
    client::{Client, Reply},
    ledger::refusal,
    server::{Running, Solving, profile, query, with_rig},
};

const JSON: [(&str, &str); 1] = [("content-type", "application/json")];

fn post(client: &Client, budget: &Value) -> Reply {
    client.call("POST", "/v1/leakage", &JSON, Some(budget.to_string().as_bytes()))
}

/// Weak pulses, 3 % of which click at efficiency 1/2, and a side mode: the leakage out of the vacuum is a little below 0.07.
fn measured() -> Value {
    json!({ "carrier_dimension": 1, "contributions": [
        { "source": "coherent", "mean_photon_number":
            { "counts": 3000, "pulses": 100_000, "efficiency": 0.5, "detector": "threshold", "failure": 3e-10 } },
        { "source": "side-mode", "weight": { "outside": 3, "trials": 4_000_000, "failure": 1e-10 } }] })
}

/// A server with the real core, and the digest of a budget that it keeps.
fn with_budget() -> (Running, Client, String) {
    let running = Running::solving(Solving { certifier: Arc::new(certify), ..Solving::default() });
    let client = running.client();
    let digest = post(&client, &measured()).expect(201).json()["digest"].as_str().unwrap().to_owned();
    (running, client, digest)
}

fn profile_with(leakage: impl Into<Value>) -> Value {
    let mut profile = profile();
    profile["scenario"]["leakage"] = leakage.into();
    profile
}

fn batch() -> Value {
    json!({ "counts": [[[70_000, 30_000]], [[30_000, 70_000]]], "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z" })
}

fn bundle(client: &Client, record: &Value) -> Bundle {
    let path = format!("/v1/certifications/{}", record["id"].as_str().unwrap());
    Bundle::join(&client.get(&path).expect(200).body, &client.get(&format!("{path}/witness")).expect(200).body).unwrap()
}

/// Where a changed record is found out.
fn found_out(bundle: &Bundle, change: impl Fn(&mut Value)) -> Vec<String> {
    let mut record = Value::Object(bundle.record.clone());
    change(&mut record);
    let Value::Object(record) = record else { panic!("no record") };
    let found = Bundle { record, ..bundle.clone() }.verify().expect_err("the change was not noticed");
    found.iter().map(ToString::to_string).collect()
}

#[test]
fn a_budget_is_kept_under_its_digest() {
    let (running, client, digest) = with_budget();
    let reply = post(&client, &measured()).expect(200);
    let path = format!("/v1/leakage/{digest}");
    assert_eq!(reply.header("location"), Some(path.as_str()));
    let kept = client.get(&path).expect(200);
    assert_eq!(format!("sha256:{}", hex::encode(Sha256::digest(&kept.body))), digest);
    assert_eq!(kept.json(), reply.json()["budget"]);
    client.get("/v1/leakage/sha256:00").expect(404);

    let other = json!({ "carrier_dimension": 2, "contributions": [{ "source": "coherent", "mean_photon_number": 0.1 }] });
    let other = post(&client, &other).expect(201).json();
    let first = client.get("/v1/leakage?limit=1").expect(200);
    assert_eq!(first.json()["items"][0]["budget"]["digest"], other["digest"]);
    assert_eq!(
        (&first.json()["items"][0]["budget"]["leakage"], &first.json()["items"][0]["carrier_dimension"]),
        (&other["leakage"], &json!(2))
    );
    let next = first.header("link").unwrap().trim_start_matches('<').split('>').next().unwrap().to_owned();
    let second = client.get(&next).expect(200).json();
    assert_eq!((&second["items"][0]["budget"]["digest"], &second["next"]), (&json!(digest), &Value::Null));
    assert_eq!((&second["items"][0]["budget"]["failure"], second["items"].as_array().unwrap().len()), (&json!(4e-10), 1));

    let rows = running.rows();
    let statements = [
        ("UPDATE leakage_budgets SET document = '{}'", "write-once"),
        ("DELETE FROM leakage_budgets", "write-once"),
        ("INSERT OR REPLACE INTO leakage_budgets SELECT 0, digest, recorded_at, '{}' FROM leakage_budgets WHERE budget = 0", "next budget"),
        ("INSERT OR REPLACE INTO leakage_budgets SELECT 2, digest, recorded_at, '{}' FROM leakage_budgets WHERE budget = 0", "next budget"),
        ("INSERT INTO leakage_budgets SELECT 3, 'sha256:' || hex(zeroblob(32)), 0, '{}'", "next budget"),
    ];
    for (sql, words) in statements {
        assert!(refusal(&running, sql).unwrap().contains(words), "{sql}");
        assert_eq!((client.get(&path).expect(200).body, running.rows()), (kept.body.clone(), rows.clone()), "{sql}");
    }
}

#[test]
fn a_record_shows_the_budget_that_its_leakage_comes_from() {
    let (running, client, digest) = with_budget();
    client.put_rig("bench", &profile_with(digest.clone()), &[]).expect(201);
    // The rig's profile needs no other document to be understood.
    let shown = client.get("/v1/rigs/bench").expect(200).json();
    assert_eq!(shown["scenario"]["leakage"], client.get(&format!("/v1/leakage/{digest}")).expect(200).json());
    client.put_rig("bench", &profile_with(digest.clone()), &[]).expect(200);

    let report = post(&client, &measured()).expect(200).json();
    let record = client.post_batch("bench", "k", &batch()).expect(201).json();
    let account = &record["leakage_budget"];
    assert_eq!((&account["digest"], &account["leakage"], &account["failure"]), (&json!(digest), &report["leakage"], &json!(4e-10)));
    assert_eq!(account["contributions"][0]["share"], report["contributions"][0]["share"]);
    assert_eq!(record["failure"]["leakage"], 4e-10);
    let total = record["failure"]["total"].as_f64().unwrap();
    assert!((6e-10..6.000001e-10).contains(&total), "{total}");
    assert!(client.get("/v1/rigs/bench/yield").json()["total_failure"].as_f64().unwrap() >= total);
    let column: f64 = query(&running.database, async |mut connection| {
        sqlx::query_scalar("SELECT failure FROM certifications").fetch_one(&mut connection).await.unwrap()
    });
    assert_eq!(column, total);
    let assumptions: Vec<&str> = record["assumptions"].as_array().unwrap().iter().filter_map(Value::as_str).collect();
    for words in ["nothing else leaves the sender", "Leakage budget, coherent:", "Leakage budget, side-mode:"] {
        assert!(assumptions.iter().any(|assumption| assumption.contains(words)), "{words}: {assumptions:?}");
    }

    // A stated leakage of the same figure certifies the same, for less failure probability.
    client.put_rig("stated", &profile_with(report["leakage"].clone()), &[]).expect(201);
    let stated = client.post_batch("stated", "k", &batch()).expect(201).json();
    assert_eq!((&stated["targets"], stated.get("leakage_budget")), (&record["targets"], None));
    assert_eq!((stated["failure"].get("leakage"), stated["failure"]["total"].as_f64().unwrap() < total), (None, true));

    let bundle = bundle(&client, &record);
    assert_eq!(bundle.verify(), Ok(()));
    assert!(found_out(&bundle, |record| record["leakage_budget"]["leakage"] = json!(0.01)).concat().contains("/leakage_budget/leakage"));
    assert!(found_out(&bundle, |record| record["failure"]["leakage"] = json!(1e-12)).concat().contains("/failure/leakage"));
    assert!(
        found_out(&bundle, |record| drop(record.as_object_mut().unwrap().remove("leakage_budget"))).concat().contains("/leakage_budget")
    );
    // Fewer counts than were seen would make a smaller leakage: another digest, and another figure.
    let prettier = |record: &mut Value| record["scenario"]["leakage"]["contributions"][0]["mean_photon_number"]["counts"] = json!(10);
    assert!(found_out(&bundle, prettier).concat().contains("/leakage_budget/digest"));
    let number = |record: &mut Value| record["scenario"]["leakage"] = json!(0.01);
    assert!(found_out(&bundle, number).concat().contains("/leakage_budget"));
}

#[test]
fn a_batch_may_refer_to_a_budget_of_its_own() {
    let (_running, client, digest) = with_budget();
    client.put_rig("bench", &profile(), &[]).expect(201);
    let mut own = batch();
    own["leakage"] = json!(digest);
    let record = client.post_batch("bench", "k", &own).expect(201).json();
    assert_eq!((&record["leakage_source"], &record["leakage_budget"]["digest"]), (&json!("batch"), &json!(digest)));
    assert_eq!(bundle(&client, &record).verify(), Ok(()));
    own["leakage"] = measured();
    let inline = client.post_batch("bench", "inline", &own).expect(201).json();
    assert_eq!((&inline["leakage_budget"], &inline["targets"]), (&record["leakage_budget"], &record["targets"]));
    let rows = "preparation,measurement,outcome,count\n0,0,0,70000\n0,0,1,30000\n1,0,0,30000\n1,0,1,70000\n";
    let query = format!("started_at=2026-03-01T12:00:00Z&ended_at=2026-03-01T12:05:00Z&leakage=%22{digest}%22");
    let csv = client.post_csv("bench", "rows", &query, rows).expect(201).json();
    assert_eq!(csv["leakage_budget"], record["leakage_budget"]);
}

#[test]
fn a_commitment_holds_the_budget() {
    let (_running, client, digest) = with_budget();
    let mut memory = profile_with(digest.clone());
    memory["rounds"] = json!("memory");
    memory["setting_distribution"] = json!([[0.5], [0.5]]);
    client.put_rig("bench", &memory, &[]).expect(201);
    let order = json!({ "expected_behaviour": [[[0.7, 0.3]], [[0.3, 0.7]]], "rounds": 400_000 });
    let committed = client.post_commitment("bench", &order).expect(201).json();
    let counts = json!([[[140_000, 60_000]], [[60_000, 140_000]]]);
    let batch = json!({ "counts": counts, "started_at": committed["recorded_at"], "ended_at": "2100-01-01T00:00:00Z" });
    let record = client.post_batch("bench", "k", &batch).expect(201).json();
    assert_eq!((&record["leakage_budget"]["digest"], &record["failure"]["leakage"]), (&json!(digest), &json!(4e-10)));
    let bundle = bundle(&client, &record);
    assert_eq!(bundle.verify(), Ok(()));
    let prettier = |record: &mut Value| record["scenario"]["leakage"]["contributions"][0]["mean_photon_number"]["counts"] = json!(10);
    assert!(!found_out(&bundle, prettier).is_empty());
}

#[test]
fn a_budget_that_does_not_fit_is_refused_with_a_pointer() {
    let (running, client, digest) = with_budget();
    let before = running.rows();
    let unknown = format!("sha256:{}", "0".repeat(64));
    let mut every_emission = profile_with(digest.clone());
    every_emission["scenario"]["leakage_holds"] = json!("every-emission");
    let mut larger = profile_with(digest.clone());
    larger["scenario"]["carrier_dimension"] = json!(2);
    let careless = json!({ "carrier_dimension": 1, "contributions": [
        { "source": "side-mode", "weight": { "outside": 3, "trials": 40, "failure": 0.3 } },
        { "source": "side-mode", "weight": { "outside": 3, "trials": 40, "failure": 0.3 } }] });
    let mut impossible = measured();
    impossible["contributions"][0]["mean_photon_number"]["efficiency"] = json!(1.5);
    let cases = [
        (profile_with(unknown.clone()), 422, "/scenario/leakage"),
        (profile_with("sha256:short"), 400, "/scenario/leakage"),
        (larger, 422, "/scenario/leakage"),
        (every_emission.clone(), 422, "/scenario/leakage_holds"),
        (profile_with(careless), 422, "/scenario/leakage"),
        (profile_with(impossible), 422, "/scenario/leakage/contributions/0/mean_photon_number/efficiency"),
        (profile_with(json!({ "carrier_dimension": 1 })), 400, "/scenario/leakage"),
    ];
    for (profile, status, pointer) in cases {
        let problem = client.put_rig("bench", &profile, &[]).expect(status).json();
        assert_eq!(problem["pointer"], pointer, "{profile}: {problem}");
    }
    assert_eq!(running.rows(), before);

    every_emission["scenario"]["leakage"] = json!(0.07);
    client.put_rig("bench", &every_emission, &[]).expect(201);
    let before = running.rows();
    for leakage in [unknown.clone(), digest] {
        let mut own = batch();
        own["leakage"] = json!(leakage);
        assert_eq!(client.post_batch("bench", "k", &own).expect(422).json()["pointer"], "/leakage");
    }
    let query = format!("started_at=2026-03-01T12:00:00Z&ended_at=2026-03-01T12:05:00Z&leakage=%22{unknown}%22");
    let problem = client.post_csv("bench", "k", &query, "preparation,measurement,outcome,count\n0,0,0,7\n").expect(422).json();
    assert_eq!(problem["errors"][0]["parameter"], "leakage");
    assert_eq!(running.rows(), before);
}

#[test]
fn a_digest_means_nothing_without_a_service() {
    let scenario = profile_with(format!("sha256:{}", "0".repeat(64)))["scenario"].clone();
    let fault = serde_json::from_value::<bitassay::scenario::Scenario>(scenario).unwrap_err().to_string();
    assert!(fault.contains("/leakage") && fault.contains("not at hand"), "{fault}");
}

#[test]
fn a_budget_is_added_up_with_its_assumptions() {
    let (_running, client) = with_rig();
    // Poisson tail P(n ≥ 2) at mean 0.1, a handbook value: 0.00468; plus a side mode of 0.001.
    let budget = json!({ "carrier_dimension": 2, "contributions": [
        { "source": "coherent", "mean_photon_number": 0.1 }, { "source": "side-mode", "weight": 0.001 }] });
    let report = post(&client, &budget).expect(201).json();
    let leakage = report["leakage"].as_f64().unwrap();
    assert!((leakage - 0.005_678_840_160_444).abs() < 1e-12, "{leakage}");
    assert_eq!((&report["leakage_holds"], &report["failure"]), (&json!("on-average"), &json!(0.0)));
    assert_eq!(report["contributions"].as_array().unwrap().len(), 2);
    assert!(report["contributions"][0]["assumptions"].as_array().is_some_and(|assumptions| !assumptions.is_empty()));
}

#[test]
fn what_cannot_be_measured_is_refused_with_a_pointer() {
    let (_running, client) = with_rig();
    let coherent = json!({ "source": "coherent", "mean_photon_number": 0.1 });
    let cases = [
        (json!({ "carrier_dimension": 0, "contributions": [coherent] }), 422, "/carrier_dimension"),
        (json!({ "carrier_dimension": 2, "contributions": [] }), 422, "/contributions"),
        (
            json!({ "carrier_dimension": 2, "contributions": [{ "source": "coherent", "mean_photon_number": -0.1 }] }),
            422,
            "/contributions/0/mean_photon_number",
        ),
        (json!({ "carrier_dimension": 2, "contributions": [{ "source": "g2", "g2": 0.02 }] }), 400, "/contributions/0"),
        (
            json!({ "carrier_dimension": 2, "contributions": [
                { "source": "heralded", "pairs": "thermal", "mean_pairs": 0.1, "herald_efficiency": 1.2 }] }),
            422,
            "/contributions/0/herald_efficiency",
        ),
        (json!({ "carrier_dimension": 2, "contributions": [coherent], "more": 1 }), 400, "/more"),
    ];
    for (budget, status, pointer) in cases {
        let problem = post(&client, &budget).expect(status).json();
        assert_eq!(problem["pointer"], pointer, "{budget}: {problem}");
    }
}
