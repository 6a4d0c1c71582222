//! A copy of the ledger while it is in use.

use std::{fs::File, io, path::Path};

use sqlx::{Connection, SqliteConnection};

use super::{
    LedgerError,
    audit::{Audit, AuditError},
    checkpoint::Checkpoint,
    open_beside,
    tree::{Frontier, Hash},
};

/// Why there is no copy, or none that can be relied on.
#[derive(Debug, thiserror::Error)]
pub enum BackupError {
    #[error("there is a file of this name already; a copy never takes another's place")]
    Exists,
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    #[error("the copy cannot be written")]
    File(#[from] io::Error),
    #[error("the copy is not in order: {0}")]
    Fault(String),
}

/// Copies the ledger as it is at one moment, and goes through the copy; answers with the number of entries and the root of their tree.
/// `signed` is what was signed last before the copy was begun.
///
/// # Errors
/// A copy that could not be made, or is not in order.
pub async fn backup(from: &mut SqliteConnection, to: &Path, signed: Option<&Checkpoint>) -> Result<(u64, Hash), BackupError> {
    if to.try_exists()? {
        return Err(BackupError::Exists);
    }
    sqlx::query("VACUUM INTO ?").bind(to.to_string_lossy()).execute(from).await.map_err(LedgerError::from)?;
    File::open(to)?.sync_all()?;
    File::open(to.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new(".")))?.sync_all()?;
    let mut copy = open_beside(to).await?;
    let empty = Checkpoint { origin: String::new(), size: 0, root: Frontier::default().root() };
    let mut audit = Audit::new(signed.unwrap_or(&empty));
    audit.complete(&mut copy).await.map_err(|error| match error {
        AuditError::Fault(detail) => BackupError::Fault(detail),
        AuditError::Ledger(error) => BackupError::Ledger(error),
    })?;
    copy.close().await.map_err(LedgerError::from)?;
    Ok((audit.size(), audit.root()))
}
