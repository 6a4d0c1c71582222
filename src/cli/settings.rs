//! What the service is set to: by a file, by the environment, by flags; each goes before the one named first.

use std::{
    net::SocketAddr,
    num::NonZeroU32,
    path::{Path, PathBuf},
    time::Duration,
};

use anyhow::{Context, ensure};
use bitassay::{http::limits::Limits, ledger::Place};
use clap::{Args, ValueEnum};
use serde::{Deserialize, Serialize};

/// How the log is written.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, ValueEnum)]
#[serde(rename_all = "lowercase")]
pub enum LogFormat {
    /// A line a message, for people
    Text,
    /// A JSON object a line, for machines
    Json,
}

/// What one source says; what it does not say is left to the others.
#[derive(Args, Debug, Clone, Default, Serialize, Deserialize)]
#[serde(deny_unknown_fields, rename_all = "kebab-case")]
pub struct Given {
    /// Address and port to listen on; port 0 takes any free port [default: 127.0.0.1:8080]
    ///
    /// Anything but a loopback address needs a token to have been created before, with `bitassay token create`.
    #[arg(long, value_name = "ADDRESS", env = "BITASSAY_LISTEN")]
    listen: Option<SocketAddr>,

    /// The database; created if it does not exist [default: bitassay.sqlite]
    #[arg(long, value_name = "FILE", env = "BITASSAY_DATABASE")]
    database: Option<PathBuf>,

    /// The key that checkpoints of the ledger are signed with; made if it does not exist. Without it, the database's name and `.key`
    ///
    /// The last checkpoint that was signed stands in a second file beside it, with `.checkpoint` added to the name. Keep both out of what a restore of the
    /// database brings back: they are how the service knows that it was taken back in time.
    #[arg(long, value_name = "FILE", env = "BITASSAY_LEDGER_KEY")]
    ledger_key: Option<PathBuf>,

    /// Seconds between two audits of the whole ledger [default: 3600]
    ///
    /// New entries are gone through within seconds, and all of them at the start.
    #[arg(long, value_name = "SECONDS", env = "BITASSAY_AUDIT_INTERVAL")]
    audit_interval: Option<u32>,

    /// Batches that are solved at the same time, 1 to 256 [default: 2]
    #[arg(long, value_name = "N", env = "BITASSAY_SOLVERS")]
    solvers: Option<u16>,

    /// Batches that may wait for a solver, 1 to 10000; more are turned away with 503 [default: 64]
    #[arg(long, value_name = "N", env = "BITASSAY_QUEUE")]
    queue: Option<u16>,

    /// Connections at a time, 1 to 100000; more are told with 503 that there are too many [default: 2000]
    #[arg(long, value_name = "N", env = "BITASSAY_CONNECTIONS")]
    connections: Option<u32>,

    /// Seconds that a client may take over the head of a request, and that a kept connection may lie idle [default: 10]
    #[arg(long, value_name = "SECONDS", env = "BITASSAY_HEAD_SECONDS")]
    head_seconds: Option<u16>,

    /// Seconds that a client may take to send a body [default: 30]
    #[arg(long, value_name = "SECONDS", env = "BITASSAY_BODY_SECONDS")]
    body_seconds: Option<u16>,

    /// Seconds that a client may take no byte of its answer [default: 30]
    #[arg(long, value_name = "SECONDS", env = "BITASSAY_ANSWER_SECONDS")]
    answer_seconds: Option<u16>,

    /// Requests a second of one token in the long run, or of one peer where no token was created; more are turned away with 429 [default: 200]
    #[arg(long, value_name = "N", env = "BITASSAY_RATE")]
    rate: Option<NonZeroU32>,

    /// Requests at once of one token or peer, above the rate [default: 2000]
    #[arg(long, value_name = "N", env = "BITASSAY_BURST")]
    burst: Option<NonZeroU32>,

