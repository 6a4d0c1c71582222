//! `/v1/rigs/{rig}/batches`

use std::{
    sync::{
        Arc, Condvar, Mutex,
        atomic::{AtomicUsize, Ordering},
        mpsc,
    },
    time::{Duration, Instant},
};

use bitassay::{
    certify::certify,
    ledger::{Ledger, LedgerError, key::KeyError},
};
use serde_json::{Value, json};

use crate::server::{PANICS, Running, Solving, batch, profile, stand_in, with_rig};

#[test]
fn a_certified_batch_is_answered_with_its_record() {
    let (_running, client) = with_rig();
    let reply = client.post_batch("bench", "k", &batch(1000)).expect(201);
    let record = reply.json();
    let path = format!("/v1/certifications/{}", record["id"].as_str().unwrap());
    assert_eq!(reply.header("location"), Some(path.as_str()));
    assert_eq!(reply.header("idempotency-replayed"), None);
    assert_eq!(record["verdict"], "certified");
    assert_eq!(record["rig"], "bench");
    assert_eq!(record["profile_version"], 1);
    assert_eq!(record["started_at"], "2026-03-01T12:00:00.000000Z");
    assert_eq!(record["counts"], json!([[[1000, 1000]], [[1000, 1000]]]));
    assert_eq!(record["certified_bits"], 400);
    assert_eq!(record["leakage_source"], "profile");
    assert!(record["timings"]["solved_seconds"].is_f64());
    // Answered as it is kept.
    assert_eq!(client.get(&path).expect(200).body, reply.body);
}

#[test]
fn an_estimate_is_answered_with_its_record_too() {
    let (_running, client) = with_rig();
    let record = client.post_batch("bench", "k", &batch(2)).expect(201).json();
    assert_eq!((&record["verdict"], &record["certified_bits"]), (&json!("estimate"), &json!(0)));
}

#[test]
fn a_refused_batch_is_a_problem_that_links_its_record() {
    let (_running, client) = with_rig();
    let reply = client.post_batch("bench", "k", &batch(999)).expect(422);
    assert_eq!(reply.header("content-type"), Some("application/problem+json"));
    let problem = reply.json();
    assert_eq!(problem["type"], "urn:bitassay:problem:refused");
    assert_eq!(problem["status"], 422);
    assert_eq!(problem["reason"], "zero-bound");
    assert_eq!(reply.header("location"), problem["certification"].as_str());
    let record = client.get(problem["certification"].as_str().unwrap()).expect(200).json();
    assert_eq!((&record["verdict"], &record["reason"]), (&json!("refused"), &json!("zero-bound")));
}

#[test]
fn the_real_core_certifies_and_refuses() {
    let running = Running::solving(Solving { certifier: Arc::new(certify), ..Solving::default() });
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    let counts = |counts: Value| json!({"counts": counts, "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:00:00Z"});

    let good = client.post_batch("bench", "good", &counts(json!([[[780_000, 220_000]], [[220_000, 780_000]]]))).expect(201).json();
    assert!(good["certified_bits"].as_u64().unwrap() > 0, "{good}");
    let path = format!("/v1/certifications/{}/witness", good["id"].as_str().unwrap());
    let witnesses = client.get(&path).expect(200).json();
    assert_eq!(witnesses["certification"], good["id"]);
    assert!(witnesses["witnesses"][good["targets"][0]["witness"].as_str().unwrap()].is_object(), "{witnesses}");

    // Two states that are nearly the same vacuum cannot be told apart so well.
    let outside = client.post_batch("bench", "outside", &counts(json!([[[990_000, 10_000]], [[10_000, 990_000]]]))).expect(422).json();
    assert_eq!(outside["reason"], "outside-model");
    assert!(outside["smallest_uniform_leakage"].as_f64().unwrap() > 0.1, "{outside}");
    let witness = client.get(&format!("{}/witness", outside["certification"].as_str().unwrap())).expect(200).json();
    assert_eq!(witness["witnesses"].as_object().unwrap().len(), 2);

    let zero = client.post_batch("bench", "zero", &counts(json!([[[500, 500]], [[500, 500]]]))).expect(422).json();
    assert_eq!(zero["reason"], "zero-bound");
}

