//! The database itself: what was written stays as it was written.

use sqlx::{AssertSqlSafe, Connection, SqliteConnection};

use crate::server::{Running, batch, query, with_rig};

/// Runs a statement on the database; answers with what went wrong.
fn refusal(running: &Running, sql: &str) -> Option<String> {
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
    assert_eq!(before.len(), 1 + 2 + 1 + 1 + 2);
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
