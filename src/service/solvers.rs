//! A fixed number of threads that solve, behind a queue of fixed length.

use std::{
    panic::{AssertUnwindSafe, catch_unwind},
    sync::{
        Arc, Mutex, MutexGuard,
        atomic::{AtomicU64, AtomicUsize, Ordering},
        mpsc::{Receiver, SyncSender, TrySendError, sync_channel},
    },
    thread::JoinHandle,
    time::{Duration, Instant},
};

use tokio::sync::oneshot;

use crate::{certify::Certification, request::Request};

/// What certifies: the core's [`crate::certify::certify`], or a stand-in for it in tests.
pub type Certifier = Arc<dyn Fn(&Request) -> Certification + Send + Sync>;

/// Why a job was not done.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum SolveError {
    #[error("{waiting} jobs are waiting already, and no more may")]
    QueueFull {
        waiting: usize,
        /// When there may be room, going by how long recent jobs took.
        retry_after: Duration,
    },
    #[error("the solver failed on this job")]
    Panicked,
    #[error("the solvers have stopped")]
    Stopped,
}

/// What came out of a job, and how long it took.
#[derive(Debug)]
pub(super) struct Solved<T> {
    pub outcome: T,
    pub queued: Duration,
    pub solved: Duration,
}

/// Something to do on a solver thread, with its answer already addressed.
type Job = Box<dyn FnOnce(&Load) + Send>;

/// What callers and threads share.
#[derive(Debug, Default)]
struct Load {
    waiting: AtomicUsize,
    /// Moving average of how long a solve takes, in milliseconds.
    recent: AtomicU64,
}

impl Load {
    fn add(&self, solved: Duration) {
        let milliseconds = u64::try_from(solved.as_millis()).unwrap_or(u64::MAX);
        let average = |recent| Some(recent - recent / 4 + milliseconds / 4);
        let _ = self.recent.fetch_update(Ordering::Relaxed, Ordering::Relaxed, average);
    }
}

/// The threads and their queue.
pub struct Solvers {
    certifier: Certifier,
    /// `None` once closed.
    queue: Mutex<Option<SyncSender<Job>>>,
    threads: Mutex<Vec<JoinHandle<()>>>,
    number: usize,
    load: Arc<Load>,
}

impl Solvers {
    /// Starts `number` threads, at least one, behind a queue of `length` jobs.
    ///
    /// # Errors
    /// The operating system's, if it refuses a thread.
    pub fn start(number: usize, length: usize, certifier: Certifier) -> std::io::Result<Self> {
        let number = number.max(1);
        let (queue, jobs) = sync_channel(length.max(1));
        let jobs = Arc::new(Mutex::new(jobs));
        let load = Arc::new(Load::default());
        let threads = (0..number)
            .map(|i| {
                let (jobs, load) = (Arc::clone(&jobs), Arc::clone(&load));
                std::thread::Builder::new().name(format!("solver-{i}")).spawn(move || work(&jobs, &load))
            })
            .collect::<Result<Vec<_>, _>>()?;
        Ok(Self { certifier, queue: Mutex::new(Some(queue)), threads: Mutex::new(threads), number, load })
    }

    /// Has a request certified, once a thread is free.
    ///
    /// # Errors
    /// A full queue, a panic inside the solve, or closed solvers.
    pub(super) async fn certify(&self, request: Request) -> Result<Solved<Certification>, SolveError> {
        let certifier = Arc::clone(&self.certifier);
        self.run(move || certifier(&request)).await
    }

    /// Runs a job, once a thread is free.
    ///
    /// # Errors
    /// A full queue, a panic inside the job, or closed solvers.
    pub(super) async fn run<T: Send + 'static>(&self, job: impl FnOnce() -> T + Send + 'static) -> Result<Solved<T>, SolveError> {
        let (answer, outcome) = oneshot::channel();
        let accepted = Instant::now();
        self.enqueue(Box::new(move |load| {
            let started = Instant::now();
            // The job is gone afterwards and the core has no state: nothing half-changed can be seen.
            let outcome = catch_unwind(AssertUnwindSafe(job));
            let (queued, solved) = (started.duration_since(accepted), started.elapsed());
            load.add(solved);
            // Whoever asked may have gone.
            drop(answer.send(outcome.map(|outcome| Solved { outcome, queued, solved }).map_err(|_| SolveError::Panicked)));
        }))?;
        // A sender that is dropped unused means that its thread is gone.
        outcome.await.unwrap_or(Err(SolveError::Stopped))
    }

    fn enqueue(&self, job: Job) -> Result<(), SolveError> {
        let queue = own(&self.queue);
        let queue = queue.as_ref().ok_or(SolveError::Stopped)?;
        // Counted before the job can be taken off, so that the count never falls below zero.
        let waiting = self.load.waiting.fetch_add(1, Ordering::Relaxed);
        queue.try_send(job).map_err(|error| {
            self.load.waiting.fetch_sub(1, Ordering::Relaxed);
            match error {
                TrySendError::Full(_) => SolveError::QueueFull { waiting, retry_after: self.retry_after(waiting) },
                TrySendError::Disconnected(_) => SolveError::Stopped,
            }
        })
    }

    /// How long until half of those waiting are through, from a second to two minutes.
    fn retry_after(&self, waiting: usize) -> Duration {
        let recent = self.load.recent.load(Ordering::Relaxed);
        let milliseconds = recent.saturating_mul(waiting as u64) / (2 * self.number as u64);
        Duration::from_millis(milliseconds).clamp(Duration::from_secs(1), Duration::from_secs(120))
    }

    /// Jobs that wait for a thread.
    pub(super) fn waiting(&self) -> usize {
        self.load.waiting.load(Ordering::Relaxed)
    }

    /// What is wrong with the solvers, if anything is.
    pub(super) fn fault(&self) -> Option<String> {
        if own(&self.queue).is_none() {
            return Some("the solvers have stopped".into());
        }
        let gone = own(&self.threads).iter().filter(|thread| thread.is_finished()).count();
        (gone > 0).then(|| format!("{gone} of {} solver threads are gone", self.number))
    }

    /// Takes no more jobs, does those that were taken, and ends the threads.
    pub(super) async fn close(&self) {
        drop(own(&self.queue).take());
        let threads = std::mem::take(&mut *own(&self.threads));
        let joined = tokio::task::spawn_blocking(move || threads.into_iter().filter_map(|thread| thread.join().err()).count()).await;
        if !matches!(joined, Ok(0)) {
            tracing::error!("a solver thread did not end well");
        }
    }
}

/// Locks, whether or not another holder panicked: what is locked here is replaced as a whole or not at all.
fn own<T>(mutex: &Mutex<T>) -> MutexGuard<'_, T> {
    mutex.lock().unwrap_or_else(|poisoned| poisoned.into_inner())
}

fn work(jobs: &Mutex<Receiver<Job>>, load: &Load) {
    loop {
        // The lock is held while waiting: idle threads queue for the lock in place of the channel.
        let Ok(job) = own(jobs).recv() else { return };
        load.waiting.fetch_sub(1, Ordering::Relaxed);
        job(load);
    }
}
