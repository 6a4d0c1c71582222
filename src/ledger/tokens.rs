//! Tokens in the ledger: what changed, and the keyring that follows from it.

use std::{path::Path, sync::Arc};

use sqlx::{ConnectOptions, Connection, SqliteConnection, SqliteExecutor};

use super::{LedgerError, MIGRATIONS, check_settings, check_sqlite, history::History, options, source::TOKEN, tree};
use crate::{
    profile::RigName,
    token::{Change, Keyring},
};

impl History {
    /// How many changes of tokens there are. Asked at every request: a change is heeded from the next one on, whoever made it.
    ///
    /// # Errors
    /// The database's.
    pub async fn token_changes(&self) -> Result<usize, LedgerError> {
        let sql = "SELECT COALESCE(MAX(change), -1) + 1 FROM token_changes";
        let changes: i64 = sqlx::query_scalar(sql).fetch_one(&self.pool).await?;
        usize::try_from(changes).map_err(|_| LedgerError::OutOfRange { what: "number of token changes" })
    }

    /// All tokens.
    ///
    /// # Errors
    /// The database's, or a change that cannot be read.
    pub async fn keyring(&self) -> Result<Keyring, LedgerError> {
        keyring(&self.pool).await
    }
}

async fn keyring(executor: impl SqliteExecutor<'_>) -> Result<Keyring, LedgerError> {
    let rows: Vec<String> = sqlx::query_scalar("SELECT document FROM token_changes ORDER BY change").fetch_all(executor).await?;
    let changes: Result<Vec<Change>, _> = rows.iter().map(|text| serde_json::from_str(text)).collect();
    Ok(Keyring::of(changes.map_err(unreadable)?))
}

/// The tokens of a database, for whoever changes them, beside a running service or before there is one. Needs no signing key.
#[derive(Debug)]
pub struct Tokens {
    connection: SqliteConnection,
}

impl Tokens {
    /// Opens the file, and creates it if it is missing.
    ///
    /// # Errors
    /// As of [`super::Ledger::open`].
    pub async fn open(path: &Path) -> Result<Self, LedgerError> {
        let cannot_open = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
        let mut connection = options(path).create_if_missing(true).connect().await.map_err(cannot_open)?;
        check_sqlite(&mut connection).await?;
        MIGRATIONS.run(&mut connection).await.map_err(|source| LedgerError::Migrate { source: Arc::new(source) })?;
        check_settings(&mut connection).await?;
        Ok(Self { connection })
    }

    /// All tokens.
    ///
    /// # Errors
    /// The database's, or a change that cannot be read.
    pub async fn keyring(&mut self) -> Result<Keyring, LedgerError> {
        keyring(&mut self.connection).await
    }

    /// Whether a rig has a profile.
    ///
    /// # Errors
    /// The database's.
    pub async fn knows(&mut self, rig: &RigName) -> Result<bool, LedgerError> {
        let sql = "SELECT 1 FROM rig_profiles WHERE rig = ? LIMIT 1";
        Ok(sqlx::query(sql).bind(rig.as_str()).fetch_optional(&mut self.connection).await?.is_some())
    }

    /// Keeps a change and logs it; durable when this returns.
    ///
    /// # Errors
    /// The database's, which also refuses what contradicts the changes before.
    pub async fn keep(&mut self, change: &Change) -> Result<(), LedgerError> {
        let document = serde_json::to_string(change).map_err(unreadable)?;
        let mut transaction = self.connection.begin_with("BEGIN IMMEDIATE").await?;
        // What is older than the tree has to be in it first.
        tree::log_older_rows(&mut transaction).await?;
        let sql = "INSERT INTO token_changes (change, token, kind, recorded_at, document) \
                   VALUES ((SELECT COALESCE(MAX(change), -1) + 1 FROM token_changes), ?, ?, ?, ?)";
        sqlx::query(sql)
            .bind(change.token().to_string())
            .bind(change.kind())
            .bind(change.recorded_at().microseconds())
            .bind(document)
            .execute(&mut *transaction)
            .await?;
        let mut frontier = tree::Frontier::read(&mut transaction).await?;
        tree::log(&mut transaction, &mut frontier, &TOKEN, &format!("{}/{}", change.token(), change.kind())).await?;
        transaction.commit().await?;
        Ok(())
    }

    /// Closes the connection.
    ///
    /// # Errors
    /// The database's.
    pub async fn close(self) -> Result<(), LedgerError> {
        Ok(self.connection.close().await?)
    }
}

fn unreadable(source: serde_json::Error) -> LedgerError {
    LedgerError::Unreadable { what: "token change", source: Arc::new(source) }
}
