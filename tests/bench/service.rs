//! The service over loopback, beside the same server on a route that only writes the same bytes durably, and one that does nothing.

use std::{
    borrow::Cow,
    net::SocketAddr,
    num::NonZeroU32,
    path::Path,
    sync::{Arc, OnceLock, mpsc},
    thread::JoinHandle,
    time::Duration,
};

use axum::{
    Router,
    body::Bytes,
    http::{StatusCode, header},
    response::IntoResponse,
    routing::post,
};
use bitassay::{
    certificate::Verdict,
    certify::certify,
    clock::{Clock, SystemClock},
    http::{limits::Limits, server},
    ledger::{Ledger, rows::Entry, writer::Expectation},
    profile::{Profile, ProfileDocument, RigName},
    service::{Service, Solvers},
    submission::{IdempotencyKey, Submission},
};
use sqlx::{
    ConnectOptions, SqliteConnection,
    sqlite::{SqliteConnectOptions, SqliteJournalMode, SqliteSynchronous},
};
use tempfile::TempDir;
use tokio::{
    net::TcpListener,
    sync::{mpsc as channel, oneshot},
};
use uuid::Uuid;

use crate::{
    batches::{Batches, profile},
    report::Section,
    requests::{self, Outcome, Until},
};

const TIME: Duration = Duration::from_secs(5);
const CLIENTS: [u64; 3] = [1, 8, 64];
/// Writes that share a commit at most, as in the ledger.
const GROUP: usize = 64;

pub fn run() -> Section {
    let mut section = Section::default();
    let served = Served::start();
    section.note(format!("{} s each; server and clients share the machine; p50 and p99 from request to answer", TIME.as_secs()));
    section.note("certify: distinct batches of one rig, from kept witnesses, answered once durable");
    section.note(format!(
        "write: the same requests, {} bytes each, as many as a certification adds to the ledger, written durably to an SQLite file with the \
         same settings, in groups",
        BYTES.get().map_or(0, String::len)
    ));
    section
        .note("store: the same requests, answered once the rows of a ready-made certification are in a ledger of their own: no certifying");
    section.note("nothing: the same requests, answered with a record's bytes");
    for clients in CLIENTS {
        let mut measure = |name: &str, path| {
            let outcome = requests::post(served.address, path, clients, Until::Elapsed(TIME));
            section.figure(format!("{clients} clients, {name}: rate"), outcome.rate(), "per second");
            section.figure(format!("{clients} clients, {name}: p50"), outcome.quantile(0.5), "ms");
            section.figure(format!("{clients} clients, {name}: p99"), outcome.quantile(0.99), "ms");
            section.figure(format!("{clients} clients, {name}: processor time, clients included"), outcome.used_each(), "µs per answer");
            outcome
        };
        let nothing: Outcome = measure("nothing", "/bench/nothing");
        let write = measure("write", "/bench/write");
        let stored: Outcome = measure("store", "/bench/store");
        let certified = measure("certify", "/v1/rigs/bench/batches");
        section.figure(format!("{clients} clients: certify against write"), certified.rate() / write.rate(), "times");
        section.figure(format!("{clients} clients: certify against store"), certified.rate() / stored.rate(), "times");
        section.figure(format!("{clients} clients: certify against nothing"), certified.rate() / nothing.rate(), "times");
        if clients == 64 {
            section.at_least("64 clients: durable certifications", certified.rate(), 2000.0, "per second");
            section.at_least("64 clients: certify against write", certified.rate() / write.rate(), 0.7, "times");
            section.below("64 clients: p99", certified.quantile(0.99), 60.0, "ms");
        }
    }
    served.stop();
    section
}

/// A server with the rig `bench`, whose geometry was solved, and the two routes that only the bench has.
pub struct Served {
    pub address: SocketAddr,
    stop: oneshot::Sender<()>,
    thread: JoinHandle<()>,
    _folder: TempDir,
}

/// As by default, but for the number of requests of one client, which stands for many here.
fn limits() -> Limits {
    Limits { rate: NonZeroU32::MAX, burst: NonZeroU32::MAX, ..Limits::default() }
}

impl Served {
    pub fn start() -> Self {
        // Beside the build, on the disk: a temporary folder may be in memory.
        let folder = tempfile::tempdir_in(concat!(env!("CARGO_MANIFEST_DIR"), "/target")).expect("a folder");
        let [ledger, bytes, rows] = ["ledger.sqlite", "bytes.sqlite", "rows.sqlite"].map(|name| folder.path().join(name));
        let (started, address) = mpsc::channel();
        let (stop, stopped) = oneshot::channel();
        let thread = std::thread::spawn(move || {
            let runtime = tokio::runtime::Builder::new_multi_thread().enable_all().build().expect("threads");
            runtime.block_on(async {
                let ledger = Ledger::open(&ledger).await.expect("a ledger");
                let solvers = Solvers::start(2, 64, Arc::new(certify)).expect("threads");
                let service = Service::new(ledger, solvers, Arc::new(SystemClock));
                let listener = TcpListener::bind("127.0.0.1:0").await.expect("a port");
                started.send(listener.local_addr().expect("an address")).expect("the bench waits");
                let beside = beside(&bytes, &rows).await;
                server::run_beside(listener, service, limits(), beside, async { drop(stopped.await) }).await.expect("a server");
            });
        });
        let address = address.recv().expect("a server");
        let record = first_record(address);
        RECORD.get_or_init(|| record.into());
        BYTES.get_or_init(|| bytes_of_a_certification(address, &folder.path().join("ledger.sqlite")));
        Self { address, stop, thread, _folder: folder }
    }

    pub fn stop(self) {
        drop(self.stop);
        self.thread.join().expect("the server ends well");
    }
}

