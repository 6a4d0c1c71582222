//! Batches that kept witnesses certify: without a solve, to the same figures that `verify` recomputes, across rigs and restarts.

use std::{
    path::Path,
    sync::{
        Arc, Mutex,
        atomic::{AtomicUsize, Ordering},
        mpsc,
    },
};

use bitassay::{bundle::Bundle, certify::certify, request::Request};
use serde_json::{Value, json};
use sqlx::Connection;

use crate::{
    client::{Client, Reply},
    server::{Running, Solving, query},
};

/// As other tests' profile, but with kept witnesses.
fn profile() -> Value {
    let mut profile = crate::server::profile();
    profile.as_object_mut().unwrap().remove("freshness");
    profile
}

/// The real core, and how often it was asked.
fn counted() -> (Solving, Arc<AtomicUsize>) {
    let solves = Arc::new(AtomicUsize::new(0));
    let count = Arc::clone(&solves);
    let certifier = move |request: &Request| {
        count.fetch_add(1, Ordering::SeqCst);
        certify(request)
    };
    (Solving { certifier: Arc::new(certifier), ..Solving::default() }, solves)
}

fn with_rig() -> (Running, Client, Arc<AtomicUsize>) {
    let (solving, solves) = counted();
    let running = Running::solving(solving);
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    (running, client, solves)
}

/// A hundred thousand rounds at each of the two settings, so many of them right.
fn batch(right: u64) -> Value {
    let wrong = 100_000 - right;
    json!({"counts": [[[right, wrong]], [[wrong, right]]], "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z"})
}

fn origin(reply: &Reply) -> Value {
    reply.json()["targets"][0]["origin"].clone()
}

/// The certification is confirmed offline, by what the service hands out.
fn confirm(client: &Client, reply: &Reply) {
    let path = reply.header("location").unwrap();
    let (record, witnesses) = (client.get(path).expect(200), client.get(&format!("{path}/witness")).expect(200));
    assert_eq!(Bundle::join(&record.body, &witnesses.body).unwrap().verify(), Ok(()));
}

#[test]
fn a_batch_like_one_that_was_solved_is_not_solved() {
    let (_running, client, solves) = with_rig();
    let first = client.post_batch("bench", "a", &batch(78_000)).expect(201);
    assert_eq!(origin(&first), "fresh");
    let second = client.post_batch("bench", "b", &batch(78_100)).expect(201);
    assert_eq!((origin(&second), solves.load(Ordering::SeqCst)), (json!("kept"), 1));
    assert!(second.json()["certified_bits"].as_u64() > first.json()["certified_bits"].as_u64());
    assert_eq!(second.json()["timings"]["solved_seconds"], 0.0);
    confirm(&client, &first);
    confirm(&client, &second);
    // Sent again, it is answered again, though nobody looked before it was certified.
    let again = client.post_batch("bench", "b", &batch(78_100)).expect(201);
    assert_eq!((again.header("idempotency-replayed"), &again.body), (Some("true"), &second.body));
    client.post_batch("bench", "b", &batch(78_101)).expect(422);
}

#[test]
fn a_drifted_behaviour_is_solved() {
    let (_running, client, solves) = with_rig();
    client.post_batch("bench", "a", &batch(78_000)).expect(201);
    let drifted = client.post_batch("bench", "b", &batch(70_000)).expect(201);
    assert_eq!((origin(&drifted), solves.load(Ordering::SeqCst)), (json!("fresh"), 2));
    // More than 0.8 is out of reach: only a solve can say so, and by how much.
    let outside = client.post_batch("bench", "c", &batch(83_000)).expect(422);
    assert_eq!((&outside.json()["reason"], solves.load(Ordering::SeqCst)), (&json!("outside-model"), 3));
}

#[test]
fn freshness_is_the_operators_choice() {
    let (_running, client, solves) = with_rig();
    for (rig, freshness, rights) in
        [("always", json!("always"), [78_000, 78_000]), ("exacting", json!({"accept_loss": 0}), [78_200, 78_400])]
    {
        let mut profile = profile();
        profile["freshness"] = freshness;
        client.put_rig(rig, &profile, &[]).expect(201);
        let before = solves.load(Ordering::SeqCst);
        for (key, right) in ["a", "b"].into_iter().zip(rights) {
            assert_eq!(origin(&client.post_batch(rig, key, &batch(right)).expect(201)), "fresh", "{rig}");
        }
        assert_eq!(solves.load(Ordering::SeqCst), before + 2, "{rig}");
    }
    let mut profile = profile();
    profile["freshness"] = json!({"accept_loss": 2});
    let refused = client.put_rig("careless", &profile, &[]).expect(422);
    assert!(refused.text().contains("/freshness/accept_loss"), "{}", refused.text());
}

