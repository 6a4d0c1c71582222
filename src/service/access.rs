//! Who asks, and what they may see.

use std::sync::Arc;

use tokio::sync::{mpsc, oneshot};
use uuid::Uuid;

use super::Service;
use crate::{
    ledger::{LedgerError, history::History},
    profile::RigName,
    token::{Keyring, Role, Token, Unrecognised},
};

/// Who asks.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Caller {
    /// Whoever can reach the service: no token was ever created.
    Anyone,
    Holder {
        token: Uuid,
        role: Role,
        rigs: Vec<RigName>,
    },
}

/// Why nobody is served.
#[derive(Debug, thiserror::Error)]
pub enum AccessError {
    #[error("a token is needed")]
    Missing,
    #[error(transparent)]
    Unrecognised(#[from] Unrecognised),
    #[error(transparent)]
    Ledger(#[from] LedgerError),
}

/// Whose records a caller may see.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Scope {
    All,
    Rigs(Vec<RigName>),
}

impl Scope {
    pub fn covers(&self, rig: &RigName) -> bool {
        match self {
            Self::All => true,
            Self::Rigs(rigs) => rigs.contains(rig),
        }
    }
}

impl Caller {
    pub fn scope(&self) -> Scope {
        match self {
            Self::Holder { role: Role::Rig, rigs, .. } => Scope::Rigs(rigs.clone()),
            Self::Anyone | Self::Holder { .. } => Scope::All,
        }
    }
}

/// Requests that one look at the ledger serves at most.
const MANY: usize = 1024;

type Asked = oneshot::Sender<Result<Arc<Keyring>, LedgerError>>;

/// Who asks for the keyring, and the task that looks whether it changed: once for all who asked before it looked, so that everyone gets the
/// tokens as of a moment after they asked, and a crowd costs the ledger no more than one of them.
pub(super) struct Keys(mpsc::Sender<Asked>);

impl Keys {
    pub(super) fn watch(history: History) -> Self {
        let (asks, mut asked) = mpsc::channel(MANY);
        tokio::spawn(async move {
            let mut known = Arc::new(Keyring::default());
            let mut waiting: Vec<Asked> = Vec::new();
            while asked.recv_many(&mut waiting, MANY).await > 0 {
                let found = newest(&history, &known).await;
                if let Ok(found) = &found {
                    known = Arc::clone(found);
                }
                // Whoever has gone needs no answer.
                waiting.drain(..).for_each(|answer| drop(answer.send(found.clone())));
            }
        });
        Self(asks)
    }
}

/// The keyring as it stands, read again only after a change.
async fn newest(history: &History, known: &Arc<Keyring>) -> Result<Arc<Keyring>, LedgerError> {
    if history.token_changes().await? == known.changes() {
        return Ok(Arc::clone(known));
    }
    history.keyring().await.map(Arc::new)
}

impl Service {
    /// All tokens, as of now.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn keyring(&self) -> Result<Arc<Keyring>, LedgerError> {
        let (answer, keyring) = oneshot::channel();
        self.keys.0.send(answer).await.map_err(|_| LedgerError::Closed)?;
        keyring.await.map_err(|_| LedgerError::Closed)?
    }

    /// Who presents this token, or none.
    ///
    /// # Errors
    /// No token where tokens were created, one that is not taken, or the ledger's: who cannot be recognised is nobody.
    pub async fn caller(&self, presented: Option<&str>) -> Result<Caller, AccessError> {
        let ring = self.keyring().await?;
        match presented {
            None if ring.is_empty() => Ok(Caller::Anyone),
            None => Err(AccessError::Missing),
            Some(text) => {
                let Token { token, role, rigs, .. } = ring.recognise(text, self.clock.now())?;
                Ok(Caller::Holder { token: *token, role: *role, rigs: rigs.clone() })
            }
        }
    }

    /// Whether there is a certification of this identifier that may be seen.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn may_see(&self, certification: Uuid, scope: &Scope) -> Result<bool, LedgerError> {
        match scope {
            Scope::All => Ok(true),
            Scope::Rigs(_) => Ok(self.ledger.history.rig_of(certification).await?.is_some_and(|rig| scope.covers(&rig))),
        }
    }
}
