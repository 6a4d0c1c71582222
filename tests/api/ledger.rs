//! The database itself: what was written stays as it was written.

use bitassay::{
    certificate::{Reason, Verdict},
    clock::Stamp,
    ledger::{
        Ledger,
        checkpoint::Verifier,
        history::Filter,
        proofs::includes,
        rows::Entry,
        tree::{Hash, leaf_hash},
        writer::{Expectation, WriteError},
    },
    profile::{Profile, RigName},
    submission::{IdempotencyKey, Submission},
};
use sqlx::{AssertSqlSafe, Connection, SqliteConnection};
use uuid::Uuid;

use crate::server::{Running, batch, profile, query, with_rig};

/// Runs a statement on the database; answers with what went wrong.
pub fn refusal(running: &Running, sql: &str) -> Option<String> {
    query(&running.database, async |mut connection| {
        let outcome = sqlx::query(AssertSqlSafe(sql.to_owned())).execute(&mut connection).await;
        connection.close().await.unwrap();
        outcome.err().map(|error| error.to_string())
    })
}

/// Everything in the database, as text.
fn contents(running: &Running) -> Vec<String> {
    async fn table(connection: &mut SqliteConnection, sql: &'static str) -> Vec<String> {
        sqlx::query_scalar(sql).fetch_all(connection).await.unwrap()
    }
    query(&running.database, async |mut connection| {
        let mut all = table(&mut connection, "SELECT rig || version || recorded_at || profile FROM rig_profiles").await;
        all.extend(
            table(&mut connection, "SELECT entry || id || rig || verdict || certified_bits || rounds || record FROM certifications").await,
        );
        all.extend(table(&mut connection, "SELECT digest || document FROM witnesses").await);
        all.extend(table(&mut connection, "SELECT entry || digest FROM certification_witnesses").await);
        all.extend(table(&mut connection, "SELECT rig || idempotency_key || body_digest || entry FROM submissions").await);
        connection.close().await.unwrap();
        all
    })
}

#[test]
fn nothing_in_the_ledger_can_be_changed_removed_or_replaced() {
    let (running, client) = with_rig();
    client.post_batch("bench", "a", &batch(1000)).expect(201);
    client.post_batch("bench", "b", &batch(999)).expect(422);
    let before = contents(&running);
    // A profile; two records; the certified one's two witnesses and where they belong; two submissions.
    assert_eq!(before.len(), 1 + 2 + 2 + 2 + 2);
    let statements = [
        ("UPDATE rig_profiles SET profile = '{}'", "write-once"),
        ("DELETE FROM rig_profiles", "write-once"),
        ("INSERT OR REPLACE INTO rig_profiles SELECT rig, version, recorded_at + 1, profile FROM rig_profiles", "next version"),
        ("INSERT INTO rig_profiles SELECT rig, version + 2, recorded_at, profile FROM rig_profiles", "next version"),
        ("UPDATE certifications SET certified_bits = 1000 WHERE entry = 0", "write-once"),
        ("DELETE FROM certifications WHERE entry = 1", "write-once"),
        (
            "INSERT OR REPLACE INTO certifications SELECT entry, 'x', rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record FROM certifications WHERE entry = 1",
            "next entry",
        ),
        (
            "INSERT OR REPLACE INTO certifications SELECT 2, id, rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record FROM certifications WHERE entry = 1",
            "next entry",
        ),
        (
            "INSERT INTO certifications SELECT 3, 'x', rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record FROM certifications WHERE entry = 1",
            "next entry",
        ),
        ("UPDATE witnesses SET document = '{}'", "write-once"),
        ("DELETE FROM witnesses", "write-once"),
        ("INSERT OR REPLACE INTO witnesses SELECT digest, '{}' FROM witnesses", "write-once"),
        ("UPDATE certification_witnesses SET entry = 1", "write-once"),
        ("DELETE FROM certification_witnesses", "write-once"),
        ("INSERT OR REPLACE INTO certification_witnesses SELECT * FROM certification_witnesses", "write-once"),
        ("UPDATE submissions SET body_digest = 'x'", "write-once"),
        ("DELETE FROM submissions", "write-once"),
        ("INSERT OR REPLACE INTO submissions SELECT rig, idempotency_key, 'x', entry, refusal FROM submissions", "write-once"),
        ("INSERT OR REPLACE INTO submissions SELECT rig, 'new', 'x', entry, refusal FROM submissions", "write-once"),
    ];
    for (sql, words) in statements {
        let refused = refusal(&running, sql).unwrap_or_else(|| panic!("not refused: {sql}"));
        assert!(refused.contains(words), "{sql}: {refused}");
        assert_eq!(contents(&running), before, "{sql}");
    }
}

