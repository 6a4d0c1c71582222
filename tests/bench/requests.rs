//! Clients that post over loopback as fast as they are answered: a few lines of HTTP/1.1 on kept connections, so that the machine is left to
//! the server.

use std::{
    net::SocketAddr,
    sync::{
        Arc,
        atomic::{AtomicU64, Ordering},
    },
    time::{Duration, Instant},
};

use tokio::{
    io::{AsyncReadExt, AsyncWriteExt},
    net::TcpStream,
    runtime::Runtime,
};

use crate::{batches::Batches, machine::process_time};

/// What came of a run.
pub struct Outcome {
    pub answers: usize,
    pub elapsed: Duration,
    /// Processor time of server and clients together.
    pub used: Duration,
    /// From request to answer, sorted.
    latencies: Vec<Duration>,
}

impl Outcome {
    pub fn rate(&self) -> f64 {
        self.answers as f64 / self.elapsed.as_secs_f64()
    }

    /// Latency that a share of the answers stays within, in milliseconds.
    pub fn quantile(&self, share: f64) -> f64 {
        let at = ((self.latencies.len() as f64 * share).ceil() as usize).clamp(1, self.latencies.len().max(1)) - 1;
        self.latencies.get(at).map_or(f64::NAN, |latency| latency.as_secs_f64() * 1e3)
    }

    /// Processor time per answer, in microseconds.
    pub fn used_each(&self) -> f64 {
        self.used.as_secs_f64() / self.answers as f64 * 1e6
    }
}

/// When a run is over.
#[derive(Clone, Copy)]
pub enum Until {
    Elapsed(Duration),
    Answers(u64),
}

/// Has so many clients post batches to a path. Every answer has the status 201, or the bench ends.
pub fn post(address: SocketAddr, path: &'static str, clients: u64, until: Until) -> Outcome {
    static RUN: AtomicU64 = AtomicU64::new(0);
    let run = RUN.fetch_add(1, Ordering::Relaxed);
    let runtime = Runtime::new().expect("threads");
    let answered = Arc::new(AtomicU64::new(0));
    let (begun, used) = (Instant::now(), process_time());
    let each = runtime.block_on(async {
        let tasks: Vec<_> = (0..clients)
            .map(|client| {
                tokio::spawn(one_client(address, path, format!("{run}-{client}"), run << 32 | client, begun, until, Arc::clone(&answered)))
            })
            .collect();
        let mut each = vec![];
        for task in tasks {
            each.push(task.await.expect("a client"));
        }
        each
    });
    let (elapsed, used) = (begun.elapsed(), process_time() - used);
    let mut latencies = each.concat();
    latencies.sort();
    Outcome { answers: latencies.len(), elapsed, used, latencies }
}

async fn one_client(
    address: SocketAddr,
    path: &str,
    name: String,
    seed: u64,
    begun: Instant,
    until: Until,
    answered: Arc<AtomicU64>,
) -> Vec<Duration> {
    let mut batches = Batches::new(seed);
    let mut stream = TcpStream::connect(address).await.expect("a connection");
    stream.set_nodelay(true).expect("a socket");
    let mut latencies = vec![];
    let mut buffer = vec![0u8; 64 * 1024];
    loop {
        let over = match until {
            Until::Elapsed(time) => begun.elapsed() >= time,
            Until::Answers(number) => answered.fetch_add(1, Ordering::Relaxed) >= number,
        };
        if over {
            return latencies;
        }
        let body = batches.body();
        let request = format!(
            "POST {path} HTTP/1.1\r\nhost: bench\r\ncontent-type: application/json\r\nidempotency-key: {name}-{}\r\ncontent-length: {}\r\n\r\n{body}",
            latencies.len(),
            body.len()
        );
        let sent = Instant::now();
        stream.write_all(request.as_bytes()).await.expect("the server takes a request");
        answer(&mut stream, &mut buffer).await;
        latencies.push(sent.elapsed());
    }
}

/// Reads one answer to its end.
async fn answer(stream: &mut TcpStream, buffer: &mut Vec<u8>) {
    let mut length = 0;
    loop {
        if length == buffer.len() {
            buffer.resize(2 * length, 0);
        }
        let read = stream.read(&mut buffer[length..]).await.expect("an answer");
        assert!(read > 0, "the server hung up");
        length += read;
        let text = &buffer[..length];
        let Some(head) = text.windows(4).position(|bytes| bytes == b"\r\n\r\n") else { continue };
        let head_text = std::str::from_utf8(&text[..head]).expect("a head");
        let body =
            head_text.lines().find_map(|line| line.strip_prefix("content-length: ")).expect("a length").parse::<usize>().expect("a length");
        if length >= head + 4 + body {
            assert!(head_text.starts_with("HTTP/1.1 201"), "{}", String::from_utf8_lossy(text));
            return;
        }
    }
}
