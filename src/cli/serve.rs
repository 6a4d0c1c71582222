//! `bitassay serve`

use std::{
    io::{IsTerminal, Write},
    path::PathBuf,
    process::ExitCode,
    sync::Arc,
};

use anyhow::{Context, bail};
use bitassay::{
    certify::certify,
    clock::SystemClock,
    http::server,
    ledger::Ledger,
    service::{Service, Solvers},
};
use clap::Args;
use tokio::net::TcpListener;
use tracing_subscriber::EnvFilter;

use super::settings::{Given, LogFormat, Settings};

/// Run the service
///
/// Listens for HTTP, certifies the batches that rigs post, and keeps every certification in an embedded SQLite file. The address
/// is printed as one line on standard error once the service listens; the log follows there.
///
/// Every setting can be given in a file (TOML, named as the flags are, without the hyphens in front), in the environment, or as a flag. The
/// environment goes before the file, and flags before both. `--print-config` shows what holds, in a form that the file can have.
///
/// As long as no token was ever created in the database, the service is open to whoever can reach it, and listens on loopback only. The
/// first `bitassay token create` closes it, also while it runs.
///
/// On an interrupt or a termination signal the service says that it is not ready, takes no more connections, finishes what it
/// accepted, and ends. A second signal ends it at once; even so, nothing that was answered is lost.
#[derive(Args)]
pub struct Serve {
    /// A file with settings
    #[arg(long, value_name = "FILE", env = "BITASSAY_CONFIG")]
    config: Option<PathBuf>,

    #[command(flatten)]
    given: Given,

    /// Print the settings that hold, and end
    #[arg(long)]
    print_config: bool,
}

/// File descriptors that are needed for anything but connections.
const OTHER_FILES: u64 = 256;

impl Serve {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let settings = Settings::read(self.config.as_deref(), &self.given)?;
        if self.print_config {
            write!(std::io::stdout(), "{}", settings.text()?)?;
            return Ok(ExitCode::SUCCESS);
        }
        start_log(&settings)?;
        let runtime = tokio::runtime::Builder::new_multi_thread().enable_all().build().context("no threads to run on")?;
        runtime.block_on(serve(&settings))?;
        Ok(ExitCode::SUCCESS)
    }
}

fn start_log(settings: &Settings) -> anyhow::Result<()> {
    let filter = EnvFilter::try_new(&settings.log).with_context(|| format!("{:?} says nothing about how much to log", settings.log))?;
    let terminal = std::io::stderr().is_terminal();
    let log = tracing_subscriber::fmt().with_env_filter(filter).with_writer(std::io::stderr).with_ansi(terminal);
    match settings.log_format {
        LogFormat::Text => log.init(),
        LogFormat::Json => log.json().init(),
    }
    Ok(())
}

async fn serve(settings: &Settings) -> anyhow::Result<()> {
    let loopback = settings.listen.ip().is_loopback();
    // A database that is not there has no tokens, and is not made only to find that out.
    if !loopback && !settings.database.exists() {
        bail!(open_to_the_world(settings));
    }
    let ledger = Ledger::open_at(&settings.place()).await?;
    let open = ledger.history.keyring().await?.is_empty();
    if open && !loopback {
        ledger.close().await;
        bail!(open_to_the_world(settings));
    }
    let listener = TcpListener::bind(settings.listen).await.with_context(|| format!("cannot listen on {}", settings.listen))?;
    let key = ledger.seal.verifier().to_string();
    let solvers = Solvers::start(settings.solvers.into(), settings.queue.into(), Arc::new(certify)).context("no threads to solve on")?;
    let service = Service::new(ledger, solvers, Arc::new(SystemClock));
    let recalled = service.recall_witnesses().await?;
    eprintln!("listening on http://{}", listener.local_addr()?);
    tracing::info!(recalled, "kept witnesses were checked, and are in use");
    tracing::info!(%key, "checkpoints of the ledger are signed with this key");
    if open {
        tracing::warn!(
            "no token was ever created: whoever can reach the loopback address can use the service; `bitassay token create` closes it"
        );
    }
    let limits = settings.limits();
    let wanted = limits.connections as u64 + OTHER_FILES;
    match rlimit::increase_nofile_limit(wanted) {
        Ok(files) if files < wanted => tracing::warn!(files, "the system allows fewer open files than the connections need"),
        Ok(_) => {}
        Err(error) => tracing::warn!(%error, "how many files may be open is not known"),
    }
    server::run(listener, service, limits, stop_signal()).await?;
    Ok(())
}

fn open_to_the_world(settings: &Settings) -> String {
    format!(
        "listening on {} needs tokens, and none was ever created in {}; create one with `bitassay token create`, or use a loopback address",
        settings.listen,
        settings.database.display()
    )
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