#[test]
fn tables_hold_what_their_types_say() {
    let (running, client) = with_rig();
    client.post_batch("bench", "a", &batch(1000)).expect(201);
    // Bits on a refused batch; a reason on a certified one; text for a number; a rig nobody declared.
    let columns = "INSERT INTO certifications SELECT 1, 'x'";
    for values in [
        "rig, profile_version, 'refused', 'zero-bound', recorded_at, 7, rounds, failure, record",
        "rig, profile_version, 'certified', 'zero-bound', recorded_at, 7, rounds, failure, record",
        "rig, profile_version, 'refused', NULL, recorded_at, 0, rounds, failure, record",
        "rig, profile_version, verdict, reason, 'today', certified_bits, rounds, failure, record",
        "rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, 'no record'",
        "'nobody', profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record",
        "rig, 2, verdict, reason, recorded_at, certified_bits, rounds, failure, record",
    ] {
        assert!(refusal(&running, &format!("{columns}, {values} FROM certifications")).is_some(), "{values}");
    }
    let right = "rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record";
    assert_eq!(refusal(&running, &format!("{columns}, {right} FROM certifications")), None);
}

fn entry(key: &str, witness: &str) -> Entry {
    Entry {
        id: Uuid::now_v7(),
        rig: RigName::try_from("bench".to_owned()).unwrap(),
        profile_version: 1,
        verdict: Verdict::Refused,
        reason: Some(Reason::ZeroBound),
        recorded_at: Stamp::from_microseconds(0).unwrap(),
        certified_bits: 0,
        rounds: 10,
        failure: None,
        commitment: None,
        record: format!("{{\"key\":\"{key}\"}}"),
        witnesses: vec![(witness.to_owned(), "{}".to_owned())],
        kept: vec![],
        submission: Submission { key: IdempotencyKey::try_from(key).unwrap(), body_digest: "sha256:0".into() },
        refusal: None,
    }
}

