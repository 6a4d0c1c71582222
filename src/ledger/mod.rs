//! The append-only record of what was declared, posted and certified: an embedded SQLite file.
//!
//! One task writes ([`writer`]), in groups that share a commit, and answers only after it; readers ([`history`]) have
//! connections of their own that cannot write. What was answered is on disk.

pub mod audit;
pub mod backup;
pub mod checkpoint;
pub mod export;
pub mod history;
pub mod key;
pub mod proofs;
pub mod rows;
pub mod seal;
pub mod source;
pub mod tokens;
pub mod tree;
pub mod writer;

use std::{
    path::{Path, PathBuf},
    sync::Arc,
    time::Duration,
};

use tokio::task::JoinHandle;

use sqlx::{
    ConnectOptions, Connection, SqliteConnection,
    migrate::MigrateError,
    sqlite::{SqliteConnectOptions, SqliteJournalMode, SqlitePoolOptions, SqliteSynchronous},
};

use self::{
    history::History,
    key::{Key, KeyError},
    seal::{Fault, Seal},
    source::Draft,
    writer::Writer,
};
use crate::clock::{Clock, Stamp, SystemClock};

/// Oldest SQLite that is trusted with the ledger, as (major, minor, patch): earlier ones can, rarely, corrupt a database in
/// WAL mode when connections checkpoint at the same time.
const OLDEST_SQLITE: (u32, u32, u32) = (3, 51, 3);
/// How long a statement waits for another process that holds the file.
const BUSY_TIMEOUT: Duration = Duration::from_secs(5);
const READERS: u32 = 4;

static MIGRATIONS: sqlx::migrate::Migrator = sqlx::migrate!("./migrations");