/// What the routes of the bench answer: the record of a batch that kept witnesses certified.
static RECORD: OnceLock<Bytes> = OnceLock::new();
/// What the route that writes writes.
static BYTES: OnceLock<String> = OnceLock::new();
/// Certifications over which their size is averaged.
const SAMPLE: u64 = 500;

/// Declares the rig, has its geometry solved, and certifies one more batch.
fn first_record(address: SocketAddr) -> Vec<u8> {
    let put = ureq::put(format!("http://{address}/v1/rigs/bench")).send_json(profile()).expect("a rig");
    assert_eq!(put.status(), 201);
    let mut batches = Batches::new(u64::MAX);
    let mut post = |key: &str| {
        let request = ureq::post(format!("http://{address}/v1/rigs/bench/batches")).content_type("application/json");
        let mut answer = request.header("idempotency-key", key).send(batches.body()).expect("a certification");
        answer.body_mut().read_to_vec().expect("a record")
    };
    post("first");
    let record = post("second");
    assert!(String::from_utf8_lossy(&record).contains("\"origin\":\"kept\""), "the second batch was solved too");
    record
}

/// As many bytes as a certification adds to the ledger's file, with its share of indexes and tree.
fn bytes_of_a_certification(address: SocketAddr, ledger: &Path) -> String {
    let size = || {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().expect("a thread");
        let pages: i64 = runtime.block_on(async {
            let mut connection = SqliteConnectOptions::new().filename(ledger).read_only(true).connect().await.expect("a ledger");
            sqlx::query_scalar("PRAGMA page_count").fetch_one(&mut connection).await.expect("a number")
        });
        4096 * pages as u64
    };
    let before = size();
    requests::post(address, "/v1/rigs/bench/batches", 8, Until::Answers(SAMPLE));
    "x".repeat(((size() - before) / SAMPLE) as usize)
}

/// The routes that only the bench has.
async fn beside(bytes: &Path, rows: &Path) -> Router {
    let writer = write_bytes(bytes).await;
    let ledger = ledger_with_rig(rows).await;
    let answer = || (StatusCode::CREATED, [(header::CONTENT_TYPE, "application/json")], RECORD.get().cloned().unwrap_or_default());
    let nothing = async move |_: Bytes| answer().into_response();
    let write = async move |_: Bytes| {
        let (written, committed) = oneshot::channel();
        writer.send(written).await.expect("a writer");
        committed.await.expect("a commit");
        answer().into_response()
    };
    let store = async move |_: Bytes| {
        ledger.writer.keep_entry(entry()).await.expect("a ledger");
        answer().into_response()
    };
    Router::new().route("/bench/nothing", post(nothing)).route("/bench/write", post(write)).route("/bench/store", post(store))
}

/// A ledger that knows the rig and nothing else.
async fn ledger_with_rig(file: &Path) -> Arc<Ledger> {
    let ledger = Ledger::open(file).await.expect("a ledger");
    let document: ProfileDocument = serde_json::from_value(profile()).expect("a profile");
    let profile = Profile::try_from(document).expect("a profile");
    ledger.writer.keep_profile(rig(), profile, Expectation::Absent, SystemClock.now()).await.expect("a rig");
    Arc::new(ledger)
}

fn rig() -> RigName {
    RigName::try_from("bench".to_owned()).expect("a name")
}

/// The record of [`RECORD`] as an entry of its own. Of witnesses a certification from kept ones writes only digests, which are left out here.
fn entry() -> Entry {
    let record = RECORD.get().map_or(Cow::Borrowed(""), |record| String::from_utf8_lossy(record));
    let id = Uuid::now_v7();
    let submission =
        Submission { key: IdempotencyKey::try_from(&*id.to_string()).expect("a key"), body_digest: format!("sha256:{}", "0".repeat(64)) };
    Entry {
        id,
        rig: rig(),
        profile_version: 1,
        verdict: Verdict::Certified,
        reason: None,
        recorded_at: SystemClock.now(),
        certified_bits: 1,
        rounds: 8_000_000,
        failure: Some(2e-10),
        commitment: None,
        record: record.into_owned(),
        witnesses: vec![],
        kept: vec![],
        submission,
        refusal: None,
    }
}

/// A task that writes as many bytes as a certification for everyone who asks, in groups, and answers after the commit.
async fn write_bytes(file: &Path) -> channel::Sender<oneshot::Sender<()>> {
    let options = SqliteConnectOptions::new().filename(file).create_if_missing(true);
    let options = options.journal_mode(SqliteJournalMode::Wal).synchronous(SqliteSynchronous::Full);
    let mut connection: SqliteConnection = options.connect().await.expect("a database");
    sqlx::query("CREATE TABLE bytes (number INTEGER PRIMARY KEY, bytes TEXT NOT NULL) STRICT")
        .execute(&mut connection)
        .await
        .expect("a table");
    let (writer, mut asked) = channel::channel::<oneshot::Sender<()>>(GROUP);
    tokio::spawn(async move {
        let mut group = Vec::with_capacity(GROUP);
        while asked.recv_many(&mut group, GROUP).await > 0 {
            sqlx::query("BEGIN IMMEDIATE").execute(&mut connection).await.expect("a transaction");
            for _ in &group {
                let bytes = BYTES.get().map_or("", String::as_str);
                sqlx::query("INSERT INTO bytes (bytes) VALUES (?)").bind(bytes).execute(&mut connection).await.expect("a row");
            }
            sqlx::query("COMMIT").execute(&mut connection).await.expect("a commit");
            for written in group.drain(..) {
                let _ = written.send(());
            }
        }
    });
    writer
}
