//! `bitassay export`

use std::{
    io::{BufWriter, stdout},
    path::PathBuf,
    process::ExitCode,
};

use anyhow::Context;
use bitassay::ledger::{export::export, key::Key, open_beside};
use clap::Args;

/// Print the whole ledger as lines of JSON, with the last signed checkpoint
///
/// A service may be using the database meanwhile; the export is of one moment. `bitassay verify FILE --key KEY` checks it elsewhere: it computes the
/// tree again and compares its root with the signed one, and checks every record against its witnesses. What was recorded after the
/// checkpoint is not covered by a signature; ask the service for `/v1/ledger/checkpoint` first, and everything until then is.
#[derive(Args)]
pub struct Export {
    /// The database
    #[arg(long, value_name = "FILE", default_value = "bitassay.sqlite")]
    database: PathBuf,

    /// The key of the ledger; only the checkpoint beside it is read [default: DATABASE.key]
    #[arg(long, value_name = "FILE")]
    ledger_key: Option<PathBuf>,
}

impl Export {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().context("no threads to run on")?;
        let entries = runtime.block_on(self.write())?;
        eprintln!("exported: {entries} entries");
        Ok(ExitCode::SUCCESS)
    }

    async fn write(self) -> anyhow::Result<u64> {
        let key = self.ledger_key.unwrap_or_else(|| Key::beside(&self.database));
        let checkpoint = Key::signed_note(&key)?.map(|(note, _)| note);
        let mut connection = open_beside(&self.database).await?;
        Ok(export(&mut connection, checkpoint, &mut BufWriter::new(stdout().lock())).await?)
    }
}
