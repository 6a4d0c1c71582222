//! Tokens: created, listed and revoked beside a running server.

use std::{
    io::{BufRead, BufReader},
    path::Path,
    process::{Command, Output, Stdio},
};

use bitassay::token::Role;
use serde_json::Value;

use crate::{
    access::{create, revoke},
    server::{Running, batch, profile, query},
};

fn bitassay(arguments: &[&str], database: &Path) -> Output {
    Command::new(env!("CARGO_BIN_EXE_bitassay")).args(arguments).arg("--database").arg(database).output().unwrap()
}

fn text(bytes: Vec<u8>) -> String {
    String::from_utf8(bytes).unwrap()
}

#[test]
fn the_first_token_closes_the_service_and_a_revoked_one_stays_out() {
    let running = Running::new();
    let open = running.client();
    open.put_rig("bench", &profile(), &[]).expect(201);
    // A token that nobody created is not passed over, even where none is asked for.
    open.presenting("bitassay_0").get("/v1/rigs").expect(401);
    let output = bitassay(&["token", "create", "--role", "operator", "--label", "night shift"], &running.database);
    assert!(output.status.success());
    let (printed, told) = (text(output.stdout), text(output.stderr));
    let secret = printed.trim_end();
    assert!(secret.starts_with("bitassay_") && secret.len() == 73 && printed.lines().count() == 1, "{printed}");
    assert!(!told.contains(secret), "{told}");
    open.get("/v1/rigs").expect(401);
    open.presenting(secret).get("/v1/rigs").expect(200);

    let list: Value = serde_json::from_slice(&bitassay(&["token", "list"], &running.database).stdout).unwrap();
    let item = &list[0];
    assert_eq!((&item["role"], &item["label"], &item["taken"]), (&"operator".into(), &"night shift".into(), &true.into()));
    let name = item["token"].as_str().unwrap();
    assert!(bitassay(&["token", "revoke", name], &running.database).status.success());
    let refused = open.presenting(secret).get("/v1/rigs").expect(401);
    assert!(refused.text().contains("revoked"), "{}", refused.text());
    // No token is left, and still the service does not open again.
    open.get("/v1/rigs").expect(401);
    let again = bitassay(&["token", "revoke", name], &running.database);
    assert!(again.status.success() && text(again.stderr).contains("already"));
}

#[test]
fn a_token_ends_when_it_was_to_end() {
    let running = Running::new();
    let past = "2026-01-01T00:00:00Z".parse().unwrap();
    let future = "2999-01-01T00:00:00Z".parse().unwrap();
    let client = running.client();
    let (_, ended) = create(&running, Role::Auditor, &[], Some(past));
    let (_, lasting) = create(&running, Role::Auditor, &[], Some(future));
    assert!(client.presenting(&ended).get("/v1/rigs").expect(401).text().contains("expired"));
    client.presenting(&lasting).get("/v1/rigs").expect(200);
}

#[test]
fn a_rig_posts_to_its_own_rigs_only() {
    let running = Running::new();
    let client = running.client();
    for rig in ["north", "south", "west"] {
        client.put_rig(rig, &profile(), &[]).expect(201);
    }
    let (token, secret) = create(&running, Role::Rig, &["north", "south"], None);
    let rig = client.presenting(&secret);
    rig.post_batch("north", "k", &batch(1000)).expect(201);
    rig.post_batch("south", "k", &batch(1000)).expect(201);
    let before = running.rows();
    rig.post_batch("west", "k", &batch(1000)).expect(403);
    rig.post_batch("nowhere", "k", &batch(1000)).expect(403);
    revoke(&running, token);
    rig.post_batch("north", "l", &batch(1000)).expect(401);
    let after: Vec<_> = running.rows();
    let changed: Vec<_> = after.iter().zip(&before).filter(|(now, then)| now != then).map(|(now, _)| now.0.as_str()).collect();
    // Beyond that, the revocation may stand in the log of all entries.
    assert!(changed.contains(&"token_changes") && !changed.contains(&"certifications") && !changed.contains(&"submissions"), "{changed:?}");
}

#[test]
fn what_is_wrong_with_a_command_is_told_and_leaves_no_trace() {
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("ledger.sqlite");
    let cases: [(&[&str], &str); 7] = [
        (&["token", "list"], "there is no database"),
        (&["token", "create", "--role", "rig"], "names its rigs with --rig"),
        (&["token", "create", "--role", "auditor", "--rig", "a"], "names its rigs with --rig"),
        (&["token", "create", "--role", "rig", "--rig", "No Name"], "a rig's name has"),
        (&["token", "create", "--role", "operator", "--expires", "soon"], "neither a time"),
        (&["token", "create", "--role", "operator", "--expires", "2020-01-01T00:00:00Z"], "over already"),
        (&["token", "revoke", "01900000-0000-7000-8000-000000000000"], "there is no token"),
    ];
    for (arguments, words) in cases {
        let output = bitassay(arguments, &database);
        assert_eq!(output.status.code(), Some(2), "{arguments:?}");
        let told = text(output.stderr);
        assert!(told.contains(words) && output.stdout.is_empty(), "{arguments:?}: {told}");
    }
    let changes: i64 = query(&database, async |mut connection| {
        sqlx::query_scalar("SELECT COUNT(*) FROM token_changes").fetch_one(&mut connection).await.unwrap()
    });
    assert_eq!(changes, 0);
}

