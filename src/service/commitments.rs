//! Commitments: made on a solver thread, kept, and looked up for the batches that follow.

use std::sync::Arc;

use uuid::Uuid;

use super::{Evidence, Service, SolveError, Working, new_id};
use crate::{
    clock::Stamp,
    commitment::{CommitError, commit},
    committed::{CommitmentOrder, Committed, Expected, earlier_frequencies},
    counts::Table,
    fault::Fault,
    ledger::{
        LedgerError,
        history::Page,
        rows::{NumberedCommitment, ProfileVersion, documents},
    },
    profile::RigName,
    request::RoundModel,
    scenario::Geometry,
};

/// Why nothing was committed. Nothing was recorded.
#[derive(Debug, thiserror::Error)]
pub enum OrderError {
    #[error("there is no rig of this name")]
    UnknownRig,
    #[error("the rig's profile does not say that its rounds have memory")]
    OtherRounds,
    #[error(transparent)]
    Order(#[from] Fault),
    #[error(transparent)]
    Commit(#[from] CommitError),
    #[error("no solver took the commitment")]
    Solve(#[from] SolveError),
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    #[error("the task that worked on the commitment ended early")]
    Abandoned(#[source] tokio::task::JoinError),
}

/// A rig's commitments, and which of them stands.
#[derive(Debug, Clone, PartialEq)]
pub struct Listed {
    pub page: Page<NumberedCommitment>,
    /// The one that batches are certified under now.
    pub current: Option<Uuid>,
}

impl Service {
    /// Makes a commitment and records it; batches that begin afterwards are certified under it until a newer one is recorded.
    ///
    /// Once begun, the work goes on even if the operator hangs up; the list of commitments then shows it.
    ///
    /// # Errors
    /// See [`OrderError`].
    pub async fn commit(self: &Arc<Self>, rig: RigName, order: CommitmentOrder) -> Result<Committed, OrderError> {
        let working = Working::begin(Arc::clone(self));
        tokio::spawn(async move { working.service.fulfil(rig, order).await }).await.map_err(OrderError::Abandoned)?
    }

    async fn fulfil(&self, rig: RigName, order: CommitmentOrder) -> Result<Committed, OrderError> {
        let ProfileVersion { version, profile, .. } = self.profile(&rig, None).await?.ok_or(OrderError::UnknownRig)?;
        if profile.rounds() != RoundModel::Memory {
            return Err(OrderError::OtherRounds);
        }
        let expected = match order.expected()? {
            Expected::Stated(table) => table,
            Expected::Certification(id) => self.frequencies(id, &rig, profile.scenario().geometry()).await?,
        };
        let level = order.level(&profile);
        let plan = order.plan(&profile, expected)?;
        let done = self.solvers.run(move || commit(&plan)).await?;
        self.metrics.solved(done.queued, done.solved);
        let (commitment, witnesses) = done.outcome?;
        // Only now: a batch that began while the factors were being worked out was not committed to.
        let recorded_at = self.clock.now();
        let committed = Committed {
            id: new_id(recorded_at),
            rig,
            profile_version: version,
            recorded_at,
            level,
            digest: commitment.digest(),
            document: commitment.canonical_json(),
            commitment,
        };
        self.ledger.writer.keep_commitment(committed.clone(), documents(&witnesses)).await?;
        Ok(committed)
    }

    async fn frequencies(&self, certification: Uuid, rig: &RigName, geometry: Geometry) -> Result<Table<f64>, OrderError> {
        let record = self.record(certification).await?;
        let record = record.ok_or_else(|| Fault::new("/certification", "there is no certification of this identifier"))?;
        Ok(earlier_frequencies(&record, rig, geometry)?)
    }

    /// The commitment that a batch is certified under: the newest one under the profile that had been recorded when the batch began. Nothing but
    /// the time of its beginning decides, so nobody can choose among commitments by what the data show. For a batch that began before all of
    /// them it is the newest, under which it is refused; `None` if there is none.
    pub(super) async fn commitment_for(&self, profile: &ProfileVersion, started_at: Stamp) -> Result<Option<Committed>, LedgerError> {
        match self.ledger.history.commitment_at(&profile.rig, profile.version, started_at).await? {
            Some(committed) => Ok(Some(committed)),
            None => self.standing(profile).await,
        }
    }

    /// The newest commitment under a rig's profile.
    pub(super) async fn standing(&self, profile: &ProfileVersion) -> Result<Option<Committed>, LedgerError> {
        self.ledger.history.newest_commitment(&profile.rig, profile.version).await
    }

    /// One commitment.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn commitment(&self, id: Uuid) -> Result<Option<Committed>, LedgerError> {
        self.ledger.history.commitment(id).await
    }

    /// What a commitment rests on, itself included; `None` if there is no such commitment.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn evidence_of_commitment(&self, id: Uuid) -> Result<Option<Evidence>, LedgerError> {
        let Some(committed) = self.commitment(id).await? else { return Ok(None) };
        let witnesses = self.ledger.history.commitment_witnesses(id).await?;
        Ok(Some(Evidence { commitment: Some(committed.document), witnesses }))
    }

    /// A rig's commitments, newest first, beginning before a number; `None` if there is no such rig.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn commitments(&self, rig: &RigName, before: Option<u64>, limit: u32) -> Result<Option<Listed>, LedgerError> {
        let Some(profile) = self.profile(rig, None).await? else { return Ok(None) };
        let current = match profile.profile.rounds() {
            RoundModel::Memory => self.standing(&profile).await?.map(|committed| committed.id),
            RoundModel::PlugIn | RoundModel::Independent => None,
        };
        let page = self.ledger.history.commitments(rig, before, limit).await?;
        Ok(Some(Listed { page, current }))
    }
}