/// Why the ledger cannot be opened, read or written.
#[derive(Debug, Clone, thiserror::Error)]
pub enum LedgerError {
    #[error("the database {} cannot be opened", path.display())]
    Open { path: PathBuf, source: Arc<sqlx::Error> },
    #[error("the database cannot be brought to the current layout")]
    Migrate { source: Arc<MigrateError> },
    #[error("SQLite {found} is too old to be trusted with the ledger")]
    OldSqlite { found: String },
    #[error("the database did not take the setting {name}: it says {found:?}")]
    Setting { name: &'static str, found: String },
    #[error("the database failed")]
    Database {
        #[from]
        source: Arc<sqlx::Error>,
    },
    #[error("a stored {what} cannot be read")]
    Unreadable { what: &'static str, source: Arc<serde_json::Error> },
    #[error("a stored {what} is out of range")]
    OutOfRange { what: &'static str },
    #[error("a {kind} that was written cannot be found to be logged")]
    Unlogged { kind: &'static str },
    #[error("the ledger is not in order, so that nothing is recorded: {detail}")]
    Fault { detail: String },
    #[error(transparent)]
    Key(#[from] KeyError),
    #[error("the ledger is closed")]
    Closed,
}

impl From<sqlx::Error> for LedgerError {
    fn from(source: sqlx::Error) -> Self {
        Self::Database { source: Arc::new(source) }
    }
}

impl LedgerError {
    /// SQLite's primary result code, the last byte of the one that it gives.
    fn code(&self) -> Option<u32> {
        let Self::Database { source } = self else { return None };
        let code: u32 = source.as_database_error()?.code()?.parse().ok()?;
        Some(code & 0xff)
    }

    /// Whether the file does not hold what a database holds.
    pub fn is_damage(&self) -> bool {
        matches!(self.code(), Some(11 | 26))
    }

    /// What keeps the database from being written, if that is what is wrong and it may pass.
    pub fn obstacle(&self) -> Option<&'static str> {
        match self.code()? {
            5 | 6 => Some("another process holds the database"),
            8 => Some("the database is read-only"),
            10 => Some("the disk failed"),
            13 => Some("the disk is full"),
            14 => Some("the database's files cannot be opened"),
            _ => None,
        }
    }
}

/// Where a ledger is kept, and what is done about it unasked.
#[derive(Debug, Clone)]
pub struct Place {
    pub database: PathBuf,
    /// File of the signing key.
    pub key: PathBuf,
    /// How often everything is gone through again.
    pub audit_interval: Duration,
}

impl Place {
    /// A database with its key beside it.
    pub fn of(database: &Path) -> Self {
        Self { database: database.to_owned(), key: Key::beside(database), audit_interval: Duration::from_secs(3600) }
    }
}

/// An open ledger.
#[derive(Debug)]
pub struct Ledger {
    pub history: History,
    pub writer: Writer,
    pub seal: Arc<Seal>,
    audits: JoinHandle<()>,
    path: PathBuf,
}

impl Ledger {
    /// Opens the file, creates it if it is missing, brings its layout up to date, and starts the writer.
    ///
    /// # Errors
    /// A file that cannot be opened or migrated, an old SQLite, or a setting that did not take.
    pub async fn open(path: &Path) -> Result<Self, LedgerError> {
        Self::open_at(&Place::of(path)).await
    }

    /// As [`Self::open`], with the key in another place.
    ///
    /// # Errors
    /// As [`Self::open`], or a key that cannot be used.
    pub async fn open_at(place: &Place) -> Result<Self, LedgerError> {
        let path = &place.database;
        let cannot_open = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
        let options = options(path);
        let mut connection = options.clone().create_if_missing(true).connect().await.map_err(cannot_open)?;
        check_sqlite(&mut connection).await?;
        MIGRATIONS.run(&mut connection).await.map_err(|source| LedgerError::Migrate { source: Arc::new(source) })?;
        check_settings(&mut connection).await?;
        let key = Key::open(&place.key)?;
        let fault = Fault::default();
        prepare(&mut connection, &key, &fault, SystemClock.now()).await?;
        // The writer's connection exists first: a reader cannot create the files that WAL mode needs.
        let pool = SqlitePoolOptions::new().max_connections(READERS).connect_with(options.read_only(true)).await.map_err(cannot_open)?;
        let seal = Seal::new(pool.clone(), key, fault.clone());
        let audits = seal.watch(place.audit_interval);
        let (history, writer) = (History::new(pool), Writer::start(connection, fault));
        Ok(Self { history, writer, seal, audits, path: path.to_owned() })
    }

    /// Bytes of the database file and of its write-ahead log; a file that cannot be looked at counts zero.
    pub fn sizes(&self) -> (u64, u64) {
        let size = |path: &Path| std::fs::metadata(path).map_or(0, |data| data.len());
        let mut log = self.path.clone().into_os_string();
        log.push("-wal");
        (size(&self.path), size(Path::new(&log)))
    }

    /// Writes what was handed in, then closes all connections.
    pub async fn close(&self) {
        self.audits.abort();
        self.seal.close().await;
        // The writer last: a connection that cannot write cannot fold the write-ahead log into the file when it leaves.
        self.history.close().await;
        self.writer.close().await;
    }
}

/// Brings the tree up to date, unless the ledger is not an extension of what was signed: logs rows that are older than the tree, and the key
/// if it is another one than before.
async fn prepare(connection: &mut SqliteConnection, key: &Key, fault: &Fault, now: Stamp) -> Result<(), LedgerError> {
    let mut transaction = connection.begin_with("BEGIN IMMEDIATE").await?;
    match audit::check_signed(&mut transaction, key.last()).await {
        Ok(()) => {}
        Err(audit::AuditError::Fault(detail)) => {
            fault.set(&detail);
            return Ok(());
        }
        Err(audit::AuditError::Ledger(error)) => return Err(error),
    }
    let older = tree::log_older_rows(&mut transaction).await?;
    if older > 0 {
        tracing::info!(entries = older, "rows that are older than the tree were logged in it");
    }
    let sql = "SELECT entry ->> '$.body.key' FROM tree_leaves WHERE kind = 'key' ORDER BY leaf DESC LIMIT 1";
    let known: Option<String> = sqlx::query_scalar(sql).fetch_optional(&mut *transaction).await?;
    let current = key.verifier().to_string();
    if known.as_ref() != Some(&current) {
        let number: i64 =
            sqlx::query_scalar("SELECT COUNT(*) + 1 FROM tree_leaves WHERE kind = 'key'").fetch_one(&mut *transaction).await?;
        if let Some(known) = &known {
            tracing::warn!(%known, %current, "the ledger continues under another key");
        }
        let body = [("key".to_owned(), current.into()), ("replaces".to_owned(), known.into())];
        let subject = number.to_string();
        let draft = Draft { kind: "key", subject, recorded_at: now, body: body.into_iter().collect(), texts: vec![] };
        let mut frontier = tree::Frontier::read(&mut transaction).await?;
        tree::append(&mut transaction, &mut frontier, &draft, tree::INSERT).await?;
    }
    transaction.commit().await?;
    Ok(())
}

/// How the ledger's file is opened by whoever writes it.
fn options(path: &Path) -> SqliteConnectOptions {
    SqliteConnectOptions::new()
        .filename(path)
        .journal_mode(SqliteJournalMode::Wal)
        .synchronous(SqliteSynchronous::Full)
        .foreign_keys(true)
        .busy_timeout(BUSY_TIMEOUT)
}

/// A connection to a ledger that a service may be using, which writes nothing.
///
/// # Errors
/// A file that cannot be opened, or has another layout.
pub async fn open_beside(database: &Path) -> Result<SqliteConnection, LedgerError> {
    let cannot_open = |source| LedgerError::Open { path: database.to_owned(), source: Arc::new(source) };
    // Not read-only for SQLite, which would be unable to create the files that WAL mode needs.
    let options = SqliteConnectOptions::new().filename(database).busy_timeout(BUSY_TIMEOUT);
    let mut connection = options.connect().await.map_err(cannot_open)?;
    sqlx::query("SELECT 1 FROM tree_leaves LIMIT 1").fetch_optional(&mut connection).await.map_err(cannot_open)?;
    Ok(connection)
}

async fn check_sqlite(connection: &mut SqliteConnection) -> Result<(), LedgerError> {
    let found: String = sqlx::query_scalar("SELECT sqlite_version()").fetch_one(connection).await?;
    let mut numbers = found.split('.').map(|part| part.parse::<u32>().unwrap_or(0));
    let mut next = || numbers.next().unwrap_or(0);
    if (next(), next(), next()) >= OLDEST_SQLITE { Ok(()) } else { Err(LedgerError::OldSqlite { found }) }
}

/// A pragma that SQLite does not take is ignored in silence; durability must not hang on that.
async fn check_settings(connection: &mut SqliteConnection) -> Result<(), LedgerError> {
    let journal: String = sqlx::query_scalar("PRAGMA journal_mode").fetch_one(&mut *connection).await?;
    if journal != "wal" {
        return Err(LedgerError::Setting { name: "journal_mode=WAL", found: journal });
    }
    let numbers = [("PRAGMA synchronous", "synchronous=FULL", 2), ("PRAGMA foreign_keys", "foreign_keys=ON", 1)];
    for (pragma, name, wanted) in numbers {
        let found: i64 = sqlx::query_scalar(pragma).fetch_one(&mut *connection).await?;
        if found != wanted {
            return Err(LedgerError::Setting { name, found: found.to_string() });
        }
    }
    connection.ping().await?;
    Ok(())
}
