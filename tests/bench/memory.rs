//! Memory of a service that certifies a hundred thousand batches.

use crate::{
    machine::resident,
    report::Section,
    requests::{Until, post},
    service::Served,
};

const STEP: u64 = 10_000;
const STEPS: u64 = 10;
/// Growth that counts as flat, over all but the first step: caches fill up during that one.
const FLAT: f64 = 8.0;

pub fn run() -> Section {
    let mut section = Section::default();
    section.note("resident memory of server and clients together, 64 clients");
    let served = Served::start();
    let megabytes = || resident() / 1e6;
    section.figure("before", megabytes(), "MB");
    let mut after_first = f64::NAN;
    for step in 1..=STEPS {
        post(served.address, "/v1/rigs/bench/batches", 64, Until::Answers(STEP));
        if step == 1 {
            after_first = megabytes();
        }
        section.figure(format!("after {} batches", step * STEP), megabytes(), "MB");
    }
    section.below(format!("growth from {STEP} to {} batches", STEP * STEPS), megabytes() - after_first, FLAT, "MB");
    served.stop();
    section
}
