//! `bitassay backup`

use std::{path::PathBuf, process::ExitCode};

use anyhow::Context;
use bitassay::ledger::{
    backup::{BackupError, backup},
    key::Key,
    open_beside,
};
use clap::Args;
use serde_json::json;

use super::document;

/// Copy the database of a service that may be running
///
/// The copy is of one moment, whole, on disk when the command ends, and gone through entry by entry. To restore it, stop the service, put the copy
/// in the place of the database, and remove the files beside it whose names end with `-wal` and `-shm`. Leave the key and its
/// `.checkpoint` as they are: if anything was signed after the copy was made, the service then says so, and signs and records nothing until you
/// move both away and it continues under a new key.
///
/// Exit status: 0 copied; 3 the copy is not in order, which says that the database is not; 2 anything else.
#[derive(Args)]
pub struct Backup {
    /// The copy; must not exist
    to: PathBuf,

    /// The database
    #[arg(long, value_name = "FILE", default_value = "bitassay.sqlite")]
    database: PathBuf,

    /// The key of the ledger; only the checkpoint beside it is read [default: DATABASE.key]
    #[arg(long, value_name = "FILE")]
    ledger_key: Option<PathBuf>,
}

impl Backup {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().context("no threads to run on")?;
        runtime.block_on(self.copy())
    }

    async fn copy(self) -> anyhow::Result<ExitCode> {
        let key = self.ledger_key.unwrap_or_else(|| Key::beside(&self.database));
        let signed = Key::signed_note(&key)?.map(|(_, checkpoint)| checkpoint);
        let mut connection = open_beside(&self.database).await?;
        let (entries, root) = match backup(&mut connection, &self.to, signed.as_ref()).await {
            Err(BackupError::Fault(detail)) => {
                eprintln!("bitassay: the copy is not in order: {detail}");
                return Ok(ExitCode::from(3));
            }
            outcome => outcome.with_context(|| self.to.display().to_string())?,
        };
        document::print(&json!({ "database": self.to, "entries": entries, "root": hex::encode(root) }))?;
        Ok(ExitCode::SUCCESS)
    }
}
