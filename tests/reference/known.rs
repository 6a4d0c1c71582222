//! Explicit attacks, and the bounds above them, on behaviours whose guessing probability is known from elsewhere.

use bitassay::{
    attack::{Attack, Effort, Hints, attack, objective::Objective},
    counts::Table,
    relaxation::level::Level,
    scenario::{LeakageReading, Scenario},
    witness::check::Place,
};

use crate::codes::{bound, code, every_emission, scenario};

/// A behaviour with its known value.
pub struct Known {
    pub name: String,
    scenario: Scenario,
    behaviour: Table<f64>,
    level: Level,
    /// What an adversary is known to reach.
    value: f64,
    /// To what the value is known.
    accuracy: f64,
    /// The most that the bound may be above the attack, and the attack above the value.
    gap: f64,
}

/// The noisy 2→1 code on a qubit: an independent column generation (another language, another linear-programming library) found these attacks.
/// Two states with bounded vacuum (d = 1) and one two-outcome measurement: on average an independent implementation of the relaxation and
/// explicit strategies agree to 1e-6; for every emission the values are those of the relaxation alone.
pub fn known() -> Vec<Known> {
    let mut known = Vec::new();
    for (leakage, level, value, gap) in [
        (0.0, Level::Sharp, 0.8818572, 1e-5),
        (1e-3, Level::Sharp, 0.8917125, 1e-4),
        (1e-2, Level::Sharp, 0.9440455, 1e-3),
        // The level made for leakage leaves nothing between bound and attack.
        (1e-2, Level::Keen, 0.9440455, 1e-5),
    ] {
        let name = format!("2→1 code, visibility 0.99, leakage {leakage}, {level:?}");
        known.push(Known { name, scenario: scenario(4, 2, 2, 2, leakage), behaviour: code(2, 0.99), level, value, accuracy: 1e-6, gap });
    }
    let mut two_states = |reading: LeakageReading, leakage: f64, success: f64, value: f64| {
        let scenario = scenario(2, 1, 2, 1, leakage);
        let (scenario, words) = match reading {
            LeakageReading::OnAverage => (scenario, "on average"),
            LeakageReading::EveryEmission => (every_emission(scenario), "every emission"),
        };
        let name = format!("two states, success {success}, leakage {leakage} {words}");
        let behaviour = vec![vec![vec![success, 1.0 - success]], vec![vec![1.0 - success, success]]];
        known.push(Known { name, scenario, behaviour, level: Level::Sharp, value, accuracy: 1e-5, gap: 1e-5 });
    };
    for (leakage, success, value) in
        [(0.01, 0.597499, 0.645016), (0.01, 0.589499, 0.753777), (0.1, 0.798, 0.809762), (0.1, 0.79, 0.844484), (0.1, 0.75, 0.948554)]
    {
        two_states(LeakageReading::OnAverage, leakage, success, value);
    }
    for (leakage, success, value) in [(0.1, 0.79, 0.822481), (0.1, 0.75, 0.896723), (0.01, 0.5895, 0.736075)] {
        two_states(LeakageReading::EveryEmission, leakage, success, value);
    }
    known
}

/// What came out of a known behaviour.
pub struct Outcome {
    pub attack: f64,
    pub bound: f64,
    pub rounding_cost: f64,
    /// What must not happen.
    pub violations: Vec<String>,
}

impl Known {
    /// The bound at the level and the attack that its witness hints at.
    pub fn outcome(&self) -> Outcome {
        let Self { name, scenario, behaviour, level, value, accuracy, gap } = self;
        let found = bound(scenario, behaviour, *level);
        let hints = Hints { witness: Some(&found.witness), known: &[] };
        let target = scenario.targets()[0];
        let attack = attack(scenario, target, Place::Behaviour(behaviour), Objective::Guess, hints, Effort::default()).unwrap();
        let (reached, bound) = (attack.guessing_probability(), found.bound.rounded_up());
        let Attack { attained, residual, .. } = attack;
        println!("{name}: attack {reached:.9}, bound {bound:.9}, residual {residual:.1e}");
        let leaked = match scenario.leakage_holds() {
            LeakageReading::OnAverage => &attained.mean_leakage,
            LeakageReading::EveryEmission => &attained.largest_leakage,
        };
        let faults = [
            (residual >= 1e-10, "misses the behaviour"),
            (leaked.iter().zip(scenario.leakage()).any(|(found, epsilon)| found > epsilon), "leaks more than is declared"),
            // The behaviour is met within the residual only.
            (reached > bound + 1e-9, "is above the bound"),
            (bound - reached >= *gap, "is far below the bound"),
            (reached < value - accuracy, "does not reach the known value"),
            (reached > value + gap, "is above the known value"),
        ];
        let violations =
            faults.into_iter().filter(|(wrong, _)| *wrong).map(|(_, what)| format!("{name}: the attack {reached} {what} ({bound})"));
        Outcome { attack: reached, bound, rounding_cost: found.witness.rounding_cost(), violations: violations.collect() }
    }
}

#[test]
fn known_values_are_reached_and_not_undercut() {
    for known in known() {
        let Outcome { attack, bound, rounding_cost, violations } = known.outcome();
        assert_eq!(violations, Vec::<String>::new());
        assert!(bound - attack < known.gap && rounding_cost < 2e-6, "{}", known.name);
    }
}
