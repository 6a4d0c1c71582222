//! More batches than the solvers can take, and a history that answers all the same.

use std::{
    collections::BTreeMap,
    sync::{
        Arc, Mutex,
        atomic::{AtomicU64, Ordering},
    },
    time::{Duration, Instant},
};

use clap::Args;

use crate::process::{Process, large_batch, large_profile, small_batch, small_profile};

/// Flood the service with batches that need a solve, and time everything else
#[derive(Args)]
pub struct Flood {
    /// How long the flood lasts
    #[arg(long, default_value_t = 30)]
    seconds: u64,

    /// Clients that post batches, more than the queue holds
    #[arg(long, default_value_t = 100)]
    posters: u64,

    /// The 99th percentile of the history's answers, in milliseconds, above which this fails
    #[arg(long, default_value_t = 100.0)]
    most: f64,
}

const RECORDS: u64 = 200;
const WATCHED: [&str; 5] = ["/livez", "/readyz", "/metrics", "/v1/certifications?limit=50", "/v1/rigs/small/yield"];

impl Flood {
    pub fn run(&self) -> bool {
        let process = Process::start(&["--rate", "100000", "--burst", "100000"]);
        let client = process.client();
        client.put("small", &small_profile());
        client.put("large", &large_profile());
        for i in 0..RECORDS {
            assert_eq!(client.post("small", &i.to_string(), &small_batch(i)), 201);
        }
        let quiet = times(&process, Duration::from_secs(3));
        let statuses = Arc::new(Mutex::new(BTreeMap::<u16, u64>::new()));
        let sent = Arc::new(AtomicU64::new(0));
        for _ in 0..self.posters {
            let (client, statuses, sent) = (process.client(), Arc::clone(&statuses), Arc::clone(&sent));
            // Ends with the server: what still waits then is not waited for.
            std::thread::spawn(move || {
                loop {
                    let i = sent.fetch_add(1, Ordering::Relaxed);
                    let Some(status) = client.try_post("large", &i.to_string(), &large_batch(i % 3000)) else { return };
                    *statuses.lock().unwrap().entry(status).or_default() += 1;
                    if status == 503 {
                        std::thread::sleep(Duration::from_millis(100));
                    }
                }
            });
        }
        // The flood has to be there before it is measured against.
        std::thread::sleep(Duration::from_secs(2));
        let busy = times(&process, Duration::from_secs(self.seconds));
        let counted = statuses.lock().unwrap().clone();
        println!("answers to posts in {} s, by status: {counted:?}", self.seconds + 2);
        assert!(counted.get(&503).is_some_and(|number| *number > 0), "no flood: the queue was never full");
        println!("{:<32} {:>8} {:>9} {:>9} {:>9}   {:>9}", "milliseconds", "requests", "median", "p99", "most", "p99 quiet");
        let mut well = true;
        for (path, found) in &busy {
            let calm = percentile(&quiet[path], 0.99);
            let (median, p99, most) = (percentile(found, 0.5), percentile(found, 0.99), percentile(found, 1.0));
            println!("{path:<32} {:>8} {median:>9.1} {p99:>9.1} {most:>9.1}   {calm:>9.1}", found.len());
            well &= p99 < self.most;
        }
        println!("{}", if well { "all below the limit at p99" } else { "TOO SLOW" });
        well
    }
}

/// How long each watched path takes to answer, in milliseconds.
fn times(process: &Process, duration: Duration) -> BTreeMap<&'static str, Vec<f64>> {
    let client = process.client();
    let begun = Instant::now();
    let mut found = BTreeMap::<&str, Vec<f64>>::new();
    while begun.elapsed() < duration {
        for path in WATCHED {
            let (status, _, took) = client.get(path);
            assert_eq!(status, 200, "{path}");
            found.entry(path).or_default().push(took.as_secs_f64() * 1e3);
            std::thread::sleep(Duration::from_millis(2));
        }
    }
    found
}

fn percentile(times: &[f64], fraction: f64) -> f64 {
    let mut sorted = times.to_vec();
    sorted.sort_by(f64::total_cmp);
    sorted[((sorted.len() - 1) as f64 * fraction).ceil() as usize]
}
