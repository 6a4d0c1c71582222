//! Who asks, and what they may see.

use std::sync::{Arc, Mutex, PoisonError};

use uuid::Uuid;

use super::Service;
use crate::{
    ledger::LedgerError,
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

/// The keyring as it was read last.
#[derive(Default)]
pub(super) struct Keys(Mutex<Arc<Keyring>>);

impl Service {
    /// All tokens, as of now. They are read again only after a change.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn keyring(&self) -> Result<Arc<Keyring>, LedgerError> {
        let changes = self.ledger.history.token_changes().await?;
        // What is kept under the lock is replaced as a whole: a panic elsewhere cannot leave it half done.
        let known = Arc::clone(&self.keys.0.lock().unwrap_or_else(PoisonError::into_inner));
        if known.changes() == changes {
            return Ok(known);
        }
        let read = Arc::new(self.ledger.history.keyring().await?);
        *self.keys.0.lock().unwrap_or_else(PoisonError::into_inner) = Arc::clone(&read);
        Ok(read)
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
