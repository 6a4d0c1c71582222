//! Linear scores `S = Σ_{xyb} c_{xyb} p(b|x,y)` of a behaviour, of which a least value is stated.
//!
//! Some experiments report a score alone, such as the mean success probability of a random access code. It is less than the whole
//! behaviour, and certifies less. An affine bound with multipliers ν holds for every behaviour, and for every `λ ≥ 0`
//!
//! ```text
//! ν·p  ≤  ν·p + λ (S − s)  ≤  Σ_{xy} max_b (ν_{xyb} + λ c_{xyb}) − λ s        for all p with S ≥ s,
//! ```
//!
//! so a bound over all behaviours that reach a score needs no witness of another kind, only a good λ.

use serde::{Deserialize, Serialize};

use crate::{
    counts::{Table, fits},
    fault::Fault,
    scenario::{Geometry, Setting},
};

/// Most scores that may be stated of one behaviour.
pub const MAX_SCORES: usize = 16;
/// Largest coefficient in size.
pub const MAX_COEFFICIENT: i64 = 1 << 20;

/// A score and its least value. Integer coefficients `[x][y][b]`: a mean over settings is stated as a sum, `at_least` accordingly.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Score {
    #[cfg_attr(feature = "service", schema(value_type = Vec<Vec<Vec<i64>>>))]
    pub coefficients: Table<i64>,
    /// The score is at least this.
    pub at_least: f64,
}

impl Score {
    /// Coefficients of the outcomes at one setting; none where the score has no such setting.
    pub fn at(&self, setting: Setting) -> &[i64] {
        self.coefficients.get(setting.x).and_then(|table| table.get(setting.y)).map_or(&[], Vec::as_slice)
    }

    /// # Errors
    /// A shape that does not fit the geometry, a coefficient above [`MAX_COEFFICIENT`] in size, or a value that no behaviour reaches because
    /// it is above the sum of the largest coefficients; pointers are relative to the score.
    pub fn check(&self, geometry: Geometry) -> Result<(), Fault> {
        if !fits(&self.coefficients, geometry) {
            return Err(Fault::new("/coefficients", "needs one integer per preparation, measurement and outcome, [x][y][b]"));
        }
        if self.coefficients.iter().flatten().flatten().any(|c| c.unsigned_abs() > MAX_COEFFICIENT.unsigned_abs()) {
            return Err(Fault::new("/coefficients", format!("a coefficient is at most {MAX_COEFFICIENT} in size")));
        }
        let most: i64 = self.coefficients.iter().flatten().filter_map(|row| row.iter().max()).sum();
        if !self.at_least.is_finite() || self.at_least > most as f64 {
            return Err(Fault::new("/at_least", format!("no behaviour reaches a score above {most}, stated is {}", self.at_least)));
        }
        Ok(())
    }
}

/// Checks a list of scores.
///
/// # Errors
/// The first score that is wrong, none at all, or more than [`MAX_SCORES`]; pointers are relative to the list.
pub fn check_scores(scores: &[Score], geometry: Geometry) -> Result<(), Fault> {
    if scores.is_empty() || scores.len() > MAX_SCORES {
        return Err(Fault::new("", format!("from 1 to {MAX_SCORES} scores may be stated, not {}", scores.len())));
    }
    scores.iter().enumerate().try_for_each(|(i, score)| score.check(geometry).map_err(|fault| fault.under(&format!("/{i}"))))
}
