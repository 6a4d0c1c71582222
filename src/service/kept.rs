//! Kept witnesses at work: batches that need no solve, solves that nobody waits for, and what survives a restart.

use std::{
    collections::HashMap,
    sync::{Arc, Mutex, PoisonError, RwLock},
    time::{Duration, Instant},
};

use super::{Service, SolveError, Working, solvers::Solved};
use crate::{
    certify::{Certification, FromPool, certify_from, keepable},
    ledger::{LedgerError, rows::KeptRow},
    request::Request,
    scenario::Geometry,
    witness::{
        pool::{Kept, MadeFor, Pool},
        witness::Witness,
    },
};

/// Shortest time between two solves of a geometry that nobody waits for.
const PAUSE: Duration = Duration::from_secs(60);
/// After this time without a solve, kept witnesses of a geometry that are used are compared with a new one, however good they seem.
const PERIOD: Duration = Duration::from_secs(600);

/// The pool, shared by all rigs, and when each geometry was solved last.
#[derive(Default)]
pub(super) struct KeptWitnesses {
    pool: RwLock<Pool>,
    solved: Mutex<HashMap<Geometry, Instant>>,
}

/// What a solve added to the pool, and what had to go for it.
#[derive(Default)]
pub(super) struct Learned {
    added: Vec<Arc<Kept>>,
    dropped: Vec<Arc<Kept>>,
}

impl KeptWitnesses {
    fn certify(&self, request: &Request, acceptable_loss: f64) -> Option<FromPool> {
        // What is changed under this lock is whole after every call, whatever else panicked.
        certify_from(&self.pool.read().unwrap_or_else(PoisonError::into_inner), request, acceptable_loss)
    }

    /// Checks the witnesses of a solve, and keeps them.
    fn learn(&self, request: &Request, certification: &Certification) -> Learned {
        self.note_solve(request.scenario().geometry());
        let mut learned = Learned::default();
        for (witness, made_for) in keepable(request, certification) {
            match Kept::try_new(&witness, made_for) {
                Ok(kept) => self.add(Arc::new(kept), &mut learned),
                Err(error) => tracing::error!(%error, "a witness that was just made is not accepted"),
            }
        }
        learned
    }

    fn add(&self, kept: Arc<Kept>, learned: &mut Learned) {
        let dropped = self.pool.write().unwrap_or_else(PoisonError::into_inner).add(Arc::clone(&kept));
        if let Some(dropped) = dropped {
            learned.added.push(kept);
            learned.dropped.extend(dropped);
        }
    }

    fn len(&self) -> usize {
        self.pool.read().unwrap_or_else(PoisonError::into_inner).len()
    }

    fn note_solve(&self, geometry: Geometry) {
        self.solved.lock().unwrap_or_else(PoisonError::into_inner).insert(geometry, Instant::now());
    }

    /// Whether another solve of the geometry is due, which then counts as begun.
    fn due(&self, geometry: Geometry, stale: bool) -> bool {
        let mut solved = self.solved.lock().unwrap_or_else(PoisonError::into_inner);
        let wait = if stale { PAUSE } else { PERIOD };
        let due = solved.get(&geometry).is_none_or(|last| last.elapsed() >= wait);
        if due {
            solved.insert(geometry, Instant::now());
        }
        due
    }
}

impl Service {
    /// Fills the pool with the witnesses that were kept when the service last ran, each of which is checked first. One that is not accepted is
    /// logged and kept no longer.
    ///
    /// # Errors
    /// The ledger's. A row that cannot be used is none.
    pub async fn recall_witnesses(self: &Arc<Self>) -> Result<usize, LedgerError> {
        let rows = self.ledger.history.kept_witnesses().await?;
        let service = Arc::clone(self);
        let recalled = tokio::task::spawn_blocking(move || {
            let mut learned = Learned::default();
            let mut unusable = Vec::new();
            for KeptRow { digest, document, made_for } in rows {
                match read(&digest, &document, &made_for) {
                    Ok(kept) => {
                        kept.filed();
                        service.kept.add(Arc::new(kept), &mut learned);
                    }
                    Err(error) => {
                        tracing::warn!(digest, error, "a kept witness is not accepted, and is dropped");
                        unusable.push(digest);
                    }
                }
            }
            unusable.extend(learned.dropped.iter().map(|kept| kept.witness().digest().to_owned()));
            (service.kept.len(), unusable)
        });
        let Ok((number, unusable)) = recalled.await else { return Ok(0) };
        if !unusable.is_empty()
            && let Err(error) = self.ledger.writer.keep_witnesses(vec![], unusable).await
        {
            // They are looked at again at the next start, and are not used meanwhile.
            tracing::warn!(error = &error as &dyn std::error::Error, "unusable witnesses are still listed");
        }
        Ok(number)
    }

