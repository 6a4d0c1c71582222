//! A fixed number of threads that solve, behind a queue of fixed length. What nobody waits for has a queue of its own: it is done when nothing
//! else is to be done, and never on all threads at once, so that one is always there for who waits. So has what takes long and consists of many
//! solves: it begins when nothing else waits, leaves one thread alone if there are two, and between its solves does what has come in the meantime.

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
/// The same for a job that makes pauses.
type LongJob = Box<dyn FnOnce(Pause) + Send>;

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
/// Most long jobs that wait, and when it is worth to ask again.
const LONG: usize = 8;
const LONG_RETRY: Duration = Duration::from_secs(60);

/// What a long job calls between its solves.
pub(super) type Pause<'a> = &'a dyn Fn();

/// What waits.
#[derive(Default)]
struct Queue {
    jobs: VecDeque<Job>,
    long: VecDeque<LongJob>,
    spare: VecDeque<Job>,
    /// Threads that are at a long or a spare job.
    at_leisure: usize,
    closed: bool,
}

impl Queue {
    /// The next job that somebody waits for.
    fn next(&mut self, load: &Load) -> Option<Job> {
        let job = self.jobs.pop_front()?;
        load.waiting.store(self.jobs.len(), Ordering::Relaxed);
        Some(job)
    }
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

    /// Runs a long job, once a thread has nothing else to do. Whenever it pauses, its thread does the other jobs that wait by then.
    ///
    /// # Errors
    /// Too many long jobs, a panic inside the job, or closed solvers.
    pub(super) async fn run_long<T: Send + 'static>(&self, job: impl FnOnce(Pause) -> T + Send + 'static) -> Result<T, SolveError> {
        let (answer, outcome) = oneshot::channel();
        {
            let mut queue = own(&self.waiting.queue);
            if queue.closed {
                return Err(SolveError::Stopped);
            }
            let waiting = queue.long.len();
            if waiting >= LONG {
                return Err(SolveError::QueueFull { waiting, retry_after: LONG_RETRY });
            }
            queue.long.push_back(Box::new(move |pause| {
                // As for other jobs.
                let outcome = catch_unwind(AssertUnwindSafe(|| job(pause)));
                drop(answer.send(outcome.map_err(|_| SolveError::Panicked)));
            }));
            self.waiting.changed.notify_one();
        }
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
            queue.long.clear();
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
        let leisure = queue.at_leisure + 1 < threads;
        if let Some(job) = queue.next(load) {
            drop(queue);
            job(load);
            queue = own(&waiting.queue);
        } else if queue.closed {
            return;
        } else if (leisure || threads == 1)
            && let Some(job) = queue.long.pop_front()
        {
            queue = aside(waiting, queue, || job(&|| catch_up(waiting, load)));
        } else if leisure && let Some(job) = queue.spare.pop_front() {
            queue = aside(waiting, queue, || job(load));
        } else {
            queue = waiting.changed.wait(queue).unwrap_or_else(|poisoned| poisoned.into_inner());
        }
    }
}

/// Does a job that leaves a thread to the others.
fn aside<'w>(waiting: &'w Waiting, mut queue: MutexGuard<'w, Queue>, job: impl FnOnce()) -> MutexGuard<'w, Queue> {
    queue.at_leisure += 1;
    drop(queue);
    job();
    let mut queue = own(&waiting.queue);
    queue.at_leisure -= 1;
    queue
}

/// Does what waits.
fn catch_up(waiting: &Waiting, load: &Load) {
    while let Some(job) = {
        let mut queue = own(&waiting.queue);
        queue.next(load)
    } {
        job(load);
    }
}

#[cfg(test)]
mod tests {
    use std::sync::atomic::AtomicBool;

    use super::*;

    fn solvers(number: usize) -> Arc<Solvers> {
        Arc::new(Solvers::start(number, 4, Arc::new(crate::certify::certify)).unwrap())
    }

    /// With a single thread: nothing else could have done the job.
    #[tokio::test]
    async fn what_comes_during_a_long_job_is_done_in_its_pauses() {
        let solvers = solvers(1);
        let (begun, waits) = oneshot::channel();
        let (go, may_go) = std::sync::mpsc::channel();
        let done = Arc::new(AtomicBool::new(false));
        let long = tokio::spawn({
            let (solvers, done) = (Arc::clone(&solvers), Arc::clone(&done));
            async move {
                let job = move |pause: Pause| {
                    begun.send(()).unwrap();
                    may_go.recv().unwrap();
                    let before = done.load(Ordering::SeqCst);
                    pause();
                    (before, done.load(Ordering::SeqCst))
                };
                solvers.run_long(job).await
            }
        });
        waits.await.unwrap();
        let short = tokio::spawn({
            let (solvers, done) = (Arc::clone(&solvers), Arc::clone(&done));
            async move { solvers.run(move || done.store(true, Ordering::SeqCst)).await.map(|_| ()) }
        });
        while solvers.waiting() == 0 {
            tokio::task::yield_now().await;
        }
        go.send(()).unwrap();
        assert_eq!(long.await.unwrap(), Ok((false, true)));
        assert_eq!(short.await.unwrap(), Ok(()));
        solvers.close().await;
    }

    #[tokio::test]
    async fn long_jobs_leave_one_of_two_threads_alone() {
        let solvers = solvers(2);
        let (running, most) = (Arc::new(AtomicUsize::new(0)), Arc::new(AtomicUsize::new(0)));
        let jobs: Vec<_> = (0..4)
            .map(|_| {
                let (solvers, running, most) = (Arc::clone(&solvers), Arc::clone(&running), Arc::clone(&most));
                tokio::spawn(async move {
                    let job = move |_: Pause| {
                        most.fetch_max(running.fetch_add(1, Ordering::SeqCst) + 1, Ordering::SeqCst);
                        std::thread::sleep(Duration::from_millis(20));
                        running.fetch_sub(1, Ordering::SeqCst);
                    };
                    solvers.run_long(job).await
                })
            })
            .collect();
        for job in jobs {
            assert_eq!(job.await.unwrap(), Ok(()));
        }
        assert_eq!(most.load(Ordering::SeqCst), 1);
        solvers.close().await;
    }

    /// Nobody else is the worse for it.
    #[tokio::test]
    async fn a_long_job_that_panics_is_an_answer() {
        let solvers = solvers(1);
        let panics = |_: Pause| -> u8 { panic!("as a test wants it") };
        assert_eq!(solvers.run_long(panics).await, Err(SolveError::Panicked));
        assert_eq!(solvers.run_long(|_| 3).await, Ok(3));
        solvers.close().await;
        assert_eq!(solvers.run_long(|_| 3).await, Err(SolveError::Stopped));
    }
}
