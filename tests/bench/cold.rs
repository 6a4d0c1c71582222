//! Bounds that have to be solved for, against the same bounds from a general modelling layer with general solvers.

use std::{hint::black_box, time::Instant};

use bitassay::{
    bound::{Answer, guessing_probability},
    counts::Table,
    relaxation::{
        level::Level,
        moments::Moments,
        question::{Knowledge, Question, Slack, pose},
        word::Algebra,
    },
    request::EntropyChoice,
    scenario::Scenario,
    solver::{Limits, solve_structured},
    witness::{check::Place, rounding, witness::Claim},
};
use serde_json::{Value, json};

use crate::{general::General, machine::thread_time, report::Section, warm};

const VISIBILITY: f64 = 0.99;
/// Ours are timed until there is this much to take the mean of, at most so often.
const SECONDS: f64 = 1.0;
const MOST_OFTEN: u32 = 20;
/// After so long by the clock a general solver is stopped.
const PATIENCE: f64 = 60.0;
/// By how much a bound may exceed the general route's: what rounding to an exact witness may cost.
const LOOSER: f64 = 2e-6;

/// A behaviour and a level to bound it at.
struct Case {
    name: &'static str,
    dimension: u32,
    leakage: f64,
    level: Level,
    behaviour: Table<f64>,
    /// Whether the general route is asked as well.
    compared: bool,
}

/// The n→1 code: preparation x encodes the bits of x, measurement y asks for bit y.
pub fn code(bits: usize) -> Table<f64> {
    let right = 0.5 * (1.0 + VISIBILITY / (bits as f64).sqrt());
    let row = |x: usize, y: usize| if x >> y & 1 == 0 { vec![right, 1.0 - right] } else { vec![1.0 - right, right] };
    (0..1usize << bits).map(|x| (0..bits).map(|y| row(x, y)).collect()).collect()
}

/// The 2→1 code and a fifth preparation, which the first measurement recognises.
fn five() -> Table<f64> {
    let right = 0.5 * (1.0 + VISIBILITY);
    let mut table = code(2);
    table.push(vec![vec![right, 1.0 - right], vec![0.5, 0.5]]);
    table
}

fn cases() -> Vec<Case> {
    let two_states = vec![vec![vec![0.79, 0.21]], vec![vec![0.21, 0.79]]];
    let case = |name, dimension, leakage, level, behaviour| Case { name, dimension, leakage, level, behaviour, compared: true };
    vec![
        case("two states", 1, 0.1, Level::Lean, two_states.clone()),
        case("two states", 1, 0.1, Level::Sharp, two_states),
        Case { compared: false, ..case("2→1 code", 2, 0.001, Level::Sparse, code(2)) },
        case("2→1 code", 2, 0.001, Level::Lean, code(2)),
        case("2→1 code", 2, 0.001, Level::Standard, code(2)),
        case("2→1 code", 2, 0.001, Level::Sharp, code(2)),
        case("X = 5, Y = 2", 2, 0.001, Level::Lean, five()),
        case("X = 5, Y = 2", 2, 0.001, Level::Standard, five()),
        case("3→1 code", 2, 0.001, Level::Lean, code(3)),
        Case { compared: false, ..case("3→1 code", 2, 0.001, Level::Standard, code(3)) },
    ]
}

/// What one bound took, in seconds of processor time.
#[derive(Default)]
struct Taken {
    build: f64,
    solve: f64,
    check: f64,
    whole: f64,
}

