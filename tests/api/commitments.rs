//! `/v1/rigs/{rig}/commitments` and `/v1/commitments`, and batches of rounds with memory

use std::{collections::BTreeMap, sync::Arc};

use bitassay::{
    bundle::Bundle,
    clock::Stamp,
    commitment::Commitment,
    request::{Request, RoundModel},
    verify::Discrepancy,
    witness::witness::Witness,
};
use serde_json::{Value, json};

use crate::{
    client::{Client, Reply},
    ledger::refusal,
    server::{Running, Solving, profile},
};

const ROUNDS: u64 = 400_000;

/// Blocks of rounds with memory are certified without a solve: this would show.
fn no_solver() -> Solving {
    Solving { certifier: Arc::new(|_: &Request| panic!("a solve that nobody needs")), ..Solving::default() }
}

fn memory() -> Value {
    let mut profile = profile();
    profile["rounds"] = json!("memory");
    profile["setting_distribution"] = json!([[0.5], [0.5]]);
    profile
}

fn with_rig() -> (Running, Client) {
    let running = Running::solving(no_solver());
    let client = running.client();
    client.put_rig("bench", &memory(), &[]).expect(201);
    (running, client)
}

fn order(rounds: u64) -> Value {
    json!({"expected_behaviour": [[[0.78, 0.22]], [[0.22, 0.78]]], "rounds": rounds})
}

/// A batch of so many rounds that shows what is expected.
fn batch(rounds: u64, started_at: &Value) -> Value {
    let first = rounds * 39 / 100;
    json!({"counts": [[[first, rounds / 2 - first]], [[rounds / 2 - first, first]]], "started_at": started_at, "ended_at": "2100-01-01T00:00:00Z"})
}

fn commit(client: &Client, rounds: u64) -> Value {
    client.post_commitment("bench", &order(rounds)).expect(201).json()
}

/// The record, and what is handed out for it.
fn bundle(client: &Client, reply: &Reply) -> Bundle {
    let path = reply.header("location").unwrap();
    let record = client.get(path).expect(200);
    let evidence = client.get(&format!("{path}/witness")).expect(200);
    Bundle::join(&record.body, &evidence.body).unwrap()
}

#[test]
fn what_was_committed_certifies_the_batches_that_follow() {
    let (running, client) = with_rig();
    let reply = client.post_commitment("bench", &order(ROUNDS)).expect(201);
    let committed = reply.json();
    let path = format!("/v1/commitments/{}", committed["id"].as_str().unwrap());
    assert_eq!(reply.header("location"), Some(path.as_str()));
    assert_eq!(client.get(&path).expect(200).body, reply.body);
    let evidence = client.get(&format!("{path}/witness")).expect(200).json();
    assert_eq!((&evidence["id"], &evidence["commitment"]), (&committed["id"], &committed["commitment"]));
    let witnesses: BTreeMap<String, Witness> = serde_json::from_value(evidence["witnesses"].clone()).unwrap();
    assert!(witnesses.iter().all(|(digest, witness)| witness.digest() == *digest));
    let rests_on: Commitment = serde_json::from_value(evidence["commitment"].clone()).unwrap();
    assert_eq!(rests_on.confirm(&witnesses.values().collect::<Vec<_>>()), Ok(()));
    client.get("/v1/commitments/00000000-0000-0000-0000-000000000000/witness").expect(404);
    assert_eq!((&committed["rig"], &committed["profile_version"], &committed["level"]), (&json!("bench"), &json!(1), &json!("lean")));
    assert_eq!(committed.get("current"), None);
    let commitment: Commitment = serde_json::from_value(committed["commitment"].clone()).unwrap();
    assert_eq!(commitment.digest(), committed["digest"]);
    assert_eq!((commitment.rounds, commitment.failure.estimation), (ROUNDS, 1e-10));

    let posted = client.post_batch("bench", "k", &batch(ROUNDS, &committed["recorded_at"])).expect(201);
    let record = posted.json();
    assert_eq!((&record["verdict"], &record["rounds"]), (&json!("certified"), &json!("memory")));
    assert_eq!((&record["commitment"], &record["block"]["commitment"]), (&committed["id"], &committed["digest"]));
    assert_eq!((&record["leakage_source"], &record["timings"]["solved_seconds"]), (&json!("profile"), &json!(0.0)));
    assert_eq!(record["concerns"], json!([]));
    // Exactly the expected frequencies, at settings as frequent as expected.
    let bits = record["certified_bits"].as_u64().unwrap();
    assert!(bits > 1000 && (bits as f64 - commitment.expected_bits).abs() <= 2.0, "{bits}, expected {}", commitment.expected_bits);

    let bundle = bundle(&client, &posted);
    assert_eq!(bundle.verify(), Ok(()));
    let mut boastful = bundle.clone();
    boastful.record["certified_bits"] = json!(bits + 1);
    assert!(matches!(&boastful.verify().unwrap_err()[..], [Discrepancy::Value { pointer, .. }] if pointer == "/certified_bits"));
    let alone = Bundle { commitment: None, ..bundle.clone() };
    assert_eq!(alone.verify(), Err(vec![Discrepancy::MissingCommitment]));
    assert!(matches!(Bundle { witnesses: Default::default(), ..bundle }.verify().unwrap_err()[..], [Discrepancy::Commitment(_)]));

    let refused = client.post_batch("bench", "poor", &{
        let mut poor = batch(ROUNDS, &committed["recorded_at"]);
        poor["counts"] = json!([[[100_000, 100_000]], [[100_000, 100_000]]]);
        poor
    });
    let problem = refused.clone().expect(422).json();
    assert_eq!(problem["reason"], "zero-bound");
    assert!(problem["detail"].as_str().unwrap().contains("committed factors"), "{problem}");
    assert_eq!(self::bundle(&client, &refused).verify(), Ok(()));

    // Witnesses are kept with the commitment, not again with each certification.
    let rows: std::collections::HashMap<_, _> = running.rows().into_iter().collect();
    assert_eq!((rows["commitment_witnesses"], rows["certification_witnesses"], rows["certification_commitments"]), (1, 0, 2));
}

