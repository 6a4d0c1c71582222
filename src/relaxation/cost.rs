//! What a solve costs, estimated from sizes alone, and the choice of a level within a budget.
//!
//! With `s = Σ n(n+1)/2` over the blocks, of side n, a solve takes about `groups × s² × (10⁻⁷ + 10⁻¹¹ s)` seconds on one core of a machine of 2025. A
//! group has fewer moments than s; up to some thousand of them the work grows with their square, and the factorisation of as large a matrix
//! takes over after that. `cargo bench --bench bench -- cost` measures it: from 0.04 to 3 s, over two to 32 preparations and all levels, the
//! estimate was wrong by a factor of two at most.

use super::{
    level::{Level, LevelChoice},
    word::Algebra,
};
use crate::{fault::Fault, scenario::Scenario};

/// `auto` takes the sharpest level within this, in seconds.
pub const AUTO_BUDGET: f64 = 1.0;
/// Nothing above this is solved at all, in seconds: more than that, and many groups would need more memory than the solver takes.
pub const LIMIT: f64 = 11.0;

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
    let detail = format!("the scenario is too large for {what}: a solve is estimated to take {cost:.0} s, the limit is {LIMIT} s");
    Err(Fault::new(pointer, detail))
}

/// Estimated seconds of one solve.
pub fn estimate(level: Level, scenario: &Scenario, groups: usize) -> f64 {
    let exact: Vec<bool> = scenario.leakage().iter().map(|leakage| *leakage == 0.0).collect();
    let algebra = Algebra::new(scenario.geometry(), &exact);
    let bases = level.bases(&algebra);
    let triangle = |side: f64| side * (side + 1.0) / 2.0;
    let size: f64 = bases.iter().map(|basis| triangle(basis.monomials.len() as f64)).sum();
    groups as f64 * size.powi(2) * (1e-7 + 1e-11 * size)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{
        relaxation::cells::COVER_CELLS,
        scenario::{LeakageDocument, LeakageReading, ScenarioDocument, Setting},
    };

    fn auto(preparations: usize, measurements: usize, groups: usize) -> Result<Level, Fault> {
        let document = ScenarioDocument {
            preparations,
            measurements,
            outcomes: 2,
            carrier_dimension: 2,
            leakage: LeakageDocument::Uniform(1e-3),
            leakage_holds: LeakageReading::OnAverage,
            targets: vec![Setting { x: 0, y: 0 }],
        };
        choose(LevelChoice::Auto, &Scenario::try_from(document).unwrap(), groups)
    }

    #[test]
    fn what_auto_takes() {
        assert_eq!(auto(2, 1, 2), Ok(Level::Keen));
        assert_eq!(auto(4, 2, 2), Ok(Level::Sharp));
        assert_eq!(auto(4, 2, COVER_CELLS), Ok(Level::Standard));
        assert_eq!(auto(8, 3, 2), Ok(Level::Lean));
        assert_eq!(auto(32, 2, 2), Ok(Level::Sparse));
        assert_eq!(auto(32, 8, COVER_CELLS).unwrap_err().pointer, "/scenario");
    }
}