    /// How the log on standard error is written [default: text]
    #[arg(long, value_name = "FORMAT", env = "BITASSAY_LOG_FORMAT")]
    log_format: Option<LogFormat>,

    /// How much is logged: off, error, warn, info, debug or trace, also by module as in `warn,bitassay=debug` [default: info]
    #[arg(long, value_name = "LEVEL", env = "BITASSAY_LOG")]
    log: Option<String>,
}

/// What holds in the end.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields, rename_all = "kebab-case")]
pub struct Settings {
    pub listen: SocketAddr,
    pub database: PathBuf,
    ledger_key: Option<PathBuf>,
    audit_interval: u32,
    pub solvers: u16,
    pub queue: u16,
    connections: u32,
    head_seconds: u16,
    body_seconds: u16,
    answer_seconds: u16,
    rate: NonZeroU32,
    burst: NonZeroU32,
    pub log_format: LogFormat,
    pub log: String,
}

impl Default for Settings {
    fn default() -> Self {
        let Limits { connections, head, body, answer, rate, burst } = Limits::default();
        let seconds = |time: Duration| u16::try_from(time.as_secs()).unwrap_or(u16::MAX);
        Self {
            listen: SocketAddr::from(([127, 0, 0, 1], 8080)),
            database: "bitassay.sqlite".into(),
            ledger_key: None,
            audit_interval: 3600,
            solvers: 2,
            queue: 64,
            connections: u32::try_from(connections).unwrap_or(u32::MAX),
            head_seconds: seconds(head),
            body_seconds: seconds(body),
            answer_seconds: seconds(answer),
            rate,
            burst,
            log_format: LogFormat::Text,
            log: "info".into(),
        }
    }
}

impl Settings {
    /// From a file, if one is named, and from the flags and the environment, which go before it.
    pub fn read(file: Option<&Path>, given: &Given) -> anyhow::Result<Self> {
        let mut all = toml::Table::try_from(Self::default())?;
        if let Some(path) = file {
            let text = std::fs::read_to_string(path).with_context(|| format!("cannot read {}", path.display()))?;
            let told: Given = toml::from_str(&text).with_context(|| format!("in {}", path.display()))?;
            all.extend(toml::Table::try_from(told)?);
        }
        all.extend(toml::Table::try_from(given)?);
        let settings: Self = all.try_into()?;
        settings.check().map(|()| settings)
    }

    fn check(&self) -> anyhow::Result<()> {
        let numbers: [(&str, u32, std::ops::RangeInclusive<u32>); 7] = [
            ("audit-interval", self.audit_interval, 1..=u32::MAX),
            ("solvers", self.solvers.into(), 1..=256),
            ("queue", self.queue.into(), 1..=10_000),
            ("connections", self.connections, 1..=100_000),
            ("head-seconds", self.head_seconds.into(), 1..=3600),
            ("body-seconds", self.body_seconds.into(), 1..=3600),
            ("answer-seconds", self.answer_seconds.into(), 1..=3600),
        ];
        for (name, number, range) in numbers {
            ensure!(range.contains(&number), "{name} is from {} to {}, is {number}", range.start(), range.end());
        }
        Ok(())
    }

    /// Where the ledger is kept.
    pub fn place(&self) -> Place {
        let place = Place::of(&self.database);
        let key = self.ledger_key.clone().unwrap_or_else(|| place.key.clone());
        Place { key, audit_interval: Duration::from_secs(self.audit_interval.into()), ..place }
    }

    pub fn limits(&self) -> Limits {
        let seconds = |number: u16| Duration::from_secs(number.into());
        Limits {
            connections: self.connections as usize,
            head: seconds(self.head_seconds),
            body: seconds(self.body_seconds),
            answer: seconds(self.answer_seconds),
            rate: self.rate,
            burst: self.burst,
        }
    }

    /// As a file that says the same.
    pub fn text(&self) -> anyhow::Result<String> {
        Ok(toml::to_string(self)?)
    }
}