#[test]
fn changes_of_tokens_are_written_once() {
    let running = Running::new();
    let (token, _) = create(&running, Role::Operator, &[], None);
    for statement in [
        "UPDATE token_changes SET recorded_at = 0".to_owned(),
        "DELETE FROM token_changes".to_owned(),
        "INSERT OR REPLACE INTO token_changes VALUES (0, 'x', 'created', 0, '{}')".to_owned(),
        "INSERT INTO token_changes VALUES (5, 'x', 'created', 0, '{}')".to_owned(),
        "INSERT INTO token_changes VALUES (1, 'x', 'revoked', 0, '{}')".to_owned(),
        format!("INSERT INTO token_changes VALUES (1, '{token}', 'created', 0, '{{}}')"),
    ] {
        let outcome = query(&running.database, async |mut connection| {
            sqlx::query(sqlx::AssertSqlSafe(statement.clone())).execute(&mut connection).await.map_err(|error| error.to_string())
        });
        assert!(outcome.is_err_and(|error| error.contains("token_changes")), "{statement}");
    }
}

/// Each change is a leaf of the ledger's tree, with the digest of what the table has.
#[test]
fn changes_of_tokens_are_in_the_tree() {
    let running = Running::new();
    let (token, _) = create(&running, Role::Operator, &[], None);
    revoke(&running, token);
    let (leaves, documents): (Vec<(String, String)>, Vec<String>) = query(&running.database, async |mut connection| {
        let sql = "SELECT subject, entry FROM tree_leaves WHERE kind = 'token' ORDER BY leaf";
        let leaves = sqlx::query_as(sql).fetch_all(&mut connection).await.unwrap();
        let sql = "SELECT document FROM token_changes ORDER BY change";
        (leaves, sqlx::query_scalar(sql).fetch_all(&mut connection).await.unwrap())
    });
    let subjects: Vec<&str> = leaves.iter().map(|(subject, _)| subject.as_str()).collect();
    assert_eq!(subjects, [format!("{token}/created"), format!("{token}/revoked")]);
    for ((_, entry), document) in leaves.iter().zip(documents) {
        let leaf: Value = serde_json::from_str(entry).unwrap();
        let digest = hex::encode(<sha2::Sha256 as sha2::Digest>::digest(&document));
        assert_eq!((&leaf["body"]["document_sha256"], &leaf["body"]["token"]), (&digest.into(), &token.to_string().into()), "{entry}");
    }
}

/// Neither the log at its most talkative nor the database has a token.
#[test]
fn no_token_is_in_the_log_or_in_the_database() {
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("ledger.sqlite");
    let secret = text(bitassay(&["token", "create", "--role", "operator"], &database).stdout).trim_end().to_owned();
    let mut command = Command::new(env!("CARGO_BIN_EXE_bitassay"));
    command.args(["serve", "--listen", "127.0.0.1:0", "--log", "trace", "--database"]).arg(&database).stderr(Stdio::piped());
    let mut child = command.spawn().unwrap();
    let mut lines = BufReader::new(child.stderr.take().unwrap()).lines().map(Result::unwrap);
    // At this level something may come before it.
    let address = lines.find_map(|line| line.strip_prefix("listening on ").map(str::to_owned)).unwrap();
    let client = crate::client::Client::new(address).presenting(&secret);
    let reader = std::thread::spawn(move || lines.collect::<Vec<_>>());
    client.get("/v1/rigs").expect(200);
    client.get(&format!("/v1/{secret}")).expect(404);
    client.call("PUT", "/v1/rigs/bench", &[("content-type", "application/json")], Some(b"{")).expect(400);
    client.presenting(&format!("{secret}0")).get("/v1/rigs").expect(401);
    child.kill().unwrap();
    child.wait().unwrap();
    let log = reader.join().unwrap();
    assert!(log.len() > 10, "{log:?}");
    let digits = secret.strip_prefix("bitassay_").unwrap();
    // What a client puts into a path is its own affair.
    let leaks: Vec<_> = log.iter().filter(|line| line.contains(digits) && !line.contains(&format!("/v1/{secret}"))).collect();
    assert!(leaks.is_empty(), "{leaks:?}");
    for file in std::fs::read_dir(folder.path()).unwrap() {
        let bytes = std::fs::read(file.unwrap().path()).unwrap();
        assert!(!bytes.windows(digits.len()).any(|window| window == digits.as_bytes()));
    }
}
