//! Backup while serving, and what a restored ledger may and may not sign. Export, and its check elsewhere.

use std::{fs, process::Output};

use bitassay::ledger::key::Key;

use crate::process::{Site, bitassay};

fn run(arguments: &[&str]) -> Output {
    bitassay().args(arguments).output().unwrap()
}

fn words(output: &Output) -> String {
    String::from_utf8_lossy(&output.stderr).into_owned()
}

#[test]
fn a_restored_ledger_continues_under_a_new_key_only() {
    let site = Site::new();
    let (process, began) = site.first();
    for number in 0..4 {
        process.post(number, &began);
    }
    let early = process.checkpoint();
    let copy = site.folder.path().join("copy.sqlite");
    let (database, copied, key) = (site.database(), copy.to_str().unwrap().to_owned(), site.key());
    let backup = ["backup", &copied, "--database", database.to_str().unwrap(), "--ledger-key", key.to_str().unwrap()];
    let output = run(&backup);
    assert!(output.status.success(), "{}", words(&output));
    let report: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!((&report["entries"], &report["root"]), (&early.size.into(), &hex::encode(early.root).into()));
    assert!(words(&run(&backup)).contains("never takes another's place"));
    for number in 4..8 {
        process.post(number, &began);
    }
    let late = process.checkpoint();
    process.stop();

    fs::copy(&copy, site.database()).unwrap();
    let process = site.serve();
    let problem = process.client.get("/v1/ledger/checkpoint").expect(503).json();
    assert!(problem["detail"].as_str().unwrap().contains("restored from a backup"), "{problem}");
    process.post(8, &began).expect(503);
    process.stop();

    let moved = site.folder.path().join("old.key");
    fs::rename(site.key(), &moved).unwrap();
    fs::rename(Key::signed(&site.key()), Key::signed(&moved)).unwrap();
    let process = site.serve();
    process.post(8, &began).expect(422);
    let now = process.checkpoint();
    assert_ne!(now.origin, late.origin);
    assert!(process.extends(&early, &now));
    let entry = process.client.get(&format!("/v1/ledger/entries/{}", early.size)).expect(200).json();
    assert_eq!(entry["kind"], "key");
    assert!(entry["body"]["replaces"].as_str().unwrap().starts_with(&late.origin), "{entry}");
}

#[test]
fn an_export_is_checked_elsewhere() {
    let site = Site::new();
    let (process, began) = site.first();
    let replies: Vec<_> = (0..5).map(|number| process.post(number, &began)).collect();
    let checkpoint = process.checkpoint();
    let key = process.client.get("/v1/ledger/key").expect(200).text().trim().to_owned();
    let (database, secret) = (site.database(), site.key());
    let export = run(&["export", "--database", database.to_str().unwrap(), "--ledger-key", secret.to_str().unwrap()]);
    assert!(export.status.success(), "{}", words(&export));
    let text = String::from_utf8(export.stdout).unwrap();
    let check = |text: &str, key: &str| {
        let file = site.folder.path().join("export.jsonl");
        fs::write(&file, text).unwrap();
        run(&["verify", file.to_str().unwrap(), "--key", key])
    };
    let output = check(&text, &key);
    assert_eq!(output.status.code(), Some(0), "{}", words(&output));
    let report: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!((&report["entries"], &report["certifications"]), (&checkpoint.size.into(), &5.into()));
    assert_eq!(report["root"], hex::encode(checkpoint.root));

    let without_last: String = text.lines().take(text.lines().count() - 1).map(|line| format!("{line}\n")).collect();
    let other = "PeterNeumann+c74f20a3+ARpc2QcUPDhMQegwxbzhKqiBfsVkmqq/LDE4izWy10TW";
    let changes = [
        (text.replace("2100-01-01", "2100-01-02"), key.as_str(), "its record is not the one that was recorded"),
        (text.replace(r#"\"idempotency_key\":\"batch-3\""#, r#"\"idempotency_key\":\"batch-9\""#), &key, "their root is"),
        (without_last, &key, "the checkpoint is of"),
        (text.clone(), other, "not signed by PeterNeumann"),
    ];
    for (changed, key, expected) in changes {
        let output = check(&changed, key);
        assert_eq!(output.status.code(), Some(3), "{expected}");
        assert!(words(&output).contains(expected), "{expected}: {}", words(&output));
    }

    // One record with its place in the ledger.
    let path = replies[0].header("location").unwrap();
    let bundle = process.client.get(&format!("{path}/bundle")).expect(200).text().to_owned();
    let output = check(&bundle, &key);
    assert_eq!(output.status.code(), Some(0), "{}", words(&output));
    for (changed, expected) in [
        (bundle.replace("2100-01-01", "2100-01-02"), "/record: it is not the one that was recorded"),
        (bundle.replace(r#"\"number\":0"#, r#"\"number\":1"#), "the entry is not in the tree"),
    ] {
        let output = check(&changed, &key);
        assert_eq!(output.status.code(), Some(3), "{expected}");
        assert!(words(&output).contains(expected), "{expected}: {}", words(&output));
    }
    process.client.get("/v1/certifications/01a231d4-76e7-7738-9505-f120c6671e45/bundle").expect(404);
}

/// A database from before there was a tree: the rows are there, the leaves are not.
#[test]
fn rows_that_are_older_than_the_tree_are_logged_at_the_start() {
    let site = Site::new();
    let (process, began) = site.first();
    let replies: Vec<_> = (0..3).map(|number| process.post(number, &began)).collect();
    process.stop();
    site.meddle(&["DELETE FROM tree_leaves"]);
    fs::remove_file(site.key()).unwrap();
    fs::remove_file(Key::signed(&site.key())).unwrap();

    let process = site.serve();
    let kinds: Vec<String> = (0..6)
        .map(|index| process.client.get(&format!("/v1/ledger/entries/{index}")).expect(200).json()["kind"].as_str().unwrap().to_owned())
        .collect();
    assert_eq!(kinds, ["profile", "commitment", "certification", "certification", "certification", "key"]);
    assert_eq!(process.checkpoint().size, 6);
    assert_eq!(process.post(0, &began).body, replies[0].body);
}