    /// The certificate that kept witnesses give, if they are good enough; makes sure that they stay so.
    pub(super) fn from_pool(self: &Arc<Self>, request: &Request, acceptable_loss: f64) -> Option<FromPool> {
        let found = self.kept.certify(request, acceptable_loss)?;
        if self.kept.due(request.scenario().geometry(), found.loss > 0.5 * acceptable_loss) {
            self.refresh(request.clone());
        }
        Some(found)
    }

    /// Has a batch that was certified already solved too, when there is nothing else to do, for the sake of those to come.
    fn refresh(self: &Arc<Self>, request: Request) {
        let (service, runtime, certifier) = (Arc::clone(self), tokio::runtime::Handle::current(), self.solvers.certifier());
        let working = Working::begin(Arc::clone(self));
        let taken = self.solvers.offer(move || {
            let learned = service.kept.learn(&request, &certifier(&request));
            runtime.spawn(async move { working.service.file(learned).await });
        });
        tracing::debug!(taken, "kept witnesses are compared with a new one");
    }

    /// Has a request solved, and keeps its witnesses. A witness that was made while this one waited may do as well.
    pub(super) async fn solve(self: &Arc<Self>, request: Request, acceptable_loss: Option<f64>) -> Result<Solved<Outcome>, SolveError> {
        let (service, certifier) = (Arc::clone(self), self.solvers.certifier());
        let work = move || {
            if let Some(found) = acceptable_loss.and_then(|loss| service.kept.certify(&request, loss)) {
                return (Outcome::Kept(Box::new(found)), Learned::default());
            }
            let certification = certifier(&request);
            let learned = service.kept.learn(&request, &certification);
            (Outcome::Fresh(Box::new(certification)), learned)
        };
        let Solved { outcome: (outcome, learned), queued, solved } = self.solvers.run(work).await?;
        let working = Working::begin(Arc::clone(self));
        tokio::spawn(async move { working.service.file(learned).await });
        Ok(Solved { outcome, queued, solved })
    }

    /// Writes down what is kept and what no longer is.
    async fn file(&self, learned: Learned) {
        let Learned { added, dropped } = learned;
        if added.is_empty() && dropped.is_empty() {
            return;
        }
        let rows = added.iter().filter_map(|kept| {
            let made_for = serde_json::to_string(kept.made_for()).ok()?;
            Some(KeptRow { digest: kept.witness().digest().to_owned(), document: kept.document()?.to_string(), made_for })
        });
        let dropped = dropped.iter().map(|kept| kept.witness().digest().to_owned()).collect();
        match self.ledger.writer.keep_witnesses(rows.collect(), dropped).await {
            Ok(()) => added.iter().for_each(|kept| kept.filed()),
            // They are used all the same, and go with the first batch they certify.
            Err(error) => tracing::warn!(error = &error as &dyn std::error::Error, "kept witnesses will be forgotten at the next start"),
        }
    }
}

/// How a request was answered after it had waited for a solver.
pub(super) enum Outcome {
    Kept(Box<FromPool>),
    Fresh(Box<Certification>),
}

fn read(digest: &str, document: &str, made_for: &str) -> Result<Kept, String> {
    let witness: Witness = serde_json::from_str(document).map_err(|error| error.to_string())?;
    if witness.digest() != digest {
        return Err("the document has another digest".into());
    }
    let made_for: MadeFor = serde_json::from_str(made_for).map_err(|error| error.to_string())?;
    Kept::try_new(&witness, made_for).map_err(|error| error.to_string())
}
