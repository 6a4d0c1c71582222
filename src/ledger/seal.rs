//! What is signed, and what is not: only a tree whose every entry was gone through, and that extends what was signed before.

use std::{
    sync::{Arc, OnceLock},
    time::Duration,
};

use sqlx::{SqliteConnection, SqlitePool};
use tokio::{sync::Mutex, task::JoinHandle, time::sleep};

use super::{
    LedgerError,
    audit::{Audit, AuditError},
    checkpoint::Verifier,
    key::{Key, KeyError},
    proofs,
};

/// How often new entries are gone through.
const FOLLOW: Duration = Duration::from_secs(1);
/// Rest between two batches of an audit that nobody waits for.
const REST: Duration = Duration::from_millis(5);
/// Entries that whoever asks for a checkpoint waits for; a ledger that has more of them to go through answers later.
const PATIENCE: u64 = 20_000;

/// Why nothing is signed.
#[derive(Debug, Clone, thiserror::Error)]
pub enum SealError {
    #[error("the ledger is not in order: {0}")]
    Fault(String),
    #[error("{checked} of {entries} entries were gone through so far")]
    Behind { checked: u64, entries: u64 },
    #[error("the checkpoint cannot be kept")]
    Key(#[from] KeyError),
    #[error(transparent)]
    Ledger(#[from] LedgerError),
}

/// The first fault that was found in a ledger. From then on nothing is signed and nothing is written, until the service starts anew.
#[derive(Debug, Clone, Default)]
pub struct Fault(Arc<OnceLock<String>>);

impl Fault {
    pub fn get(&self) -> Option<&str> {
        self.0.get().map(String::as_str)
    }

    pub(super) fn set(&self, detail: &str) {
        if self.0.set(detail.to_owned()).is_ok() {
            tracing::error!(fault = detail, "the ledger is not in order; nothing is signed and nothing is recorded from now on");
        }
    }
}

#[derive(Debug)]
struct State {
    key: Key,
    audit: Audit,
    /// Whether everything that was there at the start was gone through.
    complete: bool,
}

/// The ledger's seal.
#[derive(Debug)]
pub struct Seal {
    pool: SqlitePool,
    verifier: Verifier,
    fault: Fault,
    state: Mutex<Option<State>>,
}

impl Seal {
    pub(super) fn new(pool: SqlitePool, key: Key, fault: Fault) -> Arc<Self> {
        let (verifier, audit) = (key.verifier(), Audit::new(key.last()));
        Arc::new(Self { pool, verifier, fault, state: Mutex::new(Some(State { key, audit, complete: false })) })
    }

    /// The key that checkpoints are signed with.
    pub fn verifier(&self) -> &Verifier {
        &self.verifier
    }

    /// What is wrong with the ledger, if anything was found.
    pub fn fault(&self) -> Option<&str> {
        self.fault.get()
    }

    /// A signed checkpoint of everything that is in the ledger.
    ///
    /// # Errors
    /// A fault of the ledger, an audit that is not through yet, a checkpoint that cannot be kept, or the database's.
    pub async fn checkpoint(&self) -> Result<String, SealError> {
        let mut state = self.state.lock().await;
        let state = state.as_mut().ok_or(LedgerError::Closed)?;
        let mut connection = self.pool.acquire().await.map_err(LedgerError::from)?;
        let entries = proofs::size(&mut connection).await?;
        if entries.saturating_sub(state.audit.size()) > PATIENCE {
            return Err(SealError::Behind { checked: state.audit.size(), entries });
        }
        while self.step(state, &mut connection).await? {}
        Ok(state.key.sign(state.audit.size(), state.audit.root())?.to_owned())
    }

    /// Goes through a batch of entries that are new; answers whether there may be more.
    async fn step(&self, state: &mut State, connection: &mut SqliteConnection) -> Result<bool, SealError> {
        if let Some(fault) = self.fault.get() {
            return Err(SealError::Fault(fault.to_owned()));
        }
        let outcome = async {
            let more = state.audit.advance(connection).await?;
            if !more && !state.complete {
                Audit::pages(connection).await?;
                state.audit.conclude(connection).await?;
                state.complete = true;
            }
            Ok(more)
        };
        outcome.await.map_err(|error| self.note(error))
    }

    fn note(&self, error: AuditError) -> SealError {
        match error {
            AuditError::Fault(detail) => {
                self.fault.set(&detail);
                SealError::Fault(detail)
            }
            AuditError::Ledger(error) => SealError::Ledger(error),
        }
    }

    /// Keeps going through what is new, and through everything again every `interval`.
    pub(super) fn watch(self: &Arc<Self>, interval: Duration) -> JoinHandle<()> {
        let seal = Arc::clone(self);
        tokio::spawn(async move {
            let follow = async {
                loop {
                    match seal.follow().await {
                        Ok(true) => sleep(REST).await,
                        Ok(false) => sleep(FOLLOW).await,
                        Err(SealError::Fault(_)) => break,
                        Err(error) => {
                            tracing::warn!(error = &error as &dyn std::error::Error, "the ledger was not gone through");
                            sleep(FOLLOW).await;
                        }
                    }
                }
            };
            let again = async {
                loop {
                    sleep(interval).await;
                    match seal.pass().await {
                        Ok(entries) => tracing::debug!(entries, "the ledger is in order"),
                        Err(SealError::Fault(_)) => break,
                        Err(error) => tracing::warn!(error = &error as &dyn std::error::Error, "the ledger was not gone through"),
                    }
                }
            };
            tokio::join!(follow, again);
        })
    }

    async fn follow(&self) -> Result<bool, SealError> {
        let mut state = self.state.lock().await;
        let state = state.as_mut().ok_or(LedgerError::Closed)?;
        let mut connection = self.pool.acquire().await.map_err(LedgerError::from)?;
        self.step(state, &mut connection).await
    }

    /// Goes through everything from the beginning, beside the audit that is signed from; answers with the number of entries.
    ///
    /// # Errors
    /// What is not in order, or the database's.
    pub async fn pass(&self) -> Result<u64, SealError> {
        let mut audit = match self.state.lock().await.as_ref() {
            Some(state) => Audit::new(state.key.last()),
            None => return Err(LedgerError::Closed.into()),
        };
        let mut connection = self.pool.acquire().await.map_err(LedgerError::from)?;
        let outcome = async {
            Audit::pages(&mut connection).await?;
            while audit.advance(&mut connection).await? {
                sleep(REST).await;
            }
            audit.conclude(&mut connection).await
        };
        outcome.await.map_err(|error| self.note(error))?;
        Ok(audit.size())
    }

    /// Signs no more, and gives the key free.
    pub(super) async fn close(&self) {
        drop(self.state.lock().await.take());
    }
}
