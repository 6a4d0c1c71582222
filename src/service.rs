//! The service: takes batches in, has them solved, keeps what came out. Knows no HTTP.

mod access;
mod budgets;
mod commitments;
mod forecasts;
mod kept;
mod newest;
mod quality;
mod solvers;
mod tree;
mod turns;

use std::{
    sync::{
        Arc,
        atomic::{AtomicBool, Ordering},
    },
    time::Instant,
};

use tokio::sync::watch;
use uuid::{NoContext, Uuid};

pub use self::{
    access::{AccessError, Caller, Scope},
    budgets::DocumentError,
    commitments::{Listed, OrderError},
    forecasts::ForecastError,
    solvers::{Certifier, SolveError, Solvers},
    tree::Exported,
};
use self::{
    kept::{KeptWitnesses, Outcome},
    newest::Newest,
    turns::Turns,
};
use crate::{
    batch::{Batch, BatchFault, LeakageSource, Posted, Task},
    certificate::{Certificate, Verdict},
    certify::{Certification, FromPool},
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
    witness::{pool::Kept as KeptWitness, witness::Witness},
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
    kept: KeptWitnesses,
    newest: Newest,
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
        let keys = access::Keys::watch(ledger.history.clone());
        Arc::new(Self {
            ledger,
            solvers,
            clock,
            turns,
            kept: KeptWitnesses::default(),
            newest: Newest::default(),
            keys,
            metrics,
            accepting: AtomicBool::new(true),
            active: watch::Sender::new(0),
        })
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
        let recorded_at = self.clock.now();
        let (kept, version) = self.ledger.writer.keep_profile(rig.clone(), profile.clone(), expectation, recorded_at).await?;
        if kept != Kept::Unchanged {
            self.newest.note_profile(Arc::new(ProfileVersion { rig, version, recorded_at, profile }));
        }
        Ok((kept, version))
    }

    /// A rig's newest profile.
    async fn newest_profile(&self, rig: &RigName) -> Result<Option<Arc<ProfileVersion>>, LedgerError> {
        if let Some(known) = self.newest.profile(rig) {
            return Ok(Some(known));
        }
        let found = self.ledger.history.profile(rig, None).await?.map(Arc::new);
        found.iter().for_each(|profile| self.newest.note_profile(Arc::clone(profile)));
        Ok(found)
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

    async fn settle(self: &Arc<Self>, rig: RigName, key: IdempotencyKey, posted: Posted) -> Result<Settled, SubmitError> {
        let profile = self.newest_profile(&rig).await?.ok_or(SubmitError::UnknownRig)?;
        let submission = Submission { key, body_digest: posted.digest() };
        // Posts under one key go one after the other, so that a batch sent twice is solved once.
        let _turn = self.turns.take(&rig, &submission.key).await;
        let (committed, batch) = match self.read(&profile, posted).await {
            Ok(read) => read,
            // What was answered before is answered again, though the profile may have changed since.
            Err(error) => return self.answered(&rig, &submission).await?.ok_or(error),
        };
        let certified = match batch.task {
            Task::Done(certificate) => {
                Certified { certificate: *certificate, witnesses: vec![], kept: vec![], timings: Timings::default() }
            }
            Task::Solve(request) => {
                let acceptable_loss = profile.profile.freshness().acceptable_loss();
                let before = Instant::now();
                let found = acceptable_loss.and_then(|loss| self.from_pool(&request, loss));
                self.metrics.looked_up(found.is_some(), before.elapsed());
                match found {
                    // The writer sees for itself whether the batch was answered before.
                    Some(found) => Certified::from(found),
                    None => match self.answered(&rig, &submission).await? {
                        Some(settled) => return Ok(settled),
                        None => {
                            let solved = self.solve(*request, acceptable_loss).await?;
                            self.metrics.solved(solved.queued, solved.solved);
                            let timings =
                                Timings { queued_seconds: solved.queued.as_secs_f64(), solved_seconds: solved.solved.as_secs_f64() };
                            Certified { timings, ..Certified::from(solved.outcome) }
                        }
                    },
                }
            }
        };
        self.keep(&profile, committed, (batch.started_at, batch.ended_at), batch.leakage_source, certified, submission).await
    }

    async fn read(&self, profile: &ProfileVersion, posted: Posted) -> Result<(Option<Committed>, Batch), SubmitError> {
        let mut legible = posted.read(profile.profile.scenario().geometry())?;
        if let Some(leakage) = legible.leakage() {
            self.fetch_budget(leakage).await?.map_err(BatchFault::Impossible)?;
        }
        let committed = match profile.profile.rounds() {
            RoundModel::Memory => Some(self.commitment_for(profile, legible.started_at()).await?.ok_or(SubmitError::Uncommitted)?),
            RoundModel::PlugIn | RoundModel::Independent => None,
        };
        let batch = legible.under(&profile.profile, committed.as_ref())?;
        Ok((committed, batch))
    }

    async fn answered(&self, rig: &RigName, submission: &Submission) -> Result<Option<Settled>, SubmitError> {
        match self.ledger.history.answered(rig, &submission.key).await? {
            Some(answered) if answered.body_digest == submission.body_digest => Ok(Some(Settled { answered, replayed: true })),
            Some(_) => Err(SubmitError::KeyReused),
            None => Ok(None),
        }
    }

    async fn keep(
        &self,
        profile: &ProfileVersion,
        committed: Option<Committed>,
        (started_at, ended_at): (Stamp, Stamp),
        leakage_source: LeakageSource,
        certified: Certified,
        submission: Submission,
    ) -> Result<Settled, SubmitError> {
        let Certified { mut certificate, witnesses, kept, timings } = certified;
        let declared = profile.profile.setting_distribution();
        let distribution = committed.as_ref().map(|committed| &committed.commitment.setting_distribution[..]).or(declared);
        let previous = quality::previous(&self.ledger, &self.newest, &profile.rig).await?;
        let concerns = quality::concerns(previous.as_deref(), distribution, &certificate);
        let refuse_on = profile.profile.refuse_on().to_vec();
        if let Some(objection) = quality::objection(&refuse_on, &concerns, &certificate) {
            certificate.refuse(objection);
        }
        let recorded_at = self.clock.now();
        let record = Record {
            id: new_id(recorded_at),
            rig: profile.rig.clone(),
            profile_version: profile.version,
            recorded_at,
            started_at,
            ended_at,
            leakage_source,
            commitment: committed.map(|committed| committed.id),
            certificate,
            concerns,
            refuse_on,
            timings,
        };
        let entry = Entry::new(&record, &witnesses, &kept, submission)?;
        let settled = self.ledger.writer.keep_entry(entry).await.map_err(|error| match error {
            WriteError::KeyReused => SubmitError::KeyReused,
            WriteError::Ledger(error) => SubmitError::Ledger(error),
            // An entry states no expectation.
            WriteError::ExpectationMissing { .. } | WriteError::ExpectationFailed { .. } => SubmitError::Ledger(LedgerError::Closed),
        })?;
        if !settled.replayed {
            self.metrics.recorded(&record);
            if record.certificate.verdict == Verdict::Certified {
                self.newest.note_certified(&profile.rig, Some(record.id), record.certificate.counts.map(Arc::new));
            }
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
        // A solve that nobody waited for may have had something to file.
        let _ = self.active.subscribe().wait_for(|active| *active == 0).await;
        self.ledger.close().await;
    }
}

/// A certificate, and what it rests on besides a commitment.
struct Certified {
    certificate: Certificate,
    witnesses: Vec<Witness>,
    kept: Vec<Arc<KeptWitness>>,
    timings: Timings,
}

impl From<FromPool> for Certified {
    fn from(found: FromPool) -> Self {
        Self { certificate: found.certificate, witnesses: vec![], kept: found.kept, timings: Timings::default() }
    }
}

impl From<Outcome> for Certified {
    fn from(outcome: Outcome) -> Self {
        match outcome {
            Outcome::Kept(found) => (*found).into(),
            Outcome::Fresh(certification) => {
                let Certification { certificate, witnesses } = *certification;
                Self { certificate, witnesses, kept: vec![], timings: Timings::default() }
            }
        }
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
