//! `bitassay token`

use std::{io::Write, path::PathBuf, process::ExitCode};

use anyhow::{Context, bail, ensure};
use bitassay::{
    clock::{Clock, Stamp, SystemClock},
    ledger::tokens::Tokens,
    profile::RigName,
    token::{self, Change, Key, Keyring, Role, Secret},
};
use clap::{Args, Subcommand, ValueEnum};
use serde::Serialize;
use uuid::Uuid;

/// Create, list and revoke the tokens that the service takes
///
/// Works on the database file, also while the service runs, which heeds a change from the next request on. The first token closes a
/// service that was open until then. Every change is kept in the ledger; of a token itself only a digest is.
#[derive(Subcommand)]
pub enum Token {
    Create(Create),
    List(List),
    Revoke(Revoke),
}

/// Create a token and print it, alone, on standard output
///
/// It is shown this once: neither the database nor the log has it. Send it as `Authorization: Bearer TOKEN`.
#[derive(Args)]
pub struct Create {
    /// What its holder may do
    #[arg(long)]
    role: RoleName,

    /// A rig that a rig's token is for; give it once for each
    #[arg(long = "rig", value_name = "NAME")]
    rigs: Vec<String>,

    /// When it ends: a time as in RFC 3339, or a span from now such as 90d or 12h; without it, never
    #[arg(long, value_name = "WHEN")]
    expires: Option<String>,

    /// A note about its holder, for the list
    #[arg(long, value_name = "TEXT")]
    label: Option<String>,

    #[command(flatten)]
    database: Database,
}

/// Print all tokens there ever were, as JSON, without the tokens themselves
#[derive(Args)]
pub struct List {
    #[command(flatten)]
    database: Database,
}

/// Revoke a token, at once and for good
#[derive(Args)]
pub struct Revoke {
    /// The `token` of the list, which is its name and no secret
    #[arg(value_name = "NAME")]
    token: Uuid,

    #[command(flatten)]
    database: Database,
}

#[derive(Args)]
struct Database {
    /// The database; created if it does not exist
    #[arg(long = "database", value_name = "FILE", env = "BITASSAY_DATABASE", default_value = "bitassay.sqlite")]
    path: PathBuf,
}

#[derive(Clone, Copy, ValueEnum)]
enum RoleName {
    /// Posts batches of its rigs, and reads what became of them
    Rig,
    /// Declares rigs, commits, and reads everything
    Operator,
    /// Reads everything, changes nothing
    Auditor,
}

impl From<RoleName> for Role {
    fn from(name: RoleName) -> Self {
        match name {
            RoleName::Rig => Self::Rig,
            RoleName::Operator => Self::Operator,
            RoleName::Auditor => Self::Auditor,
        }
    }
}

/// One token of the list.
#[derive(Serialize)]
struct Item<'a> {
    token: Uuid,
    role: Role,
    rigs: &'a [RigName],
    label: Option<&'a str>,
    created_at: Stamp,
    expires_at: Option<Stamp>,
    revoked_at: Option<Stamp>,
    /// Whether the service takes it now.
    taken: bool,
}

impl<'a> Item<'a> {
    fn of(key: &'a Key, now: Stamp) -> Self {
        let token::Token { token, role, rigs, label, expires_at, recorded_at, .. } = &key.token;
        Self {
            token: *token,
            role: *role,
            rigs,
            label: label.as_deref(),
            created_at: *recorded_at,
            expires_at: *expires_at,
            revoked_at: key.revoked_at,
            taken: key.check(now).is_ok(),
        }
    }
}

impl Token {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build().context("no thread to run on")?;
        runtime.block_on(async {
            let path = match &self {
                Self::Create(Create { database, .. }) | Self::List(List { database }) | Self::Revoke(Revoke { database, .. }) => {
                    &database.path
                }
            };
            let creates = matches!(self, Self::Create(_));
            ensure!(creates || path.exists(), "there is no database {}", path.display());
            let mut tokens = Tokens::open(path).await?;
            match &self {
                Self::Create(create) => create.run(&mut tokens).await?,
                Self::List(_) => list(&tokens.keyring().await?)?,
                Self::Revoke(Revoke { token, .. }) => revoke(&mut tokens, *token).await?,
            }
            tokens.close().await?;
            Ok(ExitCode::SUCCESS)
        })
    }
}

impl Create {
    async fn run(&self, tokens: &mut Tokens) -> anyhow::Result<()> {
        let role = Role::from(self.role);
        ensure!((role == Role::Rig) != self.rigs.is_empty(), "a rig's token names its rigs with --rig, and no other token does");
        let mut rigs = self.rigs.iter().cloned().map(RigName::try_from).collect::<Result<Vec<_>, _>>()?;
        rigs.sort();
        rigs.dedup();
        for rig in &rigs {
            if !tokens.knows(rig).await? {
                eprintln!("there is no rig {rig} yet");
            }
        }
        let now = SystemClock.now();
        let expires_at = self.expires.as_deref().map(|text| now.or_after(text)).transpose().context("--expires")?;
        ensure!(expires_at.is_none_or(|end| end > now), "--expires: that is over already");
        let secret = Secret::generate().context("no random numbers")?;
        let (token, fingerprint, label) = (Uuid::now_v7(), secret.fingerprint(), self.label.clone());
        let created = token::Token { token, fingerprint, role, rigs, label, expires_at, recorded_at: now };
        tokens.keep(&Change::Created(created)).await?;
        // Only now, when it is kept: what is printed can be used.
        writeln!(std::io::stdout(), "{}", secret.reveal())?;
        eprintln!("created {token}; it is shown this once");
        Ok(())
    }
}

fn list(ring: &Keyring) -> anyhow::Result<()> {
    let now = SystemClock.now();
    let items: Vec<_> = ring.keys().iter().map(|key| Item::of(key, now)).collect();
    writeln!(std::io::stdout(), "{}", serde_json::to_string_pretty(&items)?)?;
    Ok(())
}

async fn revoke(tokens: &mut Tokens, token: Uuid) -> anyhow::Result<()> {
    let ring = tokens.keyring().await?;
    let Some(key) = ring.keys().iter().find(|key| key.token.token == token) else { bail!("there is no token {token}") };
    if let Some(time) = key.revoked_at {
        eprintln!("{token} was revoked already, at {time}");
        return Ok(());
    }
    tokens.keep(&Change::Revoked { token, recorded_at: SystemClock.now() }).await?;
    eprintln!("revoked {token}");
    Ok(())
}
