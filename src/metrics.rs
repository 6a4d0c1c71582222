//! What the service counts and measures, as text for whoever scrapes it. No global state: each service has its own.

use std::{fmt, sync::atomic::AtomicU64, time::Duration};

use prometheus_client::{
    encoding::{EncodeLabelSet, text::encode},
    metrics::{
        counter::Counter,
        family::Family,
        gauge::Gauge,
        histogram::{Histogram, exponential_buckets},
    },
    registry::{Registry, Unit},
};

use crate::{ledger::rows::word, record::Record, statistics::quality::Finding};

/// Media type of [`Metrics::text`].
pub const OPENMETRICS: &str = "application/openmetrics-text; version=1.0.0; charset=utf-8";

#[derive(Debug, Clone, PartialEq, Eq, Hash, EncodeLabelSet)]
struct Request {
    method: String,
    route: String,
    status: u16,
}

#[derive(Debug, Clone, PartialEq, Eq, Hash, EncodeLabelSet)]
struct Route {
    route: String,
}

#[derive(Debug, Clone, PartialEq, Eq, Hash, EncodeLabelSet)]
struct Outcome {
    rig: String,
    verdict: String,
    reason: String,
}

#[derive(Debug, Clone, PartialEq, Eq, Hash, EncodeLabelSet)]
struct Rig {
    rig: String,
}

#[derive(Debug, Clone, PartialEq, Eq, Hash, EncodeLabelSet)]
struct Concern {
    rig: String,
    kind: String,
}

#[derive(Debug, Clone, PartialEq, Eq, Hash, EncodeLabelSet)]
struct Looked {
    outcome: &'static str,
}

/// A number that can have a fraction.
type Figure = Gauge<f64, AtomicU64>;

/// Everything that is measured.
pub struct Metrics {
    registry: Registry,
    requests: Family<Request, Counter>,
    request_seconds: Family<Route, Histogram, fn() -> Histogram>,
    limited: Counter,
    connections: Gauge,
    outcomes: Family<Outcome, Counter>,
    certified_bits: Family<Rig, Counter>,
    bits_per_round: Family<Rig, Figure>,
    concerns: Family<Concern, Counter>,
    queued_seconds: Histogram,
    solve_seconds: Histogram,
    check_seconds: Histogram,
    pool: Family<Looked, Counter>,
    queue_length: Gauge,
    ledger_bytes: Gauge,
    log_bytes: Gauge,
}

impl fmt::Debug for Metrics {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        formatter.debug_struct("Metrics").finish_non_exhaustive()
    }
}

/// From a tenth of a millisecond to about seven minutes, a factor of four a step.
fn seconds() -> Histogram {
    Histogram::new(exponential_buckets(1e-4, 4.0, 12))
}

/// How many items the writer's transactions had. The writer makes it, [`Metrics::new`] shows it.
pub fn group_sizes() -> Histogram {
    Histogram::new(exponential_buckets(1.0, 2.0, 7))
}

impl Metrics {
    /// `group_sizes` are those of the ledger's writer.
    pub fn new(group_sizes: Histogram) -> Self {
        let metrics = Self {
            registry: Registry::with_prefix("bitassay"),
            requests: Family::default(),
            request_seconds: Family::new_with_constructor(seconds),
            limited: Counter::default(),
            connections: Gauge::default(),
            outcomes: Family::default(),
            certified_bits: Family::default(),
            bits_per_round: Family::default(),
            concerns: Family::default(),
            queued_seconds: seconds(),
            solve_seconds: seconds(),
            check_seconds: seconds(),
            pool: Family::default(),
            queue_length: Gauge::default(),
            ledger_bytes: Gauge::default(),
            log_bytes: Gauge::default(),
        };
        metrics.registered(group_sizes)
    }

    fn registered(mut self, group_sizes: Histogram) -> Self {
        let registry = &mut self.registry;
        registry.register("requests", "Requests, by route and status of the answer", self.requests.clone());
        registry.register_with_unit("request", "From a request's arrival to its answer", Unit::Seconds, self.request_seconds.clone());
        registry.register("requests_limited", "Requests turned away because their token or peer sent too many", self.limited.clone());
        registry.register("connections", "Connections that are open", self.connections.clone());
        registry.register("certifications", "Certifications recorded, by rig, verdict and reason", self.outcomes.clone());
        registry.register("certified_bits", "Bits certified, by rig", self.certified_bits.clone());
        registry.register("bits_per_round", "Bits per round of the newest batch, by rig; 0 if it was refused", self.bits_per_round.clone());
        registry.register("concerns", "What was odd about batches, by rig and kind", self.concerns.clone());
        registry.register_with_unit(
            "queued",
            "From acceptance of a job until a solver was free",
            Unit::Seconds,
            self.queued_seconds.clone(),
        );
        registry.register_with_unit("solve", "Jobs on the solver threads", Unit::Seconds, self.solve_seconds.clone());
        registry.register_with_unit(
            "check",
            "Exact checks of kept witnesses against new counts",
            Unit::Seconds,
            self.check_seconds.clone(),
        );
        registry.register("witness_pool", "Batches by whether kept witnesses certified them", self.pool.clone());
        registry.register("queue_length", "Jobs that wait for a solver", self.queue_length.clone());
        registry.register("writer_group_size", "Items in one transaction of the ledger's writer", group_sizes);
        registry.register_with_unit("ledger", "Size of the database file", Unit::Bytes, self.ledger_bytes.clone());
        registry.register_with_unit("write_ahead_log", "Size of the database's write-ahead log", Unit::Bytes, self.log_bytes.clone());
        self
    }

