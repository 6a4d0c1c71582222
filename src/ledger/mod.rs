//! The append-only record of what was declared, posted and certified: an embedded SQLite file.
//!
//! One task writes ([`writer`]), in groups that share a commit, and answers only after it; readers ([`history`]) have
//! connections of their own that cannot write. What was answered is on disk.

pub mod history;
pub mod rows;
pub mod source;
pub mod tree;
pub mod writer;

use std::{
    path::{Path, PathBuf},
    sync::Arc,
    time::Duration,
};

use sqlx::{
    ConnectOptions, Connection, SqliteConnection,
    migrate::MigrateError,
    sqlite::{SqliteConnectOptions, SqliteJournalMode, SqlitePoolOptions, SqliteSynchronous},
};

use self::{history::History, writer::Writer};

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
    #[error("the ledger is closed")]
    Closed,
}

impl From<sqlx::Error> for LedgerError {
    fn from(source: sqlx::Error) -> Self {
        Self::Database { source: Arc::new(source) }
    }
}

/// An open ledger.
#[derive(Debug)]
pub struct Ledger {
    pub history: History,
    pub writer: Writer,
}

impl Ledger {
    /// Opens the file, creates it if it is missing, brings its layout up to date, and starts the writer.
    ///
    /// # Errors
    /// A file that cannot be opened or migrated, an old SQLite, or a setting that did not take.
    pub async fn open(path: &Path) -> Result<Self, LedgerError> {
        let cannot_open = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
        let options = SqliteConnectOptions::new()
            .filename(path)
            .journal_mode(SqliteJournalMode::Wal)
            .synchronous(SqliteSynchronous::Full)
            .foreign_keys(true)
            .busy_timeout(BUSY_TIMEOUT);
        let mut connection = options.clone().create_if_missing(true).connect().await.map_err(cannot_open)?;
        check_sqlite(&mut connection).await?;
        MIGRATIONS.run(&mut connection).await.map_err(|source| LedgerError::Migrate { source: Arc::new(source) })?;
        check_settings(&mut connection).await?;
        let mut transaction = connection.begin_with("BEGIN IMMEDIATE").await?;
        let older = tree::log_older_rows(&mut transaction).await?;
        transaction.commit().await?;
        if older > 0 {
            tracing::info!(entries = older, "rows that are older than the tree were logged in it");
        }
        // The writer's connection exists first: a reader cannot create the files that WAL mode needs.
        let pool = SqlitePoolOptions::new().max_connections(READERS).connect_with(options.read_only(true)).await.map_err(cannot_open)?;
        Ok(Self { history: History::new(pool), writer: Writer::start(connection) })
    }

    /// Writes what was handed in, then closes all connections.
    pub async fn close(&self) {
        // The writer last: a connection that cannot write cannot fold the write-ahead log into the file when it leaves.
        self.history.close().await;
        self.writer.close().await;
    }
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
