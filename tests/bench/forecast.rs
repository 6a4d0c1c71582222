//! A forecast, whose points share witnesses, against as many separate solves.

use std::hint::black_box;

use bitassay::{
    bound::{Answer, guessing_probability},
    forecast::{ForecastDocument, ForecastRequest, forecast},
    relaxation::level::Level,
    scenario::{LeakageDocument, Scenario},
    solver::Limits,
    witness::check::Place,
};
use serde_json::json;

use crate::{batches::scenario, cold::code, machine::thread_time, report::Section};

/// The forecast, the shorter of the two, is timed over so many.
const TIMES: u32 = 3;

pub fn run() -> Section {
    let mut section = Section::default();
    section.note(
        "2→1 code at visibility 0.99, 60 points over leakage 1e-5 … 1e-1, guessing probability in the limit of many rounds, standard: seconds of \
         processor time",
    );
    let behaviour = code(2);
    let document: ForecastDocument = serde_json::from_value(json!({
        "scenario": scenario(), "behaviour": behaviour, "rounds": ["plug-in"], "entropy": "guessing", "level": "standard",
        "sweep": { "leakage": { "from": 1e-5, "to": 0.1, "points": 60 } },
    }))
    .expect("a request");
    let request = ForecastRequest::try_from(document).expect("a valid request");
    let before = thread_time();
    let outcome = forecast(&request, |_| {});
    (1..TIMES).for_each(|_| drop(black_box(forecast(&request, |_| {}))));
    let shared = (thread_time() - before).as_secs_f64() / f64::from(TIMES);

    let points = &outcome.curves[0].points;
    let (mut separate, mut given_away) = (0.0, 0.0f64);
    for point in points {
        let scenario: Scenario = serde_json::from_value(scenario()).expect("a scenario");
        let scenario = scenario.with_leakage(point.leakage.clone()).expect("a leakage");
        let before = thread_time();
        let answer =
            guessing_probability(&scenario, scenario.targets()[0], Place::Behaviour(&behaviour), Level::Standard, Limits::default());
        separate += (thread_time() - before).as_secs_f64();
        let Answer::Bounded(found) = answer else { panic!("{:?}: {answer:?}", point.leakage) };
        given_away = given_away.max(-found.bound.rounded_up().min(1.0).log2() - point.bits_per_target_round);
    }
    assert!(points.len() == 60 && matches!(points[59].leakage, LeakageDocument::Uniform(0.1)));
    section.figure("separate solves of 60 points", separate, "s");
    section.figure("the forecast", shared, "s");
    section.figure("solves in the forecast", outcome.sharing.solves as f64, "");
    section.figure("most that a solve of its own gains a point", given_away, "bits per target round");
    section.below("the forecast against separate solves", shared / separate, 1.0 / 3.0, "");
    section
}