#[test]
fn a_batch_that_began_before_its_commitment_is_refused() {
    let (_running, client) = with_rig();
    let committed = commit(&client, ROUNDS);
    let recorded_at: Stamp = committed["recorded_at"].as_str().unwrap().parse().unwrap();
    let earlier = Stamp::from_microseconds(recorded_at.microseconds() - 1).unwrap();
    let refused = client.post_batch("bench", "early", &batch(ROUNDS, &json!(earlier)));
    let problem = refused.clone().expect(422).json();
    assert_eq!((&problem["type"], &problem["reason"]), (&json!("urn:bitassay:problem:refused"), &json!("uncommitted")));
    let record = client.get(problem["certification"].as_str().unwrap()).expect(200).json();
    assert_eq!((&record["verdict"], &record["certified_bits"], record.get("block")), (&json!("refused"), &json!(0), None));
    assert_eq!(record["commitment"], committed["id"]);
    assert_eq!(bundle(&client, &refused).verify(), Ok(()));
}

#[test]
fn what_the_commitment_does_not_cover_leaves_no_trace() {
    let (running, client) = with_rig();
    let start = &commit(&client, ROUNDS)["recorded_at"];
    let before = running.rows();
    let blamed = |reply: Reply| {
        let problem = reply.expect(422).json();
        problem["errors"][0]["pointer"].as_str().or(problem["errors"][0]["parameter"].as_str()).unwrap().to_owned()
    };
    assert_eq!(blamed(client.post_batch("bench", "k", &batch(ROUNDS - 100, start))), "/counts");
    assert_eq!(blamed(client.post_batch("bench", "k", &batch(ROUNDS + 100, start))), "/counts");
    let mut leaking = batch(ROUNDS, start);
    leaking["leakage"] = json!(0.05);
    assert_eq!(blamed(client.post_batch("bench", "k", &leaking)), "/leakage");
    let mut empty = batch(ROUNDS, start);
    empty["counts"][1][0] = json!([0, 0]);
    assert_eq!(blamed(client.post_batch("bench", "k", &empty)), "/counts/1/0");
    let mut lost = batch(ROUNDS, start);
    lost["lost_rounds"] = json!({"counts": [[1], [0]], "treatment": {"as-outcome": 1}});
    assert_eq!(blamed(client.post_batch("bench", "k", &lost)), "/counts");

    let query = format!("started_at={}&ended_at=2100-01-01T00:00:00Z", start.as_str().unwrap());
    let rows = "preparation,measurement,outcome,count\n0,0,0,156000\n0,0,1,44000\n1,0,0,44000\n1,0,1,156000\n";
    assert_eq!(blamed(client.post_csv("bench", "k", &query, &rows.replace("44000", "44001"))), "");
    assert_eq!(blamed(client.post_csv("bench", "k", &format!("{query}&leakage=0.05"), rows)), "leakage");
    assert_eq!(running.rows(), before);
    client.post_csv("bench", "k", &query, rows).expect(201);
}