#[test]
fn a_batch_sent_again_is_answered_again() {
    let (running, client) = with_rig();
    for (key, body, status) in [("good", batch(1000), 201), ("bad", batch(999), 422)] {
        let first = client.post_batch("bench", key, &body).expect(status);
        let rows = running.rows();
        let again = client.post_batch("bench", key, &body).expect(status);
        assert_eq!(again.body, first.body);
        for header in ["location", "content-type"] {
            assert_eq!(again.header(header), first.header(header));
        }
        assert_eq!(again.header("idempotency-replayed"), Some("true"));
        let reused = client.post_batch("bench", key, &batch(1002)).expect(422).json();
        assert_eq!(reused["type"], "urn:bitassay:problem:key-reused");
        assert_eq!(reused["errors"][0]["header"], "Idempotency-Key");
        assert_eq!(running.rows(), rows);
    }
    // Another rig's keys are its own.
    client.put_rig("other", &profile(), &[]).expect(201);
    let other = client.post_batch("other", "good", &batch(1002)).expect(201);
    assert_eq!(other.header("idempotency-replayed"), None);
}

#[test]
fn an_answer_outlives_the_profile_and_the_process() {
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("ledger.sqlite");
    let running = Running::on(&database, Solving::default());
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    let good = client.post_batch("bench", "good", &batch(1000)).expect(201);
    let bad = client.post_batch("bench", "bad", &batch(999)).expect(422);
    let mut changed = profile();
    changed["scenario"]["measurements"] = json!(2);
    client.put_rig("bench", &changed, &[("if-match", "\"1\"")]).expect(200);
    running.stop();
    assert!(!database.with_extension("sqlite-wal").exists(), "the log was not folded into the file");

    let running = Running::on(&database, Solving::default());
    let client = running.client();
    assert_eq!(client.get("/v1/rigs/bench").header("etag"), Some("\"2\""));
    assert_eq!(client.post_batch("bench", "good", &batch(1000)).expect(201).body, good.body);
    assert_eq!(client.post_batch("bench", "bad", &batch(999)).expect(422).body, bad.body);
    assert_eq!(client.get(good.header("location").unwrap()).expect(200).body, good.body);
    assert_eq!(client.get("/v1/certifications").json()["items"].as_array().unwrap().len(), 2);
    // Under the new profile the same counts have the wrong shape.
    client.post_batch("bench", "new", &batch(1000)).expect(422);
}

#[test]
fn the_same_batch_posted_at_once_is_certified_once() {
    let solves = Arc::new(AtomicUsize::new(0));
    let counting = Arc::clone(&solves);
    let running = Running::solving(Solving {
        certifier: Arc::new(move |request| {
            counting.fetch_add(1, Ordering::SeqCst);
            std::thread::sleep(Duration::from_millis(50));
            stand_in(request)
        }),
        ..Solving::default()
    });
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    let threads: Vec<_> = (0..8)
        .map(|_| {
            let client = client.clone();
            std::thread::spawn(move || client.post_batch("bench", "k", &batch(1000)).expect(201))
        })
        .collect();
    let replies: Vec<_> = threads.into_iter().map(|thread| thread.join().unwrap()).collect();
    assert!(replies.iter().all(|reply| reply.body == replies[0].body));
    assert_eq!(replies.iter().filter(|reply| reply.header("idempotency-replayed").is_none()).count(), 1);
    assert_eq!(solves.load(Ordering::SeqCst), 1);
    assert_eq!(client.get("/v1/certifications").json()["items"].as_array().unwrap().len(), 1);
}

/// Two servers on one file would sign two histories.
#[test]
fn a_second_server_on_the_file_is_turned_away() {
    let running = Running::new();
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().unwrap();
    let refused = runtime.block_on(Ledger::open(&running.database)).map(|_| ());
    assert!(matches!(refused, Err(LedgerError::Key(KeyError::Taken { .. }))), "{refused:?}");
    running.client().get("/livez").expect(200);
}