pub fn run() -> Section {
    let mut section = Section::default();
    section.note("one bound on the guessing probability of (0, 0), behaviour given exactly, leakage on average: seconds of processor time");
    section.note(format!(
        "ours: from the scenario to a bound that was checked exactly, on one thread, mean of up to {MOST_OFTEN}; of that, building the \
         programme, solving it, and rounding and checking"
    ));
    section.note(
        "general: cvxpy on the unsplit moment matrix of the same products, in a warm Python process, one solve, processor time or the clock's, \
         whichever is less; imports and the algebra of words are not counted, nor is anything checked exactly",
    );
    section.note("sparse is compared with nothing: it is no single matrix; nor is the 3→1 code at standard, a matrix of side 135");
    let mut general = match General::start() {
        Ok(general) => Some(general),
        Err(why) => {
            section.note(format!("the general route is missing: {why}"));
            None
        }
    };
    let warm = 1e-6 * warm::certification(EntropyChoice::Guessing, 10);
    section.figure("warm: certification from a pool of 10 witnesses", warm, "s");
    for case in cases() {
        let name = format!("{}, {}", case.name, word(case.level));
        let scenario = case.scenario();
        let (taken, bound) = case.time(&scenario);
        eprintln!("  {name}: {:.4} s", taken.whole);
        section.figure(format!("{name}: ours"), taken.whole, "s");
        section.figure(format!("{name}: of that building"), taken.build, "s");
        section.figure(format!("{name}: of that solving"), taken.solve, "s");
        section.figure(format!("{name}: of that checking"), taken.check, "s");
        let Some(general) = general.as_mut().filter(|_| case.compared) else { continue };
        let required = (case.name, case.level) == ("2→1 code", Level::Standard);
        let (mut least, mut value) = (f64::INFINITY, None);
        for solver in ["CLARABEL", "SCS"] {
            match general.solve(&case.document(&scenario), solver, PATIENCE) {
                Ok(solved) => {
                    eprintln!("  {name}: {:.4} s by {solver}, {}", solved.seconds, solved.status);
                    let ended = if solved.ended { "" } else { ", stopped" };
                    section.figure(format!("{name}: {solver}, side {}{ended}", solved.side), solved.seconds, "s");
                    section.figure(format!("{name}: {solver} against ours{ended}"), solved.seconds / taken.whole, "times");
                    if solved.ended {
                        least = least.min(solved.seconds);
                    }
                    if let Some(found) = solved.value.filter(|_| solved.ended) {
                        section.figure(format!("{name}: our bound − {solver}'s"), bound - found, "");
                        // Clarabel's is the more accurate one.
                        value = value.or(Some(found));
                    }
                }
                Err(why) => section.note(format!("{name}: {solver} has no answer: {why}")),
            }
        }
        if let Some(value) = value {
            section.below(format!("{name}: looser by"), bound - value, LOOSER, "");
        }
        if required && least.is_finite() {
            section.at_least(format!("{name}: the faster of the two against ours"), least / taken.whole, 20.0, "times");
            section.at_least(format!("{name}: the faster of the two against warm"), least / warm, 1e4, "times");
        }
    }
    section
}

fn word(level: Level) -> String {
    serde_json::to_value(level).ok().and_then(|value| value.as_str().map(str::to_owned)).unwrap_or_default()
}

impl Case {
    fn scenario(&self) -> Scenario {
        let first = &self.behaviour[0];
        let document = json!({
            "preparations": self.behaviour.len(), "measurements": first.len(), "outcomes": first[0].len(),
            "carrier_dimension": self.dimension, "leakage": self.leakage, "targets": [[0, 0]],
        });
        serde_json::from_value(document).expect("a scenario")
    }

    /// As the general route wants it.
    fn document(&self, scenario: &Scenario) -> Value {
        json!({
            "dimension": self.dimension, "leakage": scenario.leakage(), "reading": scenario.leakage_holds(), "level": self.level,
            "target": [0, 0], "behaviour": self.behaviour,
        })
    }

    /// Means, and the bound.
    fn time(&self, scenario: &Scenario) -> (Taken, f64) {
        let (mut sum, mut bound, mut times) = (Taken::default(), f64::NAN, 0);
        let begun = Instant::now();
        while times == 0 || times < MOST_OFTEN && begun.elapsed().as_secs_f64() < SECONDS {
            let before = thread_time();
            bound = self.whole(scenario);
            sum.whole += (thread_time() - before).as_secs_f64();
            self.parts(scenario, &mut sum);
            times += 1;
        }
        let mean = |seconds: f64| seconds / f64::from(times);
        (Taken { build: mean(sum.build), solve: mean(sum.solve), check: mean(sum.check), whole: mean(sum.whole) }, bound)
    }

    fn whole(&self, scenario: &Scenario) -> f64 {
        let answer =
            guessing_probability(scenario, scenario.targets()[0], Place::Behaviour(&self.behaviour), self.level, Limits::default());
        match answer {
            Answer::Bounded(found) if found.level == self.level => found.bound.rounded_up(),
            other => panic!("{} at {:?}: {other:?}", self.name, self.level),
        }
    }

    /// The same, one step after the other.
    fn parts(&self, scenario: &Scenario, into: &mut Taken) {
        let question = Question {
            claim: Claim::Guess { target: scenario.targets()[0] },
            knowledge: Knowledge::Exactly(&self.behaviour),
            leakage: scenario.leakage(),
            leakage_holds: scenario.leakage_holds(),
            slack: Slack::None,
        };
        let start = thread_time();
        let algebra = Algebra::new(scenario.geometry(), &vec![false; self.behaviour.len()]);
        let mut moments = Moments::new(algebra, self.level).expect("moments");
        let posed = pose(&mut moments, &question).expect("a programme");
        let build = thread_time();
        let candidate = solve_structured(&posed.program, Limits::default()).expect("a candidate");
        let solve = thread_time();
        let witness = rounding::witness(&moments, &question, &posed, &candidate).expect("a witness");
        black_box(witness.bound(Place::Behaviour(&self.behaviour), question.leakage, question.leakage_holds)).expect("a bound");
        let check = thread_time();
        into.build += (build - start).as_secs_f64();
        into.solve += (solve - build).as_secs_f64();
        into.check += (check - solve).as_secs_f64();
    }
}
