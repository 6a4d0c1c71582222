//! One certification with kept witnesses, in the core alone.

use std::{hint::black_box, sync::Arc};

use bitassay::{
    certify::{certify, certify_from, keepable},
    request::{Data, EntropyChoice, Request, RequestDocument},
    statistics::region::region,
    witness::{
        check::complete,
        pool::{Kept, Pool},
        witness::Witness,
    },
};
use serde_json::json;

use crate::{
    batches::{Batches, scenario},
    machine::thread_time,
    report::Section,
};

/// Certifications that are timed together.
const BATCHES: usize = 20_000;
const POOLS: [usize; 3] = [1, 10, 100];

pub fn run() -> Section {
    let mut section = Section::default();
    section.note(format!("processor time per certification, mean over {BATCHES} distinct batches: region, pool, exact bound, certificate"));
    for (name, entropy) in [("guessing", EntropyChoice::Guessing), ("power", EntropyChoice::Power)] {
        for size in POOLS {
            let each = certification(entropy, size);
            section.figure(format!("{name} entropy, pool of {size}"), each, "µs");
            if size == 100 {
                section.below(format!("{name} entropy, pool of {size}"), each, 50.0, "µs");
            }
        }
        let requests = requests(&mut Batches::new(1), entropy);
        let before = thread_time();
        requests.iter().for_each(|request| {
            let Data::Counts(counts) = request.data() else { return };
            black_box(region(counts, 1e-10));
        });
        section.figure("of that, the confidence region", (thread_time() - before).as_secs_f64() / BATCHES as f64 * 1e6, "µs");
    }
    section
}

/// Processor time of a certification from a pool of so many witnesses, in microseconds.
pub fn certification(entropy: EntropyChoice, size: usize) -> f64 {
    let mut batches = Batches::new(1);
    let first = request(&mut batches, entropy);
    let solved = keepable(&first, &certify(&first));
    assert!(!solved.is_empty(), "the first batch was not certified");
    let mut pool = Pool::new(size, 4 * size);
    for (witness, made_for) in &solved {
        for i in 0..size {
            let kept = Kept::try_new(&variant(witness, i), made_for.clone()).expect("a variant holds too");
            pool.add(Arc::new(kept));
        }
    }
    let requests = requests(&mut batches, entropy);
    let before = thread_time();
    let certified = requests.iter().filter(|request| black_box(certify_from(&pool, request, f64::MAX)).is_some()).count();
    let each = (thread_time() - before).as_secs_f64() / BATCHES as f64 * 1e6;
    assert_eq!(certified, BATCHES, "some batches were not certified from the pool");
    each
}

fn requests(batches: &mut Batches, entropy: EntropyChoice) -> Vec<Request> {
    (0..BATCHES).map(|_| request(batches, entropy)).collect()
}

fn request(batches: &mut Batches, entropy: EntropyChoice) -> Request {
    let document = json!({
        "scenario": scenario(), "counts": batches.draw(), "rounds": "independent", "entropy": entropy,
    });
    let document: RequestDocument = serde_json::from_value(document).expect("a request");
    Request::try_from(document).expect("a valid request")
}

/// Another witness of the same size: a multiplier is moved a little, and the constants pay for it.
fn variant(witness: &Witness, by: usize) -> Witness {
    let mut variant = witness.clone();
    variant.behaviour[0][0][0] += by as i64;
    complete(variant).expect("any multipliers will do").witness().clone()
}