/// A gate that solves wait at.
#[derive(Default)]
struct Gate {
    open: Mutex<bool>,
    opened: Condvar,
    waiting: AtomicUsize,
}

impl Gate {
    fn pass(&self) {
        self.waiting.fetch_add(1, Ordering::SeqCst);
        let mut open = self.open.lock().unwrap();
        while !*open {
            open = self.opened.wait(open).unwrap();
        }
    }

    fn open(&self) {
        *self.open.lock().unwrap() = true;
        self.opened.notify_all();
    }

    fn wait_for(&self, number: usize) {
        let deadline = Instant::now() + Duration::from_secs(10);
        while self.waiting.load(Ordering::SeqCst) < number {
            assert!(Instant::now() < deadline, "no solve began");
            std::thread::sleep(Duration::from_millis(5));
        }
    }
}

fn gated(threads: usize, queue: usize) -> (Running, Arc<Gate>) {
    let gate = Arc::new(Gate::default());
    let at_gate = Arc::clone(&gate);
    let certifier = Arc::new(move |request: &_| {
        at_gate.pass();
        stand_in(request)
    });
    let running = Running::solving(Solving { certifier, threads, queue, ..Solving::default() });
    running.client().put_rig("bench", &profile(), &[]).expect(201);
    (running, gate)
}

#[test]
fn a_full_queue_says_when_to_come_back() {
    let (running, gate) = gated(1, 1);
    let client = running.client();
    let (answered, answers) = mpsc::channel();
    let post = |key: &'static str| {
        let (client, answered) = (client.clone(), answered.clone());
        std::thread::spawn(move || answered.send((key, client.post_batch("bench", key, &batch(1000)))).unwrap());
    };
    post("solving");
    gate.wait_for(1);
    // One of these waits; there is room for no more.
    ["a", "b", "c"].into_iter().for_each(post);
    let (turned_away, full) = answers.recv_timeout(Duration::from_secs(10)).unwrap();
    answers.recv_timeout(Duration::from_secs(10)).unwrap().1.expect(503);
    let full = full.expect(503);
    assert!(full.header("retry-after").unwrap().parse::<u64>().unwrap() >= 1);
    assert_eq!(full.json()["type"], "urn:bitassay:problem:queue-full");
    // Nothing else suffers from the load.
    client.get("/readyz").expect(200);
    gate.open();
    answers.recv_timeout(Duration::from_secs(10)).unwrap().1.expect(201);
    answers.recv_timeout(Duration::from_secs(10)).unwrap().1.expect(201);
    // Nothing was recorded under the keys that were turned away.
    assert_eq!(client.get("/v1/certifications").json()["items"].as_array().unwrap().len(), 2);
    let reply = client.post_batch("bench", turned_away, &batch(1000)).expect(201);
    assert_eq!(reply.header("idempotency-replayed"), None);
}

#[test]
fn a_stopping_server_finishes_what_it_accepted() {
    let (mut running, gate) = gated(3, 8);
    let client = running.client();
    let threads: Vec<_> = (0..3)
        .map(|i| {
            let client = client.clone();
            std::thread::spawn(move || client.post_batch("bench", &format!("k{i}"), &batch(1000)))
        })
        .collect();
    gate.wait_for(3);
    running.signal();
    std::thread::sleep(Duration::from_millis(100));
    gate.open();
    let bodies: Vec<_> = threads.into_iter().map(|thread| thread.join().unwrap().expect(201).body).collect();
    let (database, folder) = (running.database.clone(), running.folder.take());
    running.stop();
    let again = Running::on(&database, Solving::default());
    for (i, body) in bodies.iter().enumerate() {
        assert_eq!(&again.client().post_batch("bench", &format!("k{i}"), &batch(1000)).body, body);
    }
    again.stop();
    drop(folder);
}

/// Posts a batch under the key `k` and hangs up as soon as a solve has begun.
fn post_and_hang_up(running: &Running, gate: &Gate) {
    use std::io::Write;
    let body = batch(1000).to_string();
    let mut stream = std::net::TcpStream::connect(running.address).unwrap();
    write!(
        stream,
        "POST /v1/rigs/bench/batches HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\nIdempotency-Key: k\r\nContent-Length: {}\r\n\r\n{body}",
        body.len()
    )
    .unwrap();
    gate.wait_for(1);
    drop(stream);
    std::thread::sleep(Duration::from_millis(100));
}

