//! Killed at random moments, with rigs posting and an auditor asking.

use std::{
    collections::BTreeMap,
    sync::{Mutex, mpsc},
    time::Duration,
};

use bitassay::ledger::checkpoint::{Checkpoint, Verifier};
use rand::{RngExt, SeedableRng, rngs::StdRng};
use serde_json::Value;

use crate::{
    client::{Client, Reply},
    process::{Process, Site, batch, bitassay, on, status},
};

const POSTERS: u64 = 4;

fn number(variable: &str, otherwise: u64) -> u64 {
    std::env::var(variable).map_or(otherwise, |text| text.parse().unwrap())
}

/// The answer, or `None` if the server has gone.
fn post(client: &Client, key: &str, batch: &Value) -> Option<Reply> {
    let headers = [("content-type", "application/json"), ("idempotency-key", key)];
    client.try_call("POST", "/v1/rigs/bench/batches", &headers, Some(batch.to_string().as_bytes()))
}

#[test]
fn what_was_acknowledged_survives_every_kill() {
    let (kills, seed) = (number("BITASSAY_KILLS", 8), number("BITASSAY_SEED", 1));
    let mut random = StdRng::seed_from_u64(seed);
    let site = Site::new();
    let (process, began) = site.first();
    let key: Verifier = process.client.get("/v1/ledger/key").expect(200).text().trim().parse().unwrap();
    let mut running = Some(process);
    let mut acknowledged: BTreeMap<u64, Reply> = BTreeMap::new();
    let mut signed: BTreeMap<u64, Checkpoint> = BTreeMap::new();
    let (mut posted, mut kept_unheard, mut at_start) = (0, 0, 0);
    for kill in 0..kills {
        let mut process = running.take().unwrap();
        let next = Mutex::new(posted);
        let (answered, answers) = mpsc::channel();
        let (saw, seen) = mpsc::channel();
        std::thread::scope(|scope| {
            for _ in 0..POSTERS {
                let (client, answered, next, began) = (process.client.clone(), answered.clone(), &next, &began);
                scope.spawn(move || {
                    loop {
                        let number = {
                            let mut next = next.lock().unwrap();
                            *next += 1;
                            *next - 1
                        };
                        let reply = post(&client, &format!("batch-{number}"), &batch(number, began));
                        let Some(reply) = reply else { return };
                        answered.send((number, reply)).unwrap();
                    }
                });
            }
            let (client, key) = (process.client.clone(), &key);
            scope.spawn(move || {
                while let Some(reply) = client.try_call("GET", "/v1/ledger/checkpoint", &[], None) {
                    saw.send(key.confirm(reply.expect(200).text()).unwrap()).unwrap();
                }
            });
            std::thread::sleep(Duration::from_millis(random.random_range(1..200)));
            process.child.kill().unwrap();
            process.child.wait().unwrap();
        });
        drop(answered);
        posted = next.into_inner().unwrap();
        let heard: BTreeMap<u64, Reply> = answers.into_iter().collect();
        let mut fresh: Vec<Checkpoint> = signed.last_key_value().map(|(_, checkpoint)| checkpoint.clone()).into_iter().collect();
        for checkpoint in seen {
            fresh.push(checkpoint.clone());
            let before = signed.insert(checkpoint.size, checkpoint.clone());
            assert!(before.is_none_or(|before| before == checkpoint), "two roots of one size");
        }
        if random.random_bool(0.25) {
            // Killed again while it starts, perhaps while it brings the database up to date.
            let mut child = site.command(bitassay(), &site.database()).spawn().unwrap();
            std::thread::sleep(Duration::from_millis(random.random_range(0..40)));
            child.kill().unwrap();
            child.wait().unwrap();
            at_start += 1;
        }

        let process = site.serve();
        // Everything is gone through before this is signed: rows and leaves stand or fall together.
        let now = process.checkpoint();
        for old in &fresh {
            assert!(process.extends(old, &now), "kill {kill}: {old:?} is not the beginning of {now:?}");
        }
        for (number, reply) in &heard {
            assert_eq!(reply.status, status(*number), "{}", reply.text());
            let again = process.post(*number, &began);
            assert_eq!((again.status, again.header("idempotency-replayed"), &again.body), (reply.status, Some("true"), &reply.body));
        }
        // Whoever did not hear sends again, and hears of one certification, the old one or a new one.
        for number in acknowledged.len() as u64..posted {
            if heard.contains_key(&number) {
                continue;
            }
            let reply = process.post(number, &began);
            assert_eq!(reply.status, status(number), "{}", reply.text());
            kept_unheard += u64::from(reply.header("idempotency-replayed").is_some());
            acknowledged.insert(number, reply);
        }
        acknowledged.extend(heard);
        running = Some(process);
    }
    let process = running.take().unwrap();
    let last = process.checkpoint();
    for old in signed.values() {
        assert!(process.extends(old, &last), "{old:?} is not the beginning of {last:?}");
    }
    check(&site, &process, &acknowledged, posted);
    println!(
        "{kills} kills while serving and {at_start} while starting (seed {seed}): {} batches answered, none lost, none twice; {kept_unheard} were kept \
         without their poster hearing of it; {} checkpoints seen, all beginnings of the last one of {} entries",
        acknowledged.len(),
        signed.len(),
        last.size
    );
}

/// Every batch is there once, with the record that was answered.
fn check(site: &Site, process: &Process, acknowledged: &BTreeMap<u64, Reply>, posted: u64) {
    assert_eq!(acknowledged.len() as u64, posted);
    assert!(posted > 0);
    let rows: Vec<(String, String, i64)> = on(&site.database(), async |mut connection| {
        let sql = "SELECT s.idempotency_key, COALESCE(s.refusal, c.record), l.leaf FROM certifications c JOIN submissions s USING (entry) \
                   JOIN tree_leaves l ON l.kind = 'certification' AND l.subject = c.id";
        sqlx::query_as(sql).fetch_all(&mut connection).await.unwrap()
    });
    assert_eq!(rows.len() as u64, posted);
    for (key, answer, _) in &rows {
        let number: u64 = key.trim_start_matches("batch-").parse().unwrap();
        let reply = &acknowledged[&number];
        if reply.status == 201 {
            assert_eq!(reply.text(), answer);
        } else {
            assert!(process.client.get(reply.json()["certification"].as_str().unwrap()).expect(200).json()["verdict"] == "refused");
        }
    }
    let counts: Vec<i64> = on(&site.database(), async |mut connection| {
        let sql = "SELECT COUNT(*) FROM certifications UNION ALL SELECT COUNT(*) FROM submissions UNION ALL SELECT MAX(entry) + 1 FROM certifications \
                   UNION ALL SELECT COUNT(*) FROM tree_leaves WHERE kind = 'certification'";
        sqlx::query_scalar(sql).fetch_all(&mut connection).await.unwrap()
    });
    assert!(counts.iter().all(|count| *count as u64 == posted), "{counts:?} of {posted}");
}