#[test]
fn rigs_share_what_is_kept() {
    let (_running, client, solves) = with_rig();
    client.post_batch("bench", "a", &batch(78_000)).expect(201);
    client.put_rig("other", &profile(), &[]).expect(201);
    let other = client.post_batch("other", "a", &batch(77_950)).expect(201);
    assert_eq!((origin(&other), solves.load(Ordering::SeqCst)), (json!("kept"), 1));
    confirm(&client, &other);
    // A smaller leakage was not solved yet: the model may not reach so far.
    let mut smaller = profile();
    smaller["scenario"]["leakage"] = json!(0.09);
    client.put_rig("smaller", &smaller, &[]).expect(201);
    assert_eq!(origin(&client.post_batch("smaller", "a", &batch(77_000)).expect(201)), "fresh");
}

/// A server with one solved batch, stopped again.
fn solved_once(database: &Path) {
    let (solving, _) = counted();
    let running = Running::on(database, solving);
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    client.post_batch("bench", "a", &batch(78_000)).expect(201);
    running.stop();
}

/// After a restart what is kept is used at once, and compared with a new solve, for which nobody waits.
#[test]
fn a_restart_keeps_what_is_kept() {
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("ledger.sqlite");
    solved_once(&database);
    let (begun, beginning) = mpsc::channel();
    let (release, held) = mpsc::channel::<()>();
    let (begun, held) = (Mutex::new(begun), Mutex::new(held));
    let certifier = move |request: &Request| {
        begun.lock().unwrap().send(()).unwrap();
        // Until the test lets go.
        let _ = held.lock().unwrap().recv();
        certify(request)
    };
    let running = Running::on(&database, Solving { certifier: Arc::new(certifier), ..Solving::default() });
    let client = running.client();
    let kept = client.post_batch("bench", "b", &batch(78_100)).expect(201);
    assert_eq!(origin(&kept), "kept");
    confirm(&client, &kept);
    beginning.recv().unwrap();
    // The solve is under way, and postings are answered.
    assert_eq!(origin(&client.post_batch("bench", "c", &batch(78_050)).expect(201)), "kept");
    drop(release);
    running.stop();
    // Two solves, each with a witness of the guessing probability and one of the power entropy.
    assert_eq!(rows(&database), 4, "the witnesses of the second solve were not kept");
}

fn rows(database: &Path) -> i64 {
    query(database, async |mut connection| {
        let number = sqlx::query_scalar("SELECT COUNT(*) FROM kept_witnesses").fetch_one(&mut connection).await.unwrap();
        connection.close().await.unwrap();
        number
    })
}

/// Whatever happens to the file: a witness that does not pass the check certifies nothing, and the service starts all the same.
#[test]
fn a_corrupted_witness_is_dropped() {
    // A multiplier that was moved; a document that is none; places of another shape; another level.
    let corruptions = [
        "UPDATE witnesses SET document = json_set(document, '$.behaviour[0][0][0]', json_extract(document, '$.behaviour[0][0][0]') - 1000)",
        "UPDATE witnesses SET document = '{}'",
        "UPDATE kept_witnesses SET made_for = '{}'",
        "UPDATE kept_witnesses SET made_for = json_set(made_for, '$.leakage', json('[0.1]'))",
        "UPDATE kept_witnesses SET made_for = json_set(made_for, '$.level', 'sharp')",
    ];
    for corruption in corruptions {
        let folder = tempfile::tempdir().unwrap();
        let database = folder.path().join("ledger.sqlite");
        solved_once(&database);
        query(&database, async |mut connection| {
            sqlx::query("DROP TRIGGER witnesses_refuse_update").execute(&mut connection).await.unwrap();
            let changed = sqlx::query(sqlx::AssertSqlSafe(corruption)).execute(&mut connection).await.unwrap();
            assert!(changed.rows_affected() > 0, "{corruption}");
            connection.close().await.unwrap();
        });
        let (solving, solves) = counted();
        let running = Running::on(&database, solving);
        let reply = running.client().post_batch("bench", "b", &batch(78_100));
        // Where evidence was changed, the ledger may have found that out by now, and takes nothing more.
        if reply.status != 503 || !corruption.contains("witnesses SET document") {
            assert_eq!((origin(&reply.expect(201)), solves.load(Ordering::SeqCst)), (json!("fresh"), 1), "{corruption}");
        }
        running.stop();
    }
}