#[test]
fn who_hangs_up_finds_the_answer_later() {
    let (running, gate) = gated(1, 8);
    post_and_hang_up(&running, &gate);
    gate.open();
    let reply = running.client().post_batch("bench", "k", &batch(1000)).expect(201);
    assert_eq!(reply.header("idempotency-replayed"), Some("true"));
}

#[test]
fn a_stopping_server_finishes_what_nobody_waits_for_too() {
    let (mut running, gate) = gated(1, 8);
    post_and_hang_up(&running, &gate);
    running.signal();
    std::thread::sleep(Duration::from_millis(200));
    gate.open();
    let (database, folder) = (running.database.clone(), running.folder.take());
    running.stop();
    let again = Running::on(&database, Solving::default());
    let reply = again.client().post_batch("bench", "k", &batch(1000)).expect(201);
    assert_eq!(reply.header("idempotency-replayed"), Some("true"));
    again.stop();
    drop(folder);
}

#[test]
fn a_panic_in_a_solve_is_an_answer_and_the_solvers_go_on() {
    let running = Running::solving(Solving { threads: 1, ..Solving::default() });
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    let before = running.rows();
    for key in ["a", "b", "c"] {
        let reply = client.post_batch("bench", key, &batch(PANICS)).expect(500);
        assert_eq!(reply.header("content-type"), Some("application/problem+json"));
        assert!(reply.json()["instance"].as_str().unwrap().starts_with("urn:uuid:"));
    }
    assert_eq!(running.rows(), before);
    client.get("/readyz").expect(200);
    client.post_batch("bench", "a", &batch(1000)).expect(201);
}

#[test]
fn rows_say_the_same_as_tables() {
    let (_running, client) = with_rig();
    let query = "started_at=2026-03-01T12:00:00Z&ended_at=2026-03-01T13:05:00%2B01:00";
    let rows = "preparation,measurement,outcome,count\r\n1,0,0,1000\r\n0,0,0,1000\r\n\r\n0,0,1,1000\r\n1,0,1,1000\r\n";
    let from_rows = client.post_csv("bench", "rows", query, rows).expect(201).json();
    let from_table = client.post_batch("bench", "table", &batch(1000)).expect(201).json();
    for member in ["counts", "counts_digest", "started_at", "ended_at", "certified_bits"] {
        assert_eq!(from_rows[member], from_table[member], "{member}");
    }
    // Combinations that no row names were never seen.
    let sparse =
        client.post_csv("bench", "sparse", query, "preparation,measurement,outcome,count\n0,0,0,10\n1,0,1,10\n").expect(201).json();
    assert_eq!(sparse["counts"], json!([[[10, 0]], [[0, 10]]]));
    // The options are part of what a key stands for.
    let leaking = client.post_csv("bench", "leak", &format!("{query}&leakage=[0.2,0.3]"), rows).expect(201).json();
    assert_eq!((&leaking["scenario"]["leakage"], &leaking["leakage_source"]), (&json!([0.2, 0.3]), &json!("batch")));
    client.post_csv("bench", "leak", &format!("{query}&leakage=0.2"), rows).expect(422);
    let lost = format!("{query}&lost_rounds={}", "%7B%22counts%22:[[5],[6]],%22treatment%22:%7B%22as-outcome%22:1%7D%7D");
    let lost = client.post_csv("bench", "lost", &lost, rows).expect(201).json();
    assert_eq!(lost["counts"], json!([[[1000, 1005]], [[1000, 1006]]]));
}

#[test]
fn a_batch_may_bring_its_own_leakage() {
    let (_running, client) = with_rig();
    let mut batch = batch(1000);
    batch["leakage"] = json!(0.25);
    let record = client.post_batch("bench", "k", &batch).expect(201).json();
    assert_eq!((&record["scenario"]["leakage"], &record["leakage_source"]), (&json!(0.25), &json!("batch")));
}
