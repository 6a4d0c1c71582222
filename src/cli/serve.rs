//! `bitassay serve`

use std::{io::IsTerminal, net::SocketAddr, path::PathBuf, process::ExitCode, sync::Arc, time::Duration};

use anyhow::{Context, bail};
use bitassay::{
    certify::certify,
    clock::SystemClock,
    http::server,
    ledger::{Ledger, Place},
    service::{Service, Solvers},
};
use clap::Args;
use tokio::net::TcpListener;
use tracing_subscriber::EnvFilter;

/// Run the service
///
/// Listens for HTTP, certifies the batches that rigs post, and keeps every certification in an embedded SQLite file. The address
/// is printed as one line on standard error once the service listens; the log follows there (RUST_LOG sets how much).
///
/// On an interrupt or a termination signal the service says that it is not ready, takes no more connections, finishes what it
/// accepted, and ends. A second signal ends it at once; even so, nothing that was answered is lost.
#[derive(Args)]
pub struct Serve {
    /// Address and port to listen on; port 0 takes any free port
    ///
    /// Only a loopback address: anything else needs tokens, which this version does not have.
    #[arg(long, value_name = "ADDRESS", default_value = "127.0.0.1:8080")]
    listen: SocketAddr,

    /// The database; created if it does not exist
    #[arg(long, value_name = "FILE", default_value = "bitassay.sqlite")]
    database: PathBuf,

    /// The key that checkpoints of the ledger are signed with; made if it does not exist [default: DATABASE.key]
    ///
    /// The last checkpoint that was signed stands in a second file beside it, with `.checkpoint` added to the name. Keep both out of what a restore of the
    /// database brings back: they are how the service knows that it was taken back in time.
    #[arg(long, value_name = "FILE")]
    ledger_key: Option<PathBuf>,

    /// Seconds between two audits of the whole ledger
    ///
    /// New entries are gone through within seconds, and all of them at the start.
    #[arg(long, value_name = "SECONDS", default_value_t = 3600, value_parser = clap::value_parser!(u32).range(1..))]
    audit_interval: u32,

    /// Batches that are solved at the same time
    #[arg(long, value_name = "N", default_value_t = 2, value_parser = clap::value_parser!(u16).range(1..=256))]
    solvers: u16,

    /// Batches that may wait for a solver; more are turned away with 503
    #[arg(long, value_name = "N", default_value_t = 64, value_parser = clap::value_parser!(u16).range(1..=10_000))]
    queue: u16,
}

impl Serve {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        if !self.listen.ip().is_loopback() {
            bail!("listening on {} needs tokens, which this version does not have; use a loopback address", self.listen);
        }
        let filter = EnvFilter::try_from_default_env().unwrap_or_else(|_| EnvFilter::new("info"));
        tracing_subscriber::fmt().with_env_filter(filter).with_writer(std::io::stderr).with_ansi(std::io::stderr().is_terminal()).init();
        let runtime = tokio::runtime::Builder::new_multi_thread().enable_all().build().context("no threads to run on")?;
        runtime.block_on(self.serve())?;
        Ok(ExitCode::SUCCESS)
    }

    async fn serve(self) -> anyhow::Result<()> {
        let listener = TcpListener::bind(self.listen).await.with_context(|| format!("cannot listen on {}", self.listen))?;
        let mut place = Place::of(&self.database);
        if let Some(key) = self.ledger_key {
            place.key = key;
        }
        place.audit_interval = Duration::from_secs(self.audit_interval.into());
        let ledger = Ledger::open_at(&place).await?;
        let key = ledger.seal.verifier().to_string();
        let solvers = Solvers::start(self.solvers.into(), self.queue.into(), Arc::new(certify)).context("no threads to solve on")?;
        let service = Service::new(ledger, solvers, Arc::new(SystemClock));
        eprintln!("listening on http://{}", listener.local_addr()?);
        tracing::info!(%key, "checkpoints of the ledger are signed with this key");
        tracing::warn!("the service has no tokens: whoever can reach the loopback address can use it");
        server::run(listener, service, stop_signal()).await?;
        Ok(())
    }
}

/// Completes on the first interrupt or termination signal; the second one ends the process.
async fn stop_signal() {
    signal().await;
    tracing::info!("finishing what was accepted; a second signal ends at once");
    tokio::spawn(async {
        signal().await;
        std::process::exit(1);
    });
}

#[cfg(unix)]
async fn signal() {
    use tokio::signal::unix::{SignalKind, signal};
    match signal(SignalKind::terminate()) {
        Ok(mut terminate) => tokio::select! {
            _ = tokio::signal::ctrl_c() => {}
            _ = terminate.recv() => {}
        },
        Err(_) => drop(tokio::signal::ctrl_c().await),
    }
}

#[cfg(not(unix))]
async fn signal() {
    drop(tokio::signal::ctrl_c().await);
}
