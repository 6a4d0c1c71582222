//! A server as a process, on a database with one rig whose batches need no solve.

use std::{
    io::{BufRead, BufReader},
    path::{Path, PathBuf},
    process::{Child, Command, Stdio},
};

use bitassay::ledger::{
    checkpoint::{Checkpoint, Verifier},
    proofs::extends,
    tree::Hash,
};
use serde_json::{Value, json};
use sqlx::{AssertSqlSafe, ConnectOptions, Connection, SqliteConnection, sqlite::SqliteConnectOptions};
use tempfile::TempDir;

use crate::client::{Client, Reply};

const ROUNDS: u64 = 400_000;

/// A database's folder.
pub struct Site {
    pub folder: TempDir,
}

impl Site {
    pub fn new() -> Self {
        Self { folder: tempfile::tempdir().unwrap() }
    }

    /// The same files in another folder; nobody may be using them.
    pub fn copy(&self) -> Self {
        let copy = Self::new();
        for entry in std::fs::read_dir(self.folder.path()).unwrap() {
            let entry = entry.unwrap();
            std::fs::copy(entry.path(), copy.folder.path().join(entry.file_name())).unwrap();
        }
        copy
    }

    pub fn database(&self) -> PathBuf {
        self.folder.path().join("ledger.sqlite")
    }

    pub fn key(&self) -> PathBuf {
        self.folder.path().join("ledger.key")
    }

    /// The command that serves it, from some other program perhaps.
    pub fn command(&self, program: Command, database: &Path) -> Command {
        let mut command = program;
        command.env_remove("RUST_LOG").args(["serve", "--listen", "127.0.0.1:0", "--audit-interval", "1", "--database"]);
        command.arg(database).arg("--ledger-key").arg(self.key()).stderr(Stdio::piped());
        command
    }

    pub fn serve(&self) -> Process {
        Process::start(self.command(bitassay(), &self.database()))
    }

    /// A server on a new database, and the time after which batches may begin.
    pub fn first(&self) -> (Process, Value) {
        let process = self.serve();
        let began = declare(&process.client);
        (process, began)
    }

    /// Runs statements on the database beside the server, with no trigger in the way.
    pub fn meddle(&self, statements: &[&str]) {
        on(&self.database(), async |mut connection| {
            let triggers: Vec<String> =
                sqlx::query_scalar("SELECT name FROM sqlite_schema WHERE type = 'trigger'").fetch_all(&mut connection).await.unwrap();
            for trigger in triggers {
                sqlx::query(AssertSqlSafe(format!("DROP TRIGGER {trigger}"))).execute(&mut connection).await.unwrap();
            }
            for statement in statements {
                let done = sqlx::query(AssertSqlSafe((*statement).to_owned())).execute(&mut connection).await.unwrap();
                assert!(done.rows_affected() > 0, "{statement} did nothing");
            }
            connection.close().await.unwrap();
        });
    }
}

pub fn bitassay() -> Command {
    Command::new(env!("CARGO_BIN_EXE_bitassay"))
}

/// Works on a database.
pub fn on<T>(database: &Path, work: impl AsyncFnOnce(SqliteConnection) -> T) -> T {
    let options = SqliteConnectOptions::new().filename(database).foreign_keys(false);
    tokio::runtime::Runtime::new().unwrap().block_on(async { work(options.connect().await.unwrap()).await })
}

/// Declares the rig and commits; answers with the time of the commitment.
pub fn declare(client: &Client) -> Value {
    let profile = json!({
        "scenario": { "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1, "leakage": 0.1, "targets": [[0, 0]] },
        "rounds": "memory", "level": "lean", "setting_distribution": [[0.5], [0.5]],
    });
    client.put_rig("bench", &profile, &[]).expect(201);
    let order = json!({"expected_behaviour": [[[0.78, 0.22]], [[0.22, 0.78]]], "rounds": ROUNDS});
    client.post_commitment("bench", &order).expect(201).json()["recorded_at"].clone()
}

/// One batch after another, all different: every third began too early, and is refused.
pub fn batch(number: u64, began: &Value) -> Value {
    let first = ROUNDS * 39 / 100 + number % 1000;
    let began = if number % 3 == 2 { &json!("2020-01-01T00:00:00Z") } else { began };
    json!({
        "counts": [[[first, ROUNDS / 2 - first]], [[ROUNDS / 2 - first, first]]], "started_at": began, "ended_at": "2100-01-01T00:00:00Z",
    })
}

/// What a batch is answered with.
pub fn status(number: u64) -> u16 {
    if number % 3 == 2 { 422 } else { 201 }
}

pub struct Process {
    pub child: Child,
    pub client: Client,
}

impl Process {
    pub fn start(mut command: Command) -> Self {
        let mut child = command.spawn().unwrap();
        let mut lines = BufReader::new(child.stderr.take().unwrap()).lines();
        let first = lines.next().unwrap().unwrap();
        let mut listening = lines.by_ref().map_while(Result::ok);
        let listening = std::iter::once(first).chain(&mut listening).find(|line| line.starts_with("listening on "));
        let client = Client::new(listening.expect("a server").trim_start_matches("listening on ").to_owned());
        // The rest is read as well, so that the process never waits for room to write.
        std::thread::spawn(move || lines.for_each(drop));
        Self { child, client }
    }

    pub fn post(&self, number: u64, began: &Value) -> Reply {
        self.client.post_batch("bench", &format!("batch-{number}"), &batch(number, began))
    }

    /// The current checkpoint, confirmed.
    pub fn checkpoint(&self) -> Checkpoint {
        let key: Verifier = self.client.get("/v1/ledger/key").expect(200).text().trim().parse().unwrap();
        key.confirm(self.client.get("/v1/ledger/checkpoint").expect(200).text()).unwrap()
    }

    /// Whether the ledger is an extension of an earlier checkpoint.
    pub fn extends(&self, old: &Checkpoint, new: &Checkpoint) -> bool {
        let proof = self.client.get(&format!("/v1/ledger/proofs/consistency?from={}&to={}", old.size, new.size)).expect(200).json();
        let hashes = proof["proof"].as_array().unwrap().iter().map(|hash| Hash::try_from(hex::decode(hash.as_str().unwrap()).unwrap()));
        let hashes: Vec<Hash> = hashes.map(Result::unwrap).collect();
        extends((old.size, &old.root), (new.size, &new.root), &hashes)
    }

    /// Asks the server to end, and waits.
    pub fn stop(mut self) {
        let sent = Command::new("kill").args(["-TERM", &self.child.id().to_string()]).status().unwrap();
        assert!(sent.success() && self.child.wait().unwrap().success());
    }
}

impl Drop for Process {
    fn drop(&mut self) {
        drop(self.child.kill());
        drop(self.child.wait());
    }
}