    /// A request was answered. `route` is the path's template, so that there are no more of them than routes.
    pub fn answered(&self, method: &str, route: &str, status: u16, took: Duration) {
        let request = Request { method: method.to_owned(), route: route.to_owned(), status };
        self.requests.get_or_create(&request).inc();
        self.request_seconds.get_or_create(&Route { route: route.to_owned() }).observe(took.as_secs_f64());
    }

    /// A request was turned away for being one too many.
    pub fn limited(&self) {
        self.limited.inc();
    }

    /// A connection was taken; it counts for as long as what is returned lives.
    pub fn connected(&self) -> Connected {
        self.connections.inc();
        Connected(self.connections.clone())
    }

    /// A certification is in the ledger.
    pub fn recorded(&self, record: &Record) {
        let rig = record.rig.to_string();
        let certificate = &record.certificate;
        let outcome =
            Outcome { rig: rig.clone(), verdict: word(certificate.verdict), reason: certificate.reason.map_or_else(String::new, word) };
        self.outcomes.get_or_create(&outcome).inc();
        self.certified_bits.get_or_create(&Rig { rig: rig.clone() }).inc_by(certificate.certified_bits);
        self.bits_per_round.get_or_create(&Rig { rig: rig.clone() }).set(certificate.bits_per_round);
        for concern in &record.concerns {
            self.concerns.get_or_create(&Concern { rig: rig.clone(), kind: kind(&concern.finding) }).inc();
        }
    }

    /// A solver thread finished a job.
    pub fn solved(&self, queued: Duration, solved: Duration) {
        self.queued_seconds.observe(queued.as_secs_f64());
        self.solve_seconds.observe(solved.as_secs_f64());
    }

    /// Kept witnesses were tried on a batch: whether they certified it, and how long the exact check took.
    pub fn looked_up(&self, hit: bool, checked: Duration) {
        self.pool.get_or_create(&Looked { outcome: if hit { "hit" } else { "miss" } }).inc();
        self.check_seconds.observe(checked.as_secs_f64());
    }

    /// Everything as text, with what is looked up only when asked for.
    ///
    /// # Errors
    /// The encoder's.
    pub fn text(&self, queue_length: usize, (ledger, log): (u64, u64)) -> Result<String, fmt::Error> {
        let whole = |number: u64| i64::try_from(number).unwrap_or(i64::MAX);
        self.queue_length.set(whole(queue_length as u64));
        self.ledger_bytes.set(whole(ledger));
        self.log_bytes.set(whole(log));
        let mut text = String::new();
        encode(&mut text, &self.registry).map(|()| text)
    }
}

/// Counts as one open connection until it is dropped.
#[derive(Debug)]
pub struct Connected(Gauge);

impl Drop for Connected {
    fn drop(&mut self) {
        self.0.dec();
    }
}

/// The word that the interface has for a finding.
fn kind(finding: &Finding) -> String {
    let document = serde_json::to_value(finding).unwrap_or_default();
    document.get("concern").and_then(|kind| kind.as_str()).unwrap_or_default().to_owned()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_was_measured_is_told() {
        let sizes = group_sizes();
        let metrics = Metrics::new(sizes.clone());
        sizes.observe(3.0);
        metrics.answered("GET", "/livez", 200, Duration::from_millis(2));
        metrics.limited();
        metrics.solved(Duration::from_secs(1), Duration::from_secs(8));
        metrics.looked_up(true, Duration::from_millis(3));
        let open = metrics.connected();
        let text = metrics.text(5, (4096, 512)).unwrap();
        for line in [
            "bitassay_requests_total{method=\"GET\",route=\"/livez\",status=\"200\"} 1",
            "bitassay_request_seconds_sum{route=\"/livez\"} 0.002",
            "bitassay_requests_limited_total 1",
            "bitassay_connections 1",
            "bitassay_queued_seconds_sum 1.0",
            "bitassay_solve_seconds_sum 8.0",
            "bitassay_check_seconds_sum 0.003",
            "bitassay_witness_pool_total{outcome=\"hit\"} 1",
            "bitassay_queue_length 5",
            "bitassay_writer_group_size_sum 3.0",
            "bitassay_ledger_bytes 4096",
            "bitassay_write_ahead_log_bytes 512",
            "# EOF",
        ] {
            assert!(text.lines().any(|found| found == line), "{line} is not in\n{text}");
        }
        drop(open);
        assert!(metrics.text(0, (0, 0)).unwrap().contains("\nbitassay_connections 0\n"));
    }

    #[test]
    fn a_finding_has_a_word() {
        let finding = Finding::FewRounds { setting: crate::scenario::Setting { x: 0, y: 0 }, rounds: 1, least: 100 };
        assert_eq!(kind(&finding), "few-rounds");
    }
}
