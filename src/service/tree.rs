//! The ledger's tree: checkpoints, entries, proofs.

use uuid::Uuid;

use super::Service;
use crate::{
    bundle::Standing,
    ledger::{
        LedgerError,
        checkpoint::{Checkpoint, Verifier},
        proofs::{Proof, hexadecimal},
        seal::SealError,
        source::CERTIFICATION,
    },
};

/// Everything that is needed to check a certification elsewhere.
#[derive(Debug, Clone, PartialEq)]
pub struct Exported {
    /// The record's text.
    pub record: String,
    pub evidence: super::Evidence,
    pub standing: Standing,
}

impl Service {
    /// The key that checkpoints are signed with.
    pub fn ledger_key(&self) -> &Verifier {
        self.ledger.seal.verifier()
    }

    /// A signed checkpoint of everything that is in the ledger.
    ///
    /// # Errors
    /// See [`crate::ledger::seal::Seal::checkpoint`].
    pub async fn checkpoint(&self) -> Result<String, SealError> {
        self.ledger.seal.checkpoint().await
    }

    /// Number of entries of the ledger.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn entries(&self) -> Result<u64, LedgerError> {
        self.ledger.history.entries().await
    }

    /// The line of an entry.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn entry(&self, index: u64) -> Result<Option<String>, LedgerError> {
        self.ledger.history.leaf(index).await
    }

    /// That an entry is in the tree of so many entries; `None` if the ledger has fewer.
    ///
    /// # Errors
    /// An index that is not below the size, or the ledger's.
    pub async fn inclusion(&self, index: u64, size: u64) -> Result<Option<Proof>, LedgerError> {
        self.ledger.history.inclusion(index, size).await
    }

    /// That a tree is the beginning of another; `None` if the ledger has fewer entries.
    ///
    /// # Errors
    /// An empty tree, one that is larger than the other, or the ledger's.
    pub async fn consistency(&self, from: u64, to: u64) -> Result<Option<Proof>, LedgerError> {
        self.ledger.history.consistency(from, to).await
    }

    /// A certification with what it rests on and where it stands in the ledger; `None` if there is no such certification.
    ///
    /// # Errors
    /// Those of a checkpoint, which is signed for the purpose.
    pub async fn exported(&self, id: Uuid) -> Result<Option<Exported>, SealError> {
        let Some((record, evidence)) = self.record(id).await?.zip(self.evidence(id).await?) else { return Ok(None) };
        let unlogged = || LedgerError::Unlogged { kind: CERTIFICATION.kind };
        let (index, entry) = self.ledger.history.leaf_of(CERTIFICATION.kind, &id.to_string()).await?.ok_or_else(unlogged)?;
        let checkpoint = self.checkpoint().await?;
        let size = Checkpoint::read(&checkpoint).map_err(|_| LedgerError::Closed)?.size;
        let proof = self.inclusion(index, size).await?.ok_or_else(unlogged)?;
        let standing = Standing { entry, proof: hexadecimal(&proof.hashes), checkpoint };
        Ok(Some(Exported { record, evidence, standing }))
    }
}
