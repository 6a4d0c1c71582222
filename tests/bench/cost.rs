//! The cost model against the clock: cases of many sizes, what the model says of each, and what a bound took.

use bitassay::{
    bound::{Answer, guessing_probability, power_entropy_in},
    counts::Table,
    relaxation::{
        cells::cover,
        cost::{AUTO_BUDGET, estimate},
        level::Level,
    },
    scenario::Scenario,
    solver::Limits,
    witness::check::Place,
};
use nalgebra::DVector;
use serde_json::json;

use crate::{machine::thread_time, report::Section};

/// Cases above this would take too long here.
const MOST: f64 = 4.0;
/// Cases below this say nothing of a model that is to tell long solves from short ones.
const LEAST: f64 = 0.04;
/// The model is good enough if it misses no case by more than this factor.
const FACTOR: f64 = 3.0;
/// Preparations, measurements, outcomes.
const GEOMETRIES: [(usize, usize, usize); 12] = [
    (2, 1, 2),
    (3, 1, 3),
    (4, 2, 2),
    (5, 2, 2),
    (4, 2, 3),
    (8, 2, 2),
    (8, 3, 2),
    (6, 2, 3),
    (12, 2, 2),
    (16, 3, 2),
    (32, 2, 2),
    (32, 4, 2),
];

pub fn run() -> Section {
    let mut section = Section::default();
    section.note("seconds of processor time of one bound, from the scenario to the exact check, and what the model of relaxation/cost.rs says; visibility 0.98, leakage 1e-3");
    let mut rates = vec![];
    for (preparations, measurements, outcomes) in GEOMETRIES {
        let (scenario, behaviour) = case(preparations, measurements, outcomes);
        for level in Level::ALL {
            for cells in [None, Some(8)] {
                let groups = cells.unwrap_or(outcomes);
                let estimated = estimate(level, &scenario, groups);
                if estimated > MOST || (cells.is_some() && outcomes > 2) {
                    continue;
                }
                let before = thread_time();
                if !bounded(&scenario, &behaviour, level, cells) {
                    section.note(format!("X = {preparations}, Y = {measurements}, B = {outcomes}, {level:?}: no bound"));
                    continue;
                }
                let seconds = (thread_time() - before).as_secs_f64();
                let name = format!("X = {preparations}, Y = {measurements}, B = {outcomes}, {level:?}, {groups} groups");
                eprintln!("  {name}: {seconds:.3} s, model {:.3} s", estimated);
                section.figure(format!("{name}: measured"), seconds, "s");
                section.figure(format!("{name}: model"), estimated, "s");
                if seconds.max(estimated) >= LEAST {
                    rates.push(seconds / estimated);
                }
            }
        }
    }
    rates.sort_by(f64::total_cmp);
    let (Some(least), Some(most)) = (rates.first(), rates.last()) else { return section };
    let fitted = (least * most).sqrt();
    section.note(format!(
        "factors between the two for the {} cases above {LEAST} s; the fit makes the worst one as small as it can be",
        rates.len()
    ));
    section.figure("the model's constants would have to be multiplied by", fitted, "");
    section.figure("worst factor with that", most / fitted, "times");
    section.below("worst factor as the model is", most.max(1.0 / least), FACTOR, "times");
    section.figure("the budget of `auto`", AUTO_BUDGET, "s");
    section
}

/// States around a great circle of the qubit, and measurements between them.
fn case(preparations: usize, measurements: usize, outcomes: usize) -> (Scenario, Table<f64>) {
    let turn = std::f64::consts::TAU;
    let angle = |x: usize, y: usize, b: usize| {
        turn * (x as f64 / preparations as f64 - y as f64 / (2 * measurements) as f64 - b as f64 / outcomes as f64)
    };
    let p = |x: usize, y: usize, b: usize| (1.0 + 0.98 * angle(x, y, b).cos()) / outcomes as f64;
    let row = |x: usize, y: usize| (0..outcomes).map(|b| p(x, y, b)).collect();
    let behaviour = (0..preparations).map(|x| (0..measurements).map(|y| row(x, y)).collect()).collect();
    let document = json!({
        "preparations": preparations, "measurements": measurements, "outcomes": outcomes,
        "carrier_dimension": 2, "leakage": 0.001, "targets": [[0, 0]],
    });
    (serde_json::from_value(document).expect("a scenario"), behaviour)
}

/// One solve: of the guessing probability, or of the power entropy with so many cells.
fn bounded(scenario: &Scenario, behaviour: &Table<f64>, level: Level, cells: Option<usize>) -> bool {
    let (target, place) = (scenario.targets()[0], Place::Behaviour(behaviour));
    match cells {
        None => match guessing_probability(scenario, target, place, level, Limits::default()) {
            Answer::Bounded(found) => found.level == level,
            Answer::Outside(_) | Answer::Unverified => false,
        },
        Some(cells) => {
            let vertex = |i: usize| DVector::from_vec(vec![i as f64 / cells as f64, 1.0 - i as f64 / cells as f64]);
            let cuts = cover(2, &(1..cells).map(vertex).collect::<Vec<_>>());
            power_entropy_in(scenario, target, place, 1 << 10, cuts, level, Limits::default()).is_some()
        }
    }
}
