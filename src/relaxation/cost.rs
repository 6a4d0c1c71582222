//! What a solve costs, estimated from sizes alone, and the choice of a level within a budget.

use super::{
    level::{Level, LevelChoice},
    word::Algebra,
};
use crate::scenario::Scenario;

/// The level to start at.
pub fn choose(choice: LevelChoice, scenario: &Scenario) -> Level {
    match choice {
        LevelChoice::Lean => Level::Lean,
        LevelChoice::Standard => Level::Standard,
        LevelChoice::Sharp => Level::Sharp,
        LevelChoice::Auto => Level::ALL.into_iter().rev().find(|level| estimate(*level, scenario) <= 1e12).unwrap_or(Level::Lean),
    }
}

/// Work of one solve of a target's guessing probability, in arbitrary units.
pub fn estimate(level: Level, scenario: &Scenario) -> f64 {
    let exact: Vec<bool> = scenario.leakage().iter().map(|leakage| *leakage == 0.0).collect();
    let algebra = Algebra::new(scenario.geometry(), &exact);
    let side = level.monomials(&algebra).len() as f64;
    scenario.geometry().outcomes as f64 * side.powi(6)
}
