//! Generated behaviours, several at a time.

use std::{
    collections::BTreeSet,
    sync::{
        Mutex, PoisonError,
        atomic::{AtomicUsize, Ordering},
    },
    time::Instant,
};

use bitassay::{
    attack::{
        Effort,
        sandwich::{Case, Outcome, Summary, case, outcome},
    },
    relaxation::{
        cost::{choose, estimate},
        level::LevelChoice,
    },
    scenario::{Geometry, LeakageReading},
};
use clap::Args;

#[derive(Args)]
pub struct Sandwich {
    /// Generated behaviours; each has a number, and is the same for ever.
    #[arg(long, default_value_t = 240)]
    cases: u64,
    /// Number of the first of them.
    #[arg(long, default_value_t = 0)]
    first: u64,
    /// Those whose bound at the sharpest level is estimated to take more seconds than this are passed over.
    #[arg(long, default_value_t = f64::INFINITY)]
    seconds: f64,
    /// Cases at a time.
    #[arg(long, default_value_t = 2)]
    threads: usize,
}

impl Sandwich {
    /// Runs the cases. What they are like is put into words.
    pub fn run(&self) -> (Summary, String) {
        let numbers = self.first..self.first + self.cases;
        let cases: Vec<Case> = numbers.filter_map(case).filter(|case| seconds(case) <= self.seconds).collect();
        let (next, done) = (AtomicUsize::new(0), Mutex::new(Vec::new()));
        std::thread::scope(|scope| {
            for _ in 0..self.threads.max(1) {
                scope.spawn(|| {
                    while let Some((number, case)) = Some(next.fetch_add(1, Ordering::Relaxed)).and_then(|n| Some((n, cases.get(n)?))) {
                        let start = Instant::now();
                        let outcome = outcome(case, Effort::default());
                        let gaps: Vec<String> =
                            outcome.bounds.iter().map(|bounded| format!("{:?} {:.1e}", bounded.level, bounded.gap)).collect();
                        let seconds = start.elapsed().as_secs_f64();
                        println!("{}: attack {:?}, gaps {} ({seconds:.1} s)", outcome.name, outcome.attack, gaps.join(", "));
                        done.lock().unwrap_or_else(PoisonError::into_inner).push((number, outcome));
                    }
                });
            }
        });
        let mut outcomes = done.into_inner().unwrap_or_else(PoisonError::into_inner);
        outcomes.sort_by_key(|(number, _)| *number);
        let outcomes: Vec<Outcome> = outcomes.into_iter().map(|(_, outcome)| outcome).collect();
        let mut summary = Summary::of(&outcomes);
        // What shows nothing is no evidence.
        for (level, _) in summary.gaps.iter().filter(|(_, gaps)| gaps.is_empty()) {
            summary.violations.push(format!("no behaviour was bounded at {level:?}"));
        }
        if !outcomes.iter().any(|outcome| outcome.attack.is_some_and(|attack| attack < 0.99)) {
            summary.violations.push("every behaviour is one that an adversary guesses anyway".to_owned());
        }
        (summary, spread(&cases))
    }
}

/// Estimated seconds of a solve at the sharpest level that is tried.
fn seconds(case: &Case) -> f64 {
    let groups = case.scenario.geometry().outcomes;
    choose(LevelChoice::Auto, &case.scenario, groups).map_or(f64::INFINITY, |level| estimate(level, &case.scenario, groups))
}

/// The sizes that occur.
fn spread(cases: &[Case]) -> String {
    let sizes = |of: fn(Geometry) -> usize| {
        let sizes: BTreeSet<usize> = cases.iter().map(|case| of(case.scenario.geometry())).collect();
        sizes.iter().map(usize::to_string).collect::<Vec<_>>().join(" ")
    };
    let leaks: BTreeSet<String> =
        cases.iter().map(|case| format!("{}", case.scenario.leakage().iter().fold(0.0, |most: f64, epsilon| most.max(*epsilon)))).collect();
    let on_average = cases.iter().filter(|case| case.scenario.leakage_holds() == LeakageReading::OnAverage).count();
    format!(
        "X {}; Y {}; B {}; d {}; leakage {}; {on_average} on average, {} every emission",
        sizes(|g| g.preparations),
        sizes(|g| g.measurements),
        sizes(|g| g.outcomes),
        sizes(|g| g.carrier_dimension as usize),
        leaks.into_iter().collect::<Vec<_>>().join(" "),
        cases.len() - on_average
    )
}