#[test]
fn lost_rounds_count_where_they_are_counted() {
    let (_running, client) = with_rig();
    let start = &commit(&client, ROUNDS)["recorded_at"];
    let mut lost = batch(ROUNDS - 1000, start);
    lost["lost_rounds"] = json!({"counts": [[500], [500]], "treatment": {"as-outcome": 1}});
    let posted = client.post_batch("bench", "k", &lost).expect(201);
    assert_eq!(posted.json()["total_rounds"], ROUNDS);
    assert_eq!(bundle(&client, &posted).verify(), Ok(()));
}

#[test]
fn a_newer_commitment_stands_for_later_batches() {
    let (running, client) = with_rig();
    let first = commit(&client, ROUNDS);
    let early = batch(ROUNDS, &first["recorded_at"]);
    let answered = client.post_batch("bench", "first", &early).expect(201);
    let second = commit(&client, 2 * ROUNDS);
    let listed = client.get("/v1/rigs/bench/commitments").expect(200).json();
    let found: Vec<_> = listed["items"].as_array().unwrap().iter().map(|item| (&item["id"], &item["current"])).collect();
    assert_eq!(found, [(&second["id"], &json!(true)), (&first["id"], &json!(false))]);
    assert_eq!(listed["items"][1]["commitment"], first["commitment"]);

    // The same batch sent again is answered as before. A new one is certified under what was recorded when it began, to the microsecond,
    // and has to fit that, whatever else there is.
    let again = client.post_batch("bench", "first", &early).expect(201);
    assert_eq!((again.header("idempotency-replayed"), &again.body), (Some("true"), &answered.body));
    let moment: Stamp = second["recorded_at"].as_str().unwrap().parse().unwrap();
    let before = json!(Stamp::from_microseconds(moment.microseconds() - 1).unwrap());
    let between = client.post_batch("bench", "between", &batch(ROUNDS, &before)).expect(201);
    assert_eq!((&between.json()["commitment"], &between.json()["block"]["commitment"]), (&first["id"], &first["digest"]));
    assert_eq!(bundle(&client, &between).verify(), Ok(()));
    assert_eq!(client.post_batch("bench", "too-many", &batch(2 * ROUNDS, &before)).expect(422).json()["pointer"], "/counts");
    assert_eq!(client.post_batch("bench", "too-few", &batch(ROUNDS, &second["recorded_at"])).expect(422).json()["pointer"], "/counts");
    let first_moment: Stamp = first["recorded_at"].as_str().unwrap().parse().unwrap();
    let too_early = json!(Stamp::from_microseconds(first_moment.microseconds() - 1).unwrap());
    let refused = client.post_batch("bench", "too-early", &batch(2 * ROUNDS, &too_early)).expect(422);
    assert_eq!(refused.json()["reason"], "uncommitted");
    let record = client.post_batch("bench", "second", &batch(2 * ROUNDS, &second["recorded_at"])).expect(201).json();
    assert_eq!(record["commitment"], second["id"]);
    assert_eq!(client.get(&format!("/v1/commitments/{}", first["id"].as_str().unwrap())).expect(200).json(), first);
    // What was certified under the older one is verified with the older one.
    assert_eq!(bundle(&client, &answered).verify(), Ok(()));

    let page = client.get("/v1/rigs/bench/commitments?limit=1").expect(200);
    let next = page.header("link").unwrap().trim_start_matches('<').split('>').next().unwrap().to_owned();
    let page = client.get(&next).expect(200).json();
    assert_eq!((&page["items"][0]["id"], &page["next"]), (&first["id"], &Value::Null));

    // A changed profile is not what was committed to.
    let mut leakier = memory();
    leakier["scenario"]["leakage"] = json!(0.12);
    client.put_rig("bench", &leakier, &[("if-match", "\"1\"")]).expect(200);
    let before = running.rows();
    let problem = client.post_batch("bench", "third", &batch(2 * ROUNDS, &second["recorded_at"])).expect(422).json();
    assert_eq!(problem["type"], "urn:bitassay:problem:no-commitment");
    assert_eq!(running.rows(), before);
    let listed = client.get("/v1/rigs/bench/commitments").expect(200).json();
    assert!(listed["items"].as_array().unwrap().iter().all(|item| item["current"] == false));
    let third = commit(&client, ROUNDS);
    assert_eq!(third["profile_version"], 2);
    client.post_batch("bench", "third", &batch(ROUNDS, &third["recorded_at"])).expect(201);
}

