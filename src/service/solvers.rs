//! A fixed number of threads that solve, behind a queue of fixed length. What nobody waits for has a queue of its own: it is done when nothing
//! else is to be done, and never on all threads at once, so that one is always there for who waits.

use std::{
    collections::VecDeque,
    panic::{AssertUnwindSafe, catch_unwind},
    sync::{
        Arc, Condvar, Mutex, MutexGuard,
        atomic::{AtomicU64, AtomicUsize, Ordering},
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

/// Most jobs that wait though nobody waits for them.
const SPARE: usize = 4;

/// What waits.
#[derive(Default)]
struct Queue {
    jobs: VecDeque<Job>,
    spare: VecDeque<Job>,
    /// Threads that are at a spare job.
    at_spare: usize,
    closed: bool,
}

/// The queue, and the news that something changed about it.
#[derive(Default)]
struct Waiting {
    queue: Mutex<Queue>,
    changed: Condvar,
}

/// The threads and their queue.
pub struct Solvers {
    certifier: Certifier,
    waiting: Arc<Waiting>,
    threads: Mutex<Vec<JoinHandle<()>>>,
    number: usize,
    length: usize,
    load: Arc<Load>,
}

impl Solvers {
    /// Starts `number` threads, at least one, behind a queue of `length` jobs.
    ///
    /// # Errors
    /// The operating system's, if it refuses a thread.
    pub fn start(number: usize, length: usize, certifier: Certifier) -> std::io::Result<Self> {
        let number = number.max(1);
        let waiting = Arc::new(Waiting::default());
        let load = Arc::new(Load::default());
        let threads = (0..number)
            .map(|i| {
                let (waiting, load) = (Arc::clone(&waiting), Arc::clone(&load));
                std::thread::Builder::new().name(format!("solver-{i}")).spawn(move || work(&waiting, number, &load))
            })
            .collect::<Result<Vec<_>, _>>()?;
        Ok(Self { certifier, waiting, threads: Mutex::new(threads), number, length: length.max(1), load })
    }

    /// What certifies.
    pub(super) fn certifier(&self) -> Certifier {
        Arc::clone(&self.certifier)
    }

    /// Has a job done that nobody waits for, once there is nothing else to do. Answers whether it was taken: with a single thread none is, nor
    /// while others like it wait.
    pub(super) fn offer(&self, job: impl FnOnce() + Send + 'static) -> bool {
        let mut queue = own(&self.waiting.queue);
        let taken = !queue.closed && self.number > 1 && queue.spare.len() < SPARE;
        if taken {
            queue.spare.push_back(Box::new(move |_: &Load| {
                // As for other jobs; the panic itself has been logged.
                drop(catch_unwind(AssertUnwindSafe(job)));
            }));
            self.waiting.changed.notify_one();
        }
        taken
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
        let mut queue = own(&self.waiting.queue);
        if queue.closed {
            return Err(SolveError::Stopped);
        }
        let waiting = queue.jobs.len();
        if waiting >= self.length {
            return Err(SolveError::QueueFull { waiting, retry_after: self.retry_after(waiting) });
        }
        queue.jobs.push_back(job);
        self.load.waiting.store(queue.jobs.len(), Ordering::Relaxed);
        self.waiting.changed.notify_one();
        Ok(())
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
        if own(&self.waiting.queue).closed {
            return Some("the solvers have stopped".into());
        }
        let gone = own(&self.threads).iter().filter(|thread| thread.is_finished()).count();
        (gone > 0).then(|| format!("{gone} of {} solver threads are gone", self.number))
    }

    /// Takes no more jobs, does those that somebody waits for, and ends the threads.
    pub(super) async fn close(&self) {
        {
            let mut queue = own(&self.waiting.queue);
            queue.closed = true;
            queue.spare.clear();
        }
        self.waiting.changed.notify_all();
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

fn work(waiting: &Waiting, threads: usize, load: &Load) {
    let mut queue = own(&waiting.queue);
    loop {
        if let Some(job) = queue.jobs.pop_front() {
            load.waiting.store(queue.jobs.len(), Ordering::Relaxed);
            drop(queue);
            job(load);
            queue = own(&waiting.queue);
        } else if queue.closed {
            return;
        } else if queue.at_spare + 1 < threads
            && let Some(job) = queue.spare.pop_front()
        {
            queue.at_spare += 1;
            drop(queue);
            job(load);
            queue = own(&waiting.queue);
            queue.at_spare -= 1;
        } else {
            queue = waiting.changed.wait(queue).unwrap_or_else(|poisoned| poisoned.into_inner());
        }
    }
}
