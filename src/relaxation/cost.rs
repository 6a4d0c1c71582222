//! What a solve costs, estimated from sizes alone, and the choice of a level within a budget.
//!
//! The unit is a step of the factorisation that dominates a solve: groups × (Σ over blocks of n(n+1)/2)³ for blocks of side n. On a
//! machine of 2025 a solve takes about one second for each 10⁹.

use super::{
    level::{Level, LevelChoice},
    word::Algebra,
};
use crate::{fault::Fault, scenario::Scenario};

/// `auto` takes the sharpest level within this.
pub const AUTO_BUDGET: f64 = 4e9;
/// Nothing above this is solved at all.
pub const LIMIT: f64 = 2e11;

/// The level to start at, for a question with this many groups.
///
/// # Errors
/// The figure, if the scenario is too large for the level that is asked for (pointer `/level`), or for every level (`/scenario`).
pub fn choose(choice: LevelChoice, scenario: &Scenario, groups: usize) -> Result<Level, Fault> {
    let (level, pointer, what) = match choice {
        LevelChoice::Sparse => (Level::Sparse, "/level", "this level"),
        LevelChoice::Lean => (Level::Lean, "/level", "this level"),
        LevelChoice::Standard => (Level::Standard, "/level", "this level"),
        LevelChoice::Sharp => (Level::Sharp, "/level", "this level"),
        LevelChoice::Keen => (Level::Keen, "/level", "this level"),
        LevelChoice::Auto => {
            let affordable = |level: &Level| estimate(*level, scenario, groups) <= AUTO_BUDGET;
            (Level::ALL.into_iter().rev().find(affordable).unwrap_or(Level::Sparse), "/scenario", "every level")
        }
    };
    let cost = estimate(level, scenario, groups);
    if cost <= LIMIT {
        return Ok(level);
    }
    let detail = format!("the scenario is too large for {what}: a solve is estimated at {cost:.1e} steps, the limit is {LIMIT:.0e}");
    Err(Fault::new(pointer, detail))
}

/// Estimated steps of one solve.
pub fn estimate(level: Level, scenario: &Scenario, groups: usize) -> f64 {
    let exact: Vec<bool> = scenario.leakage().iter().map(|leakage| *leakage == 0.0).collect();
    let algebra = Algebra::new(scenario.geometry(), &exact);
    let bases = level.bases(&algebra);
    let triangle = |side: f64| side * (side + 1.0) / 2.0;
    let size: f64 = bases.iter().map(|basis| triangle(basis.monomials.len() as f64)).sum();
    groups as f64 * size.powi(3)
}