#[test]
fn what_was_seen_may_be_expected() {
    let (_running, client) = with_rig();
    let first = commit(&client, ROUNDS);
    let record = client.post_batch("bench", "k", &batch(ROUNDS, &first["recorded_at"])).expect(201).json();
    let order = json!({
        "certification": record["id"], "rounds": ROUNDS, "setting_distribution": [[0.75], [0.25]],
        "failure": {"estimation": 1e-6, "hashing": 1e-7}, "level": "standard",
    });
    let second = client.post_commitment("bench", &order).expect(201).json();
    let commitment = &second["commitment"];
    assert_eq!(commitment["expected_behaviour"], json!([[[0.78, 0.22]], [[0.22, 0.78]]]));
    assert_eq!(commitment["setting_distribution"], json!([[0.75], [0.25]]));
    assert_eq!((&commitment["failure"]["estimation"], &commitment["failure"]["hashing"]), (&json!(1e-6), &json!(1e-7)));
    assert_eq!(second["level"], "standard");
    // Settings are held against the distribution that was committed, not the profile's.
    let balanced = client.post_batch("bench", "balanced", &batch(ROUNDS, &second["recorded_at"]));
    let record = client.get(balanced.header("location").unwrap()).expect(200).json();
    assert_eq!((&record["concerns"][0]["concern"], &record["level"]), (&json!("setting-imbalance"), &json!("standard")));

    // Another rig's is not what this one showed, and other sizes do not fit.
    client.put_rig("other", &memory(), &[]).expect(201);
    let problem = client.post_commitment("other", &order).expect(422).json();
    assert_eq!(problem["pointer"], "/certification");
    let mut larger = memory();
    larger["scenario"]["preparations"] = json!(3);
    larger["setting_distribution"] = json!([[0.5], [0.25], [0.25]]);
    client.put_rig("bench", &larger, &[("if-match", "\"1\"")]).expect(200);
    let mut order = order;
    order.as_object_mut().unwrap().remove("setting_distribution");
    let problem = client.post_commitment("bench", &order).expect(422).json();
    assert_eq!(problem["pointer"], "/certification");
}

#[test]
fn what_would_certify_nothing_is_not_committed_to() {
    let (running, client) = with_rig();
    let before = running.rows();
    let nothing = json!({"expected_behaviour": [[[0.5, 0.5]], [[0.5, 0.5]]], "rounds": ROUNDS});
    for order in [nothing, order(20)] {
        let problem = client.post_commitment("bench", &order).expect(422).json();
        assert!(problem["detail"].as_str().unwrap().contains("nothing was recorded"), "{problem}");
    }
    assert_eq!(running.rows(), before);
    assert_eq!(client.get("/v1/rigs/bench/commitments").expect(200).json(), json!({"items": [], "next": null}));
}

