//! Tokens in the ledger: what changed, and the keyring that follows from it.

use std::sync::Arc;

use sqlx::SqliteConnection;

use super::{LedgerError, history::History, source::TOKEN, tree};
use crate::token::{Change, Keyring};

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
        let rows: Vec<String> = sqlx::query_scalar("SELECT document FROM token_changes ORDER BY change").fetch_all(&self.pool).await?;
        let changes: Result<Vec<Change>, _> = rows.iter().map(|text| serde_json::from_str(text)).collect();
        Ok(Keyring::of(changes.map_err(unreadable)?))
    }
}

/// Inside a transaction of the writer.
pub(super) async fn write_token_change(connection: &mut SqliteConnection, change: &Change) -> Result<(), LedgerError> {
    let document = serde_json::to_string(change).map_err(unreadable)?;
    let sql = "INSERT INTO token_changes (change, token, kind, recorded_at, document) \
               VALUES ((SELECT COALESCE(MAX(change), -1) + 1 FROM token_changes), ?, ?, ?, ?)";
    sqlx::query(sql)
        .bind(change.token().to_string())
        .bind(change.kind())
        .bind(change.recorded_at().microseconds())
        .bind(document)
        .execute(&mut *connection)
        .await?;
    tree::log(connection, &TOKEN, &format!("{}/{}", change.token(), change.kind())).await?;
    Ok(())
}

fn unreadable(source: serde_json::Error) -> LedgerError {
    LedgerError::Unreadable { what: "token change", source: Arc::new(source) }
}
