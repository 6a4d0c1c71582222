//! Starts and stops servers, and what they certify with.

use std::{
    net::SocketAddr,
    path::{Path, PathBuf},
    sync::{Arc, LazyLock, mpsc},
    thread::JoinHandle,
};

use bitassay::{
    certificate::{Reason, Verdict},
    certify::{Certification, certify},
    clock::SystemClock,
    http::{limits::Limits, server},
    ledger::Ledger,
    request::{Data, Request, RequestDocument, RoundModel},
    service::{Certifier, Service, Solvers},
};
use serde_json::{Value, json};
use sqlx::{ConnectOptions, Connection, SqliteConnection, sqlite::SqliteConnectOptions};
use tempfile::TempDir;
use tokio::{net::TcpListener, runtime::Runtime, sync::oneshot};

use crate::client::Client;

/// A running server; stops when dropped.
pub struct Running {
    pub address: SocketAddr,
    pub database: PathBuf,
    stop: Option<oneshot::Sender<()>>,
    thread: Option<JoinHandle<()>>,
    /// The database's folder, unless it belongs to the test.
    pub folder: Option<TempDir>,
}

/// How a server solves.
pub struct Solving {
    pub certifier: Certifier,
    pub threads: usize,
    pub queue: usize,
    pub limits: Limits,
}

impl Default for Solving {
    fn default() -> Self {
        Self { certifier: Arc::new(stand_in), threads: 2, queue: 64, limits: Limits::default() }
    }
}

impl Running {
    /// A server on a new database, with the stand-in.
    pub fn new() -> Self {
        Self::solving(Solving::default())
    }

    pub fn limited(limits: Limits) -> Self {
        Self::solving(Solving { limits, ..Solving::default() })
    }

    pub fn solving(solving: Solving) -> Self {
        let folder = tempfile::tempdir().unwrap();
        let mut running = Self::on(&folder.path().join("ledger.sqlite"), solving);
        running.folder = Some(folder);
        running
    }

    /// A server on a database that is there already, perhaps.
    pub fn on(database: &Path, solving: Solving) -> Self {
        let (started, address) = mpsc::channel();
        let (stop, stopped) = oneshot::channel();
        let file = database.to_owned();
        let thread = std::thread::spawn(move || {
            let runtime = tokio::runtime::Builder::new_multi_thread().worker_threads(2).enable_all().build().unwrap();
            runtime.block_on(async {
                let ledger = Ledger::open(&file).await.unwrap();
                let solvers = Solvers::start(solving.threads, solving.queue, solving.certifier).unwrap();
                let service = Service::new(ledger, solvers, Arc::new(SystemClock));
                service.recall_witnesses().await.unwrap();
                let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
                started.send(listener.local_addr().unwrap()).unwrap();
                let signal = async { drop(stopped.await) };
                server::run(listener, service, solving.limits, signal).await.unwrap();
            });
        });
        let address = address.recv().unwrap();
        Self { address, database: database.to_owned(), stop: Some(stop), thread: Some(thread), folder: None }
    }

    pub fn client(&self) -> Client {
        Client::new(format!("http://{}", self.address))
    }

    /// Asks the server to stop, without waiting.
    pub fn signal(&mut self) {
        drop(self.stop.take());
    }

    /// Stops the server and waits until it has.
    pub fn stop(mut self) {
        self.end();
    }

    fn end(&mut self) {
        self.signal();
        if let Some(thread) = self.thread.take() {
            let ended = thread.join();
            assert!(ended.is_ok() || std::thread::panicking(), "the server panicked");
        }
    }

    /// Number of rows of each table.
    pub fn rows(&self) -> Vec<(String, i64)> {
        query(&self.database, async |mut connection| {
            let sql = "SELECT name FROM sqlite_schema WHERE type = 'table' AND name NOT LIKE 'sqlite\\_%' ESCAPE '\\' ORDER BY name";
            let tables: Vec<String> = sqlx::query_scalar(sql).fetch_all(&mut connection).await.unwrap();
            let mut rows = vec![];
            for table in tables {
                let sql = sqlx::AssertSqlSafe(format!("SELECT COUNT(*) FROM {table}"));
                rows.push((table, sqlx::query_scalar(sql).fetch_one(&mut connection).await.unwrap()));
            }
            connection.close().await.unwrap();
            rows
        })
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        self.end();
    }
}

/// Works on a database beside the server.
pub fn query<T>(database: &Path, work: impl AsyncFnOnce(SqliteConnection) -> T) -> T {
    let options = SqliteConnectOptions::new().filename(database).foreign_keys(true);
    Runtime::new().unwrap().block_on(async { work(options.connect().await.unwrap()).await })
}

/// Two states with bounded vacuum: the smallest scenario there is something to certify about. Every batch is solved, so that the stand-in has
/// its say.
pub fn profile() -> Value {
    json!({
        "freshness": "always",
        "scenario": { "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1, "leakage": 0.1, "targets": [[0, 0]] },
        "rounds": "independent",
        "level": "lean",
    })
}

/// A batch for that profile. The stand-in certifies it if the first count is even.
pub fn batch(first: u64) -> Value {
    json!({
        "counts": [[[first, 1000]], [[1000, 1000]]],
        "started_at": "2026-03-01T12:00:00Z",
        "ended_at": "2026-03-01T12:05:00Z",
    })
}

/// A server with the rig `bench` on it.
pub fn with_rig() -> (Running, Client) {
    let running = Running::new();
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    (running, client)
}

/// First count at which the stand-in panics.
pub const PANICS: u64 = 666;

/// A real certificate with a real witness, to be dressed up.
static PATTERN: LazyLock<Certification> = LazyLock::new(|| {
    let document: RequestDocument = serde_json::from_value(json!({
        "scenario": profile()["scenario"], "counts": [[[78_000, 22_000]], [[22_000, 78_000]]], "rounds": "independent", "level": "lean",
    }))
    .unwrap();
    certify(&Request::try_from(document).unwrap())
});

/// Certifies in no time, by a rule that tests can rely on: estimates are estimates; otherwise a batch whose first count is even
/// yields a tenth of its rounds in bits, and one whose first count is odd is refused.
pub fn stand_in(request: &Request) -> Certification {
    let Certification { mut certificate, mut witnesses } = PATTERN.clone();
    assert!(!witnesses.is_empty(), "{certificate:?}");
    let Data::Counts(counts) = request.data() else { panic!("no counts") };
    let first = counts.table()[0][0][0];
    assert_ne!(first, PANICS, "a panic that is part of the test");
    certificate.scenario = request.scenario().clone();
    certificate.counts = Some(counts.table().clone());
    certificate.counts_digest = Some(counts.digest());
    certificate.total_rounds = Some(counts.total());
    certificate.verdict = Verdict::Certified;
    certificate.reason = None;
    certificate.certified_bits = counts.total() / 10;
    if first % 2 == 1 {
        certificate.verdict = Verdict::Refused;
        certificate.reason = Some(Reason::ZeroBound);
        certificate.certified_bits = 0;
        certificate.targets.clear();
        witnesses.clear();
    }
    if first == 2 {
        certificate.verdict = Verdict::Estimate;
        certificate.rounds = RoundModel::PlugIn;
        certificate.certified_bits = 0;
    }
    certificate.bits_per_round = certificate.certified_bits as f64 / counts.total() as f64;
    Certification { certificate, witnesses }
}
