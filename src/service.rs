//! The service: takes batches in, has them solved, keeps what came out. Knows no HTTP.

mod access;
mod commitments;
mod quality;
mod solvers;
mod tree;
mod turns;

use std::sync::{
    Arc,
    atomic::{AtomicBool, Ordering},
};

use tokio::sync::watch;
use uuid::{NoContext, Uuid};

use self::turns::Turns;
pub use self::{
    access::{AccessError, Caller, Scope},
    commitments::{Listed, OrderError},
    solvers::{Certifier, SolveError, Solvers},
    tree::Exported,
};
use crate::{
    batch::{Batch, BatchFault, Posted, Task},
    certify::Certification,
    clock::{Clock, Stamp},
    committed::Committed,
    ledger::{
        Ledger, LedgerError,
        history::{Filter, Page, Window},
        rows::{Entry, ProfileVersion, Recorded},
        writer::{Expectation, Kept, Settled, WriteError},
    },
    metrics::Metrics,
    profile::{Profile, RigName},
    record::{Record, Timings},
    request::RoundModel,
    rig_yield::RigYield,
    submission::{IdempotencyKey, Submission},
};

/// Why a batch was not certified. Nothing was recorded.
#[derive(Debug, thiserror::Error)]
pub enum SubmitError {
    #[error("there is no rig of this name")]
    UnknownRig,
    #[error("the rig's rounds have memory, and no commitment stands for its newest profile")]
    Uncommitted,
    #[error(transparent)]
    Batch(#[from] BatchFault),
    #[error("this idempotency key already stands for another batch")]
    KeyReused,
    #[error("no solver took the batch")]
    Solve(#[from] SolveError),
    #[error("the record cannot be written out")]
    Unwritable(#[from] serde_json::Error),
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    #[error("the task that worked on the batch ended early")]
    Abandoned(#[source] tokio::task::JoinError),
}

/// One readiness check.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Check {
    pub name: &'static str,
    /// What is wrong, if anything is.
    pub fault: Option<String>,
}

/// What a certification rests on.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Evidence {
    /// The commitment's document; rounds with memory only.
    pub commitment: Option<String>,
    /// Digest and document of each witness.
    pub witnesses: Vec<(String, String)>,
}

/// A running service.
pub struct Service {
    ledger: Ledger,
    solvers: Solvers,
    clock: Arc<dyn Clock>,
    turns: Arc<Turns>,
    keys: access::Keys,
    metrics: Metrics,
    accepting: AtomicBool,
    /// Batches and commitments that are being worked on, whether or not their posters still wait.
    active: watch::Sender<usize>,
}

impl Service {
    pub fn new(ledger: Ledger, solvers: Solvers, clock: Arc<dyn Clock>) -> Arc<Self> {
        let turns = Arc::new(Turns::default());
        let metrics = Metrics::new(ledger.writer.group_sizes.clone());
        let keys = access::Keys::default();
        Arc::new(Self { ledger, solvers, clock, turns, keys, metrics, accepting: AtomicBool::new(true), active: watch::Sender::new(0) })
    }

    /// What is counted and measured here.
    pub fn metrics(&self) -> &Metrics {
        &self.metrics
    }

    /// Everything that is counted and measured, as text.
    ///
    /// # Errors
    /// The encoder's.
    pub fn measurements(&self) -> Result<String, std::fmt::Error> {
        self.metrics.text(self.solvers.waiting(), self.ledger.sizes())
    }

    /// Keeps a profile; see [`crate::ledger::writer::Writer::keep_profile`].
    ///
    /// # Errors
    /// An expectation that does not hold, or the ledger's.
    pub async fn keep_profile(&self, rig: RigName, profile: Profile, expectation: Expectation) -> Result<(Kept, u64), WriteError> {
        self.ledger.writer.keep_profile(rig, profile, expectation, self.clock.now()).await
    }

    /// A rig's profile, the newest or a given version.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn profile(&self, rig: &RigName, version: Option<u64>) -> Result<Option<ProfileVersion>, LedgerError> {
        self.ledger.history.profile(rig, version).await
    }

    /// Rigs in order of their names, each with its newest profile.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn rigs(&self, after: Option<&RigName>, limit: u32) -> Result<Page<ProfileVersion>, LedgerError> {
        self.ledger.history.rigs(after, limit).await
    }

    /// Certifies a batch and records what came out, or gives the answer that the same batch was given before.
    ///
    /// Once begun, the work goes on even if the poster hangs up: a poster that loses patience finds the answer when it sends the
    /// batch again.
    ///
    /// # Errors
    /// See [`SubmitError`].
    pub async fn submit(self: &Arc<Self>, rig: RigName, key: IdempotencyKey, posted: Posted) -> Result<Settled, SubmitError> {
        let service = Arc::clone(self);
        let working = Working::begin(service);
        tokio::spawn(async move { working.service.settle(rig, key, posted).await }).await.map_err(SubmitError::Abandoned)?
    }

    async fn settle(&self, rig: RigName, key: IdempotencyKey, posted: Posted) -> Result<Settled, SubmitError> {
        let profile = self.profile(&rig, None).await?.ok_or(SubmitError::UnknownRig)?;
        let submission = Submission { key, body_digest: posted.digest() };
        // Posts under one key go one after the other, so that a batch sent twice is solved once.
        let _turn = self.turns.take(&rig, &submission.key).await;
        if let Some(answered) = self.ledger.history.answered(&rig, &submission.key).await? {
            let same = answered.body_digest == submission.body_digest;
            return if same { Ok(Settled { answered, replayed: true }) } else { Err(SubmitError::KeyReused) };
        }
        let committed = match profile.profile.rounds() {
            RoundModel::Memory => Some(self.standing(&profile).await?.ok_or(SubmitError::Uncommitted)?),
            RoundModel::PlugIn | RoundModel::Independent => None,
        };
        let batch = posted.read(&profile.profile, committed.as_ref())?;
        self.keep(profile, committed, batch, submission).await
    }