#[tokio::test]
async fn an_item_that_fails_takes_no_other_with_it() {
    let folder = tempfile::tempdir().unwrap();
    let ledger = Ledger::open(&folder.path().join("ledger.sqlite")).await.unwrap();
    let rig = RigName::try_from("bench".to_owned()).unwrap();
    let profile: Profile = serde_json::from_value(profile()).unwrap();
    let now = Stamp::from_microseconds(0).unwrap();
    ledger.writer.keep_profile(rig.clone(), profile, Expectation::Unstated, now).await.unwrap();

    let witness = "sha256:44136fa355b3678a1146ad16f7e8649e94fb4fc21fe77e8310c060f61caaff8a".to_owned(); // of `{}`
    // All of these wait before the writer has its turn: they share a transaction. The second fails at its witness, after its
    // certification was inserted.
    let (first, second, third, again, reused) = tokio::join!(
        ledger.writer.keep_entry(entry("a", &witness)),
        ledger.writer.keep_entry(entry("b", "no digest")),
        ledger.writer.keep_entry(entry("c", &witness)),
        ledger.writer.keep_entry(entry("a", &witness)),
        async {
            let mut reused = entry("a", &witness);
            reused.submission.body_digest = "sha256:1".into();
            ledger.writer.keep_entry(reused).await
        },
    );
    let first = first.unwrap();
    assert!(!first.replayed && !third.unwrap().replayed);
    assert!(matches!(second, Err(WriteError::Ledger(_))), "{second:?}");
    let again = again.unwrap();
    assert!(again.replayed && again.answered == first.answered);
    assert!(matches!(reused, Err(WriteError::KeyReused)), "{reused:?}");

    let page = ledger.history.page(&Filter::default(), 10).await.unwrap();
    let kept: Vec<(u64, &str)> = page.items.iter().map(|item| (item.entry, item.record.as_str())).collect();
    assert_eq!(kept, [(1, r#"{"key":"c"}"#), (0, r#"{"key":"a"}"#)]);
    assert!(ledger.history.answered(&rig, &IdempotencyKey::try_from("b").unwrap()).await.unwrap().is_none());

    ledger.close().await;
    assert!(matches!(ledger.writer.keep_entry(entry("d", &witness)).await, Err(WriteError::Ledger(_))));
}

#[test]
fn the_tree_is_asked_for_entries_and_proofs() {
    let (running, client) = with_rig();
    client.post_batch("bench", "a", &batch(1000)).expect(201);
    client.post_batch("bench", "b", &batch(999)).expect(422);
    let key: Verifier = client.get("/v1/ledger/key").expect(200).text().trim().parse().unwrap();
    let note = client.get("/v1/ledger/checkpoint").expect(200);
    assert_eq!(note.header("content-type"), Some("text/plain; charset=utf-8"));
    let checkpoint = key.confirm(note.text()).unwrap();
    // The key, the profile, two batches.
    assert_eq!(checkpoint.size, 4);
    // Asked again, with nothing new: the same bytes.
    assert_eq!(client.get("/v1/ledger/checkpoint").expect(200).body, note.body);
    for index in 0..4 {
        let line = client.get(&format!("/v1/ledger/entries/{index}")).expect(200).text().to_owned();
        let proof = client.get(&format!("/v1/ledger/proofs/inclusion?index={index}&size=4")).expect(200).json();
        assert_eq!(
            (&proof["root"], &proof["leaf"]),
            (&hex::encode(checkpoint.root).into(), &hex::encode(leaf_hash(line.as_bytes())).into())
        );
        let hashes: Vec<Hash> = proof["proof"].as_array().unwrap().iter().map(|hash| hex_hash(hash.as_str().unwrap())).collect();
        assert!(includes(4, &checkpoint.root, index, &line, &hashes));
    }
    for (path, status, culprit) in [
        ("entries/4", 404, ""),
        ("entries/01", 404, ""),
        ("entries/-1", 404, ""),
        ("proofs/inclusion?index=0", 400, "size"),
        ("proofs/inclusion?index=x&size=4", 400, "index"),
        ("proofs/inclusion?index=0&size=4&more=1", 400, "more"),
        ("proofs/inclusion?index=4&size=4", 422, "index"),
        ("proofs/inclusion?index=0&size=0", 422, "index"),
        ("proofs/inclusion?index=0&size=5", 422, "size"),
        ("proofs/inclusion?index=0&size=18446744073709551615", 422, "size"),
        ("proofs/consistency?from=0&to=4", 422, "from"),
        ("proofs/consistency?from=4&to=3", 422, "from"),
        ("proofs/consistency?from=3&to=5", 422, "to"),
        ("proofs/consistency?from=3", 400, "to"),
    ] {
        let problem = client.get(&format!("/v1/ledger/{path}")).expect(status).json();
        assert_eq!(problem["errors"][0]["parameter"].as_str().unwrap_or(""), culprit, "{path}: {problem}");
    }
    for (sql, words) in [
        ("UPDATE tree_leaves SET entry = '{}'", "write-once"),
        ("DELETE FROM tree_leaves", "write-once"),
        ("INSERT OR REPLACE INTO tree_leaves SELECT leaf, kind, 'x', entry, nodes FROM tree_leaves", "next leaf"),
        ("INSERT OR REPLACE INTO tree_leaves SELECT 4, kind, subject, entry, nodes FROM tree_leaves WHERE leaf = 2", "each subject once"),
    ] {
        let refused = refusal(&running, sql).unwrap_or_else(|| panic!("not refused: {sql}"));
        assert!(refused.contains(words), "{sql}: {refused}");
    }
}

fn hex_hash(text: &str) -> Hash {
    hex::decode(text).unwrap().try_into().unwrap()
}