#[test]
fn a_commitment_outlives_the_server() {
    let (mut running, client) = with_rig();
    let reply = client.post_commitment("bench", &order(ROUNDS)).expect(201);
    let committed = reply.json();
    let batch = batch(ROUNDS, &committed["recorded_at"]);
    let answered = client.post_batch("bench", "k", &batch).expect(201);
    let (database, folder) = (running.database.clone(), running.folder.take());
    running.stop();
    let again = Running::on(&database, no_solver());
    let client = again.client();
    assert_eq!(client.get(reply.header("location").unwrap()).expect(200).body, reply.body);
    assert_eq!(client.post_batch("bench", "k", &batch).expect(201).body, answered.body);
    let later = client.post_batch("bench", "later", &batch).expect(201);
    assert_eq!(later.json()["certified_bits"], answered.json()["certified_bits"]);
    assert_eq!(bundle(&client, &later).verify(), Ok(()));
    again.stop();
    drop(folder);
}

#[test]
fn independent_rounds_are_not_committed_to() {
    let running = Running::new();
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    client.post_commitment("bench", &order(ROUNDS)).expect(422);
    // A commitment made while the profile said memory does not touch batches after it says otherwise.
    client.put_rig("vault", &memory(), &[]).expect(201);
    client.post_commitment("vault", &order(ROUNDS)).expect(201);
    let mut independent = memory();
    independent["rounds"] = serde_json::to_value(RoundModel::Independent).unwrap();
    client.put_rig("vault", &independent, &[("if-match", "\"1\"")]).expect(200);
    let record = client.post_batch("vault", "k", &crate::server::batch(1000)).expect(201).json();
    assert_eq!((&record["rounds"], record.get("commitment")), (&json!("independent"), None));
    assert_eq!(client.get("/v1/rigs/vault/commitments").json()["items"][0]["current"], false);
}

#[test]
fn commitments_cannot_be_changed_removed_or_replaced() {
    let (running, client) = with_rig();
    let committed = commit(&client, ROUNDS);
    client.post_batch("bench", "k", &batch(ROUNDS, &committed["recorded_at"])).expect(201);
    client.put_rig("other", &memory(), &[]).expect(201);
    let other = client.post_commitment("other", &order(ROUNDS)).expect(201).json();
    let path = format!("/v1/commitments/{}", committed["id"].as_str().unwrap());
    let (before, rows) = (client.get(&path).expect(200), running.rows());
    let copy = "id, rig, profile_version, recorded_at, level, digest, document FROM commitments WHERE commitment = 0";
    let statements = [
        ("UPDATE commitments SET recorded_at = 0".to_owned(), "write-once"),
        ("DELETE FROM commitments".to_owned(), "write-once"),
        (format!("INSERT OR REPLACE INTO commitments SELECT 0, {copy}"), "next commitment"),
        (format!("INSERT OR REPLACE INTO commitments SELECT 2, {copy}"), "next commitment"),
        (format!("INSERT INTO commitments SELECT 3, {}", copy.replace("id, rig", "'x', rig")), "next commitment"),
        ("UPDATE commitment_witnesses SET commitment = 1".to_owned(), "write-once"),
        ("DELETE FROM commitment_witnesses".to_owned(), "write-once"),
        ("INSERT OR REPLACE INTO commitment_witnesses SELECT * FROM commitment_witnesses".to_owned(), "write-once"),
        ("UPDATE certification_commitments SET commitment = 1".to_owned(), "write-once"),
        ("DELETE FROM certification_commitments".to_owned(), "write-once"),
        ("INSERT OR REPLACE INTO certification_commitments VALUES (0, 0)".to_owned(), "write-once"),
        ("INSERT OR REPLACE INTO certification_commitments VALUES (0, 1)".to_owned(), "same rig"),
    ];
    for (sql, words) in statements {
        let refused = refusal(&running, &sql).unwrap_or_else(|| panic!("not refused: {sql}"));
        assert!(refused.contains(words), "{sql}: {refused}");
        assert_eq!((client.get(&path).expect(200).body, running.rows()), (before.body.clone(), rows.clone()), "{sql}");
    }
    // Another rig's commitment does not certify this rig's batches.
    let columns = "rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record";
    assert_eq!(refusal(&running, &format!("INSERT INTO certifications SELECT 1, 'x', {columns} FROM certifications")), None);
    let borrowed = "INSERT INTO certification_commitments VALUES (1, 1)";
    assert!(refusal(&running, borrowed).unwrap().contains("same rig"));
    assert_eq!(other["profile_version"], 1);
    assert_eq!(refusal(&running, "INSERT INTO certification_commitments VALUES (1, 0)"), None);
}
