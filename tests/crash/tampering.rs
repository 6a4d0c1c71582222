//! A database that somebody changed: nothing is signed, nothing is recorded, and the service says where.

use std::{fs, time::Duration};

use serde_json::Value;

use crate::process::{Process, Site};

const SIX: u64 = 6;

/// Six batches, signed for.
fn filled(site: &Site) -> Value {
    let (process, began) = site.first();
    for number in 0..SIX {
        process.post(number, &began);
    }
    // Key, profile, commitment, certifications.
    assert_eq!(process.checkpoint().size, 3 + SIX);
    process.stop();
    began
}

/// The server refuses, and its words contain these; the history can be read all the same.
fn assert_refuses(process: &Process, began: &Value, words: &[&str]) {
    let problem = process.client.get("/v1/ledger/checkpoint").expect(503).json();
    let detail = problem["detail"].as_str().unwrap().to_owned();
    assert!(words.iter().all(|word| detail.contains(word)), "{detail}: {words:?}");
    assert_eq!(problem["type"], "urn:bitassay:problem:ledger-fault");
    let ready = process.client.get("/readyz").expect(503).json();
    assert_eq!(ready["checks"][0]["name"], "ledger", "{ready}");
    assert!(detail.contains(ready["checks"][0]["detail"].as_str().unwrap()));
    assert_eq!(process.post(99, began).expect(503).json()["type"], problem["type"]);
    process.client.get("/v1/certifications?limit=1").expect(200);
}

#[test]
fn an_edited_row_is_found_and_named() {
    let edits: [(&str, &[&str]); 12] = [
        ("UPDATE certifications SET certified_bits = certified_bits + 1 WHERE entry = 1", &["entry 4 ", "certified_bits is not"]),
        (
            "UPDATE certifications SET record = replace(record, '2100-01-01', '2100-01-02') WHERE entry = 3",
            &["entry 6 ", "record_sha256 is not"],
        ),
        ("UPDATE certifications SET failure = 0.5 WHERE entry = 0", &["entry 3 ", "failure is not"]),
        ("UPDATE certifications SET recorded_at = recorded_at + 1 WHERE entry = 0", &["entry 3 ", "recorded_at is not"]),
        ("UPDATE submissions SET idempotency_key = 'another' WHERE entry = 2", &["entry 5 ", "idempotency_key is not"]),
        ("UPDATE submissions SET refusal = '{}' WHERE entry = 2", &["entry 5 ", "refusal_sha256 is not"]),
        ("DELETE FROM submissions WHERE entry = 5", &["entry 8 ", "idempotency_key"]),
        ("DELETE FROM certifications WHERE entry = 5", &["entry 8 ", "gone"]),
        ("UPDATE rig_profiles SET profile = json_set(profile, '$.notes', 'x')", &["entry 1 (profile bench/1)", "profile_sha256"]),
        ("UPDATE witnesses SET document = json_set(document, '$.value', '1')", &["the witness sha256:"]),
        ("UPDATE tree_leaves SET entry = replace(entry, '\"number\":4', '\"number\":5') WHERE leaf = 7", &["entry 7 ", "hashed"]),
        ("UPDATE tree_leaves SET nodes = zeroblob(length(nodes)) WHERE leaf = 4", &["entry 4 ", "hashed"]),
    ];
    let original = Site::new();
    let began = filled(&original);
    for (edit, words) in edits {
        let site = original.copy();
        site.meddle(&[edit]);
        assert_refuses(&site.serve(), &began, words);
    }
}

/// Rows and leaves that agree with each other, but not with what was signed, or with each other's number.
#[test]
fn a_rewritten_history_is_not_what_was_signed() {
    let site = Site::new();
    let began = filled(&site);
    site.meddle(&[
        "DELETE FROM submissions WHERE entry = 5",
        "DELETE FROM certification_commitments WHERE entry = 5",
        "DELETE FROM certifications WHERE entry = 5",
        "DELETE FROM tree_leaves WHERE leaf = 8",
    ]);
    assert_refuses(&site.serve(), &began, &["8 entries", "9 entries was signed", "backup", "new key"]);

    let site = Site::new();
    let began = filled(&site);
    site.meddle(&["INSERT INTO certifications SELECT 6, 'x', rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record \
                   FROM certifications WHERE entry = 0"]);
    assert_refuses(&site.serve(), &began, &["the certification x is not in the tree"]);
}

#[test]
fn an_edit_beneath_a_running_server_is_found() {
    let site = Site::new();
    let (process, began) = site.first();
    for number in 0..SIX {
        process.post(number, &began);
    }
    process.checkpoint();
    site.meddle(&["UPDATE certifications SET certified_bits = 7 WHERE entry = 1"]);
    // The ledger is gone through every second here; the test waits for as long as it takes.
    while process.client.get("/readyz").status == 200 {
        std::thread::sleep(Duration::from_millis(50));
    }
    assert_refuses(&process, &began, &["entry 4 ", "certified_bits"]);
}

#[test]
fn a_damaged_file_is_found() {
    let site = Site::new();
    let began = filled(&site);
    // One byte of each record's text, changed in the file behind SQLite's back; some places are left-overs that nobody reads.
    let bytes = fs::read(site.database()).unwrap();
    let text = b"\"ended_at\":\"2100-01-01";
    let places: Vec<usize> = bytes.windows(text.len()).enumerate().filter(|(_, window)| window == text).map(|(place, _)| place).collect();
    let mut changed = bytes.clone();
    assert!(!places.is_empty());
    places.iter().for_each(|place| changed[place + text.len() - 1] ^= 1);
    fs::write(site.database(), &changed).unwrap();
    assert_refuses(&site.serve(), &began, &["record_sha256 is not what was recorded"]);

    // Whole pages, as a disk loses them.
    let mut changed = bytes;
    places.iter().for_each(|place| changed[place / 4096 * 4096..][..4096].fill(0));
    fs::write(site.database(), &changed).unwrap();
    let process = site.serve();
    let problem = process.client.get("/v1/ledger/checkpoint").expect(503).json();
    assert_eq!(problem["type"], "urn:bitassay:problem:ledger-fault", "{problem}");
    process.client.get("/readyz").expect(503);
    process.post(99, &began).expect(503);
}
