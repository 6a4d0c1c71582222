//! A server as a process of its own, and a client of it.

use std::{
    io::{BufRead, BufReader},
    process::{Child, Command, Stdio},
    time::{Duration, Instant},
};

use serde_json::{Value, json};
use tempfile::TempDir;
use ureq::{Agent, http::Request};

pub struct Process {
    child: Child,
    pub base: String,
    _folder: TempDir,
}

impl Process {
    pub fn start(settings: &[&str]) -> Self {
        let folder = tempfile::tempdir().unwrap();
        let mut command = Command::new(env!("CARGO_BIN_EXE_bitassay"));
        command.args(["serve", "--listen", "127.0.0.1:0", "--log", "warn", "--database"]).arg(folder.path().join("ledger.sqlite"));
        let mut child = command.args(settings).stderr(Stdio::piped()).spawn().unwrap();
        let mut lines = BufReader::new(child.stderr.take().unwrap()).lines();
        let first = lines.next().unwrap().unwrap();
        let base = first.strip_prefix("listening on ").unwrap_or_else(|| panic!("{first}")).to_owned();
        // What the service warns of belongs to the result.
        std::thread::spawn(move || lines.map_while(Result::ok).for_each(|line| eprintln!("server: {line}")));
        Self { child, base, _folder: folder }
    }

    /// Resident memory in KiB.
    pub fn memory(&self) -> u64 {
        let status = std::fs::read_to_string(format!("/proc/{}/status", self.child.id())).unwrap();
        let line = status.lines().find_map(|line| line.strip_prefix("VmRSS:")).unwrap();
        line.trim().trim_end_matches(" kB").parse().unwrap()
    }

    pub fn file_descriptors(&self) -> u64 {
        std::fs::read_dir(format!("/proc/{}/fd", self.child.id())).unwrap().count() as u64
    }

    pub fn client(&self) -> Client {
        Client { base: self.base.clone(), agent: Agent::config_builder().http_status_as_error(false).build().into() }
    }
}

impl Drop for Process {
    fn drop(&mut self) {
        drop(self.child.kill());
        drop(self.child.wait());
    }
}

#[derive(Clone)]
pub struct Client {
    base: String,
    agent: Agent,
}

impl Client {
    /// Status, body and how long it took.
    pub fn call(&self, method: &str, path: &str, key: &str, body: &[u8]) -> (u16, Vec<u8>, Duration) {
        self.try_call(method, path, key, body).expect("an answer")
    }

    /// As [`Self::call`]; `None` if the server has gone.
    fn try_call(&self, method: &str, path: &str, key: &str, body: &[u8]) -> Option<(u16, Vec<u8>, Duration)> {
        let begun = Instant::now();
        let mut request = Request::builder().method(method).uri(format!("{}{path}", self.base));
        if !body.is_empty() {
            request = request.header("content-type", "application/json").header("idempotency-key", key);
        }
        let answer = match body {
            [] => self.agent.run(request.body(()).unwrap()),
            body => self.agent.run(request.body(body.to_vec()).unwrap()),
        };
        let mut answer = answer.ok()?;
        let body = answer.body_mut().read_to_vec().ok()?;
        Some((answer.status().as_u16(), body, begun.elapsed()))
    }

    pub fn get(&self, path: &str) -> (u16, Vec<u8>, Duration) {
        self.call("GET", path, "", &[])
    }

    pub fn post(&self, rig: &str, key: &str, batch: &Value) -> u16 {
        self.call("POST", &format!("/v1/rigs/{rig}/batches"), key, batch.to_string().as_bytes()).0
    }

    /// As [`Self::post`]; `None` if the server has gone.
    pub fn try_post(&self, rig: &str, key: &str, batch: &Value) -> Option<u16> {
        self.try_call("POST", &format!("/v1/rigs/{rig}/batches"), key, batch.to_string().as_bytes()).map(|(status, ..)| status)
    }

    pub fn put(&self, rig: &str, profile: &Value) {
        let (status, body, _) = self.call("PUT", &format!("/v1/rigs/{rig}"), "-", profile.to_string().as_bytes());
        assert_eq!(status, 201, "{}", String::from_utf8_lossy(&body));
    }
}

/// Two preparations of an almost empty carrier: solved in milliseconds.
pub fn small_profile() -> Value {
    json!({ "scenario": { "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1, "leakage": 0.1, "targets": [[0, 0]] },
            "rounds": "independent", "level": "lean" })
}

pub fn small_batch(i: u64) -> Value {
    let first = 790_000 + i % 10_000;
    json!({ "counts": [[[first, 1_000_000 - first]], [[205_000, 795_000]]],
            "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z" })
}

/// Preparations that nobody could tell apart: refused.
pub fn refused_batch(i: u64) -> Value {
    let first = 500_000 + i % 100;
    json!({ "counts": [[[first, 1_000_000 - first]], [[500_000, 500_000]]],
            "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z" })
}

/// Four preparations of a qubit, two measurements, all settings targets: a solve that takes its time.
pub fn large_profile() -> Value {
    let targets: Vec<[u8; 2]> = (0..4).flat_map(|x| [[x, 0], [x, 1]]).collect();
    json!({ "scenario": { "preparations": 4, "measurements": 2, "outcomes": 2, "carrier_dimension": 2, "leakage": 0.001, "targets": targets },
            "rounds": "independent" })
}

/// Contrast 0.7 in the fashion of four states 45° apart, another one each time: no two can share a solve.
pub fn large_batch(i: u64) -> Value {
    let (high, low) = (850_000 + 37 * i, 150_000 - 37 * i);
    let row = |a: bool, b: bool| {
        [[if a { high } else { low }, if a { low } else { high }], [if b { high } else { low }, if b { low } else { high }]]
    };
    json!({ "counts": [row(true, true), row(false, false), row(true, false), row(false, true)],
            "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z" })
}
