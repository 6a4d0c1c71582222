//! `/metrics`

use crate::server::{batch, with_rig};

#[test]
fn what_happens_is_counted() {
    let (_running, client) = with_rig();
    client.post_batch("bench", "good", &batch(1000)).expect(201);
    client.post_batch("bench", "good", &batch(1000)).expect(201);
    client.post_batch("bench", "bad", &batch(1001)).expect(422);
    client.get("/nowhere").expect(404);
    let answer = client.get("/metrics").expect(200);
    assert_eq!(answer.header("content-type"), Some("application/openmetrics-text; version=1.0.0; charset=utf-8"));
    // 400 of 4000 rounds, by the stand-in's rule; the replay counts as a request and not as a certification.
    for line in [
        "bitassay_requests_total{method=\"POST\",route=\"/v1/rigs/{rig}/batches\",status=\"201\"} 2",
        "bitassay_requests_total{method=\"POST\",route=\"/v1/rigs/{rig}/batches\",status=\"422\"} 1",
        "bitassay_requests_total{method=\"any\",route=\"none\",status=\"404\"} 1",
        "bitassay_certifications_total{rig=\"bench\",verdict=\"certified\",reason=\"\"} 1",
        "bitassay_certifications_total{rig=\"bench\",verdict=\"refused\",reason=\"zero-bound\"} 1",
        "bitassay_certified_bits_total{rig=\"bench\"} 400",
        "bitassay_bits_per_round{rig=\"bench\"} 0.0",
        "bitassay_solve_seconds_count 2",
        "bitassay_queue_length 0",
        "bitassay_writer_group_size_count 3",
    ] {
        assert!(answer.text().lines().any(|found| found == line), "{line} is not in\n{}", answer.text());
    }
    let ledger = answer.text().lines().find_map(|line| line.strip_prefix("bitassay_ledger_bytes ")).unwrap();
    let log = answer.text().lines().find_map(|line| line.strip_prefix("bitassay_write_ahead_log_bytes ")).unwrap();
    assert!(ledger.parse::<u64>().unwrap() > 0 && log.parse::<u64>().unwrap() > 0);
}
