//! Minutes of ordinary use, good and bad, with an eye on memory and file descriptors.

use std::{
    io::Write,
    net::TcpStream,
    sync::atomic::{AtomicBool, AtomicU64, Ordering},
    time::{Duration, Instant},
};

use clap::Args;

use crate::process::{Process, refused_batch, small_batch, small_profile};

/// Use the service evenly, and see whether its memory and its file descriptors stay what they are
#[derive(Args)]
pub struct Soak {
    /// How long
    #[arg(long, default_value_t = 600)]
    seconds: u64,

    /// Growth of the resident memory, from the second to the last quarter, in per cent, above which this fails
    #[arg(long, default_value_t = 10.0)]
    most: f64,
}

/// Growth in KiB that is no growth: what an allocator keeps or gives back as it pleases.
const SLACK: u64 = 4096;
/// File descriptors that come and go with the connections of the clients below.
const SWING: u64 = 16;

struct Sample {
    memory: u64,
    files: u64,
}

impl Soak {
    pub fn run(&self) -> bool {
        let process = Process::start(&["--rate", "100000", "--burst", "100000", "--head-seconds", "2"]);
        process.client().put("bench", &small_profile());
        let (over, requests) = (AtomicBool::new(false), AtomicU64::new(0));
        let samples = std::thread::scope(|scope| {
            scope.spawn(|| post(&process, &over, &requests));
            scope.spawn(|| read(&process, &over, &requests));
            scope.spawn(|| err(&process, &over, &requests));
            let begun = Instant::now();
            let mut samples = vec![];
            while begun.elapsed() < Duration::from_secs(self.seconds) {
                samples.push(Sample { memory: process.memory(), files: process.file_descriptors() });
                std::thread::sleep(Duration::from_millis(500));
            }
            over.store(true, Ordering::Relaxed);
            samples
        });
        let quarter = samples.len() / 4;
        let quarters: Vec<&[Sample]> = samples.chunks(quarter).take(4).collect();
        println!("{:<10} {:>12} {:>16}", "quarter", "memory, KiB", "most descriptors");
        let figures: Vec<(u64, u64)> = quarters.iter().map(|part| (median(part), most_files(part))).collect();
        for (i, (memory, files)) in figures.iter().enumerate() {
            println!("{:<10} {memory:>12} {files:>16}", i + 1);
        }
        let ((before, files_before), (after, files_after)) = (figures[1], figures[3]);
        let growth = 100.0 * (after as f64 / before as f64 - 1.0);
        println!("{} requests in {} s; memory {growth:+.1} % from the second to the last quarter", requests.into_inner(), self.seconds);
        let well = (growth < self.most || after < before + SLACK) && files_after <= files_before + SWING;
        println!("{}", if well { "flat" } else { "NOT FLAT" });
        well
    }
}

fn median(samples: &[Sample]) -> u64 {
    let mut memory: Vec<u64> = samples.iter().map(|sample| sample.memory).collect();
    memory.sort_unstable();
    memory[memory.len() / 2]
}

fn most_files(samples: &[Sample]) -> u64 {
    samples.iter().map(|sample| sample.files).max().unwrap()
}

/// Posts batches, some twice, some refused.
fn post(process: &Process, over: &AtomicBool, requests: &AtomicU64) {
    let client = process.client();
    for i in 0.. {
        if over.load(Ordering::Relaxed) {
            return;
        }
        let batch = if i % 5 == 0 { refused_batch(i) } else { small_batch(i) };
        let status = client.post("bench", &i.to_string(), &batch);
        assert_eq!(status, if i % 5 == 0 { 422 } else { 201 });
        assert_eq!(client.post("bench", &i.to_string(), &batch), status);
        requests.fetch_add(2, Ordering::Relaxed);
        std::thread::sleep(Duration::from_millis(20));
    }
}

fn read(process: &Process, over: &AtomicBool, requests: &AtomicU64) {
    while !over.load(Ordering::Relaxed) {
        // A new connection each round.
        let client = process.client();
        for path in ["/v1/certifications?limit=50", "/v1/rigs/bench/yield", "/v1/rigs", "/metrics", "/readyz", "/v1/openapi.json"] {
            assert_eq!(client.get(path).0, 200, "{path}");
            requests.fetch_add(1, Ordering::Relaxed);
        }
        std::thread::sleep(Duration::from_millis(20));
    }
}

/// Everything that is turned away, and connections that are dropped in the middle or never say anything.
fn err(process: &Process, over: &AtomicBool, requests: &AtomicU64) {
    let client = process.client();
    let address = process.base.strip_prefix("http://").unwrap();
    for i in 0u64.. {
        if over.load(Ordering::Relaxed) {
            return;
        }
        assert_eq!(client.get(&format!("/v1/nowhere-{i}")).0, 404);
        assert_eq!(client.call("POST", "/v1/rigs/bench/batches", &format!("bad-{i}"), b"{").0, 400);
        assert_eq!(client.call("POST", &format!("/v1/rigs/absent-{i}/batches"), "k", b"{}").0, 404);
        let mut dropped = TcpStream::connect(address).unwrap();
        dropped.write_all(b"POST /v1/rigs/bench/batches HTTP/1.1\r\nHost: x\r\nContent-Length: 100\r\n\r\n{").unwrap();
        drop(dropped);
        requests.fetch_add(4, Ordering::Relaxed);
        std::thread::sleep(Duration::from_millis(100));
    }
}
