//! A disk that is full, and one that takes no more writes.

use std::{
    fs,
    path::{Path, PathBuf},
    process::Command,
};

use serde_json::Value;

use crate::{
    client::Reply,
    process::{Process, Site, declare, status},
};

const PROBLEM: &str = "urn:bitassay:problem:storage";

/// Posts until the ledger takes no more; answers with what was answered before.
fn fill(process: &Process, began: &Value) -> Vec<Reply> {
    let mut replies = vec![];
    for number in 0..100_000 {
        let reply = process.post(number, began);
        if reply.status == 503 {
            assert_eq!(reply.json()["type"], PROBLEM, "{}", reply.text());
            assert!(reply.header("retry-after").is_some());
            return replies;
        }
        assert_eq!(reply.status, status(number), "{}", reply.text());
        replies.push(reply);
    }
    panic!("the disk never filled");
}

/// What was answered is there, and what was refused is taken once there is room; without a restart.
fn recovered(process: &Process, began: &Value, replies: &[Reply]) {
    let next = replies.len() as u64;
    process.post(next, began).expect(status(next));
    for (number, reply) in replies.iter().enumerate() {
        assert_eq!(process.post(number as u64, began).body, reply.body);
    }
    assert_eq!(process.checkpoint().size, 3 + next + 1);
    process.client.get("/readyz").expect(200);
}

/// A file size limit of the process, set from outside: from then on nothing it writes reaches the disk.
#[cfg(target_os = "linux")]
#[test]
fn a_disk_that_takes_no_more_writes_loses_nothing() {
    let site = Site::new();
    // The signal that comes with the limit is ignored, as the error is what matters.
    let mut program = Command::new("env");
    program.args(["--ignore-signal=XFSZ", env!("CARGO_BIN_EXE_bitassay")]);
    let process = Process::start(site.command(program, &site.database()));
    let began = declare(&process.client);
    let mut replies: Vec<Reply> = (0..3).map(|number| process.post(number, &began)).collect();
    let limit = |limit: &str| {
        let process = process.child.id().to_string();
        assert!(Command::new("prlimit").args(["--pid", &process, &format!("--fsize={limit}:unlimited")]).status().unwrap().success());
    };
    limit("1");
    for _ in 0..3 {
        let problem = process.post(3, &began).expect(503).json();
        assert_eq!(problem["type"], PROBLEM, "{problem}");
        process.client.get("/v1/certifications").expect(200);
        process.client.get("/v1/ledger/checkpoint").expect(503);
    }
    limit("unlimited");
    recovered(&process, &began, &replies);
    replies.push(process.post(3, &began));
    process.stop();
    let process = site.serve();
    for (number, reply) in replies.iter().enumerate() {
        assert_eq!(process.post(number as u64, &began).body, reply.body);
    }
}

/// Files that cannot be changed any more, beneath a running server. Needs a file system and a user that can make them so.
#[cfg(target_os = "linux")]
#[test]
fn files_that_become_read_only_are_waited_for() {
    let site = Site::new();
    let process = Process::start(site.command(Command::new(env!("CARGO_BIN_EXE_bitassay")), &site.database()));
    let began = declare(&process.client);
    let replies: Vec<Reply> = (0..3).map(|number| process.post(number, &began)).collect();
    let mut log = site.database().into_os_string();
    log.push("-wal");
    let change =
        |flag: &str| Command::new("chattr").arg(flag).arg(site.database()).arg(&log).output().is_ok_and(|output| output.status.success());
    if !change("+i") {
        change("-i");
        println!("not run: this machine does not let the test make files immutable");
        return;
    }
    let refused = [process.post(3, &began), process.post(3, &began)];
    let read = [process.client.get("/livez"), process.client.get("/v1/certifications")];
    // Before anything can fail: nobody could remove the folder otherwise.
    assert!(change("-i"));
    for reply in refused {
        assert_eq!(reply.expect(503).json()["type"], PROBLEM);
    }
    read.into_iter().for_each(|reply| drop(reply.expect(200)));
    recovered(&process, &began, &replies);
}

/// A file system of its own, of three megabytes, in a name space that ends with the server. Needs the right to make one.
#[cfg(target_os = "linux")]
fn small_disk(site: &Site, then: &str) -> Option<(Command, PathBuf)> {
    let disk = site.folder.path().join("disk");
    fs::create_dir(&disk).unwrap();
    let script = format!("mount -t tmpfs -o size=3m tmpfs {0} && {then} exec {1} \"$@\"", disk.display(), env!("CARGO_BIN_EXE_bitassay"));
    let allowed = Command::new("unshare")
        .args(["-rm", "mount", "-t", "tmpfs", "tmpfs"])
        .arg(&disk)
        .output()
        .is_ok_and(|output| output.status.success());
    if !allowed {
        println!("not run: this machine does not let the test make a file system");
        return None;
    }
    let mut command = Command::new("unshare");
    command.args(["-rm", "sh", "-c", &script, "sh"]);
    Some((command, disk))
}

#[cfg(target_os = "linux")]
#[test]
fn a_full_disk_loses_nothing() {
    let site = Site::new();
    let Some((program, disk)) = small_disk(&site, "") else { return };
    let process = Process::start(site.command(program, &disk.join("ledger.sqlite")));
    let began = declare(&process.client);
    // The server's file system is seen from here through its process.
    let seen = PathBuf::from(format!("/proc/{}/root{}", process.child.id(), disk.display()));
    let ballast = seen.join("ballast");
    fs::write(&ballast, vec![0; 1 << 20]).unwrap();
    let replies = fill(&process, &began);
    assert!(!replies.is_empty());
    let detail = process.post(replies.len() as u64, &began).expect(503).json()["detail"].to_string();
    assert!(detail.contains("the disk is full"), "{detail}");
    process.client.get("/v1/certifications?limit=3").expect(200);
    fs::remove_file(&ballast).unwrap();
    recovered(&process, &began, &replies);
    println!("disk full after {} batches; all there, and more taken once there was room", replies.len());
}

#[cfg(target_os = "linux")]
#[test]
fn a_read_only_database_is_named_at_the_start() {
    let site = Site::new();
    let then =
        |database: &Path| format!("touch {0} && mount -o remount,ro {1} &&", database.display(), database.parent().unwrap().display());
    let database = site.folder.path().join("disk").join("ledger.sqlite");
    let Some((program, _)) = small_disk(&site, &then(&database)) else { return };
    let output = site.command(program, &database).output().unwrap();
    assert_eq!(output.status.code(), Some(2));
    let words = String::from_utf8(output.stderr).unwrap();
    assert!(words.contains("ledger.sqlite") && words.contains("readonly") || words.contains("read-only"), "{words}");
    assert_eq!(words.lines().count(), 1, "{words}");
}