    async fn keep(
        &self,
        profile: ProfileVersion,
        committed: Option<Committed>,
        batch: Batch,
        submission: Submission,
    ) -> Result<Settled, SubmitError> {
        let (Certification { certificate, witnesses }, timings) = match batch.task {
            Task::Solve(request) => {
                let done = self.solvers.certify(*request).await?;
                self.metrics.solved(done.queued, done.solved);
                (done.outcome, Timings { queued_seconds: done.queued.as_secs_f64(), solved_seconds: done.solved.as_secs_f64() })
            }
            Task::Done(certificate) => (Certification { certificate: *certificate, witnesses: vec![] }, Timings::default()),
        };
        let declared = profile.profile.setting_distribution();
        let distribution = committed.as_ref().map(|committed| &committed.commitment.setting_distribution[..]).or(declared);
        let concerns = quality::concerns(&self.ledger, &profile.rig, distribution, &certificate).await?;
        let recorded_at = self.clock.now();
        let record = Record {
            id: new_id(recorded_at),
            rig: profile.rig,
            profile_version: profile.version,
            recorded_at,
            started_at: batch.started_at,
            ended_at: batch.ended_at,
            leakage_source: batch.leakage_source,
            commitment: committed.map(|committed| committed.id),
            certificate,
            concerns,
            timings,
        };
        let entry = Entry::new(&record, &witnesses, submission)?;
        let settled = self.ledger.writer.keep_entry(entry).await.map_err(|error| match error {
            WriteError::KeyReused => SubmitError::KeyReused,
            WriteError::Ledger(error) => SubmitError::Ledger(error),
            // An entry states no expectation.
            WriteError::ExpectationMissing { .. } | WriteError::ExpectationFailed { .. } => SubmitError::Ledger(LedgerError::Closed),
        })?;
        if !settled.replayed {
            self.metrics.recorded(&record);
        }
        Ok(settled)
    }

    /// The text of a record.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn record(&self, id: Uuid) -> Result<Option<String>, LedgerError> {
        self.ledger.history.record(id).await
    }

    /// What a certification rests on; `None` if there is no such certification.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn evidence(&self, id: Uuid) -> Result<Option<Evidence>, LedgerError> {
        let Some(mut witnesses) = self.ledger.history.witnesses(id).await? else { return Ok(None) };
        let commitment = self.ledger.history.commitment_of(id).await?.map(|(committed, of_commitment)| {
            witnesses.extend(of_commitment);
            committed.document
        });
        Ok(Some(Evidence { commitment, witnesses }))
    }

    /// One page of the history, newest first.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn history(&self, filter: &Filter, limit: u32) -> Result<Page<Recorded>, LedgerError> {
        self.ledger.history.page(filter, limit).await
    }

    /// What a rig's certifications add up to; `None` if there is no such rig.
    ///
    /// # Errors
    /// The ledger's.
    pub async fn rig_yield(&self, rig: &RigName, window: Window) -> Result<Option<RigYield>, LedgerError> {
        if self.profile(rig, None).await?.is_none() {
            return Ok(None);
        }
        let tallies = self.ledger.history.tallies(rig, window).await?;
        let latest = match tallies.first() {
            Some(newest) => self.ledger.history.summary(newest.id).await?,
            None => None,
        };
        Ok(Some(RigYield::of(rig.clone(), window, &tallies, latest)))
    }

    /// Everything that must be well for batches to be taken, each under its name.
    pub async fn readiness(&self) -> Vec<Check> {
        let unless = |well: bool, fault: &str| (!well).then(|| fault.to_owned());
        vec![
            Check { name: "accepting", fault: unless(self.accepting.load(Ordering::Relaxed), "the service is shutting down") },
            Check { name: "database", fault: self.ledger.history.check().await.err().map(|error| error.to_string()) },
            Check { name: "writer", fault: unless(self.ledger.writer.is_open(), "the ledger is closed") },
            Check { name: "ledger", fault: self.ledger.seal.fault().map(str::to_owned) },
            Check { name: "solvers", fault: self.solvers.fault() },
        ]
    }

    /// Says from now on that the service is not ready. What is under way goes on, and so does what still comes in.
    pub fn announce_shutdown(&self) {
        self.accepting.store(false, Ordering::Relaxed);
    }

    /// Finishes all batches and commitments that are being worked on, writes them, and closes the ledger.
    pub async fn close(&self) {
        self.announce_shutdown();
        // The sender lives in `self`: waiting cannot fail.
        let _ = self.active.subscribe().wait_for(|active| *active == 0).await;
        self.solvers.close().await;
        self.ledger.close().await;
    }
}

/// Counts as one active batch or commitment for as long as it lives.
struct Working {
    service: Arc<Service>,
}

impl Working {
    fn begin(service: Arc<Service>) -> Self {
        service.active.send_modify(|active| *active += 1);
        Self { service }
    }
}

impl Drop for Working {
    fn drop(&mut self) {
        self.service.active.send_modify(|active| *active -= 1);
    }
}

/// A name that sorts by time and that nobody can guess.
fn new_id(now: Stamp) -> Uuid {
    let (seconds, nanoseconds) = now.unix();
    Uuid::new_v7(uuid::Timestamp::from_unix(NoContext, seconds, nanoseconds))
}
