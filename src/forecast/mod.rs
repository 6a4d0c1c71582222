//! What would be certified, over leakage, visibility or rounds, and where certification ends.
//!
//! A forecast takes a behaviour that is expected and draws up, for every point of a grid, the account that a batch with exactly the
//! expected counts would get; for rounds with memory, the one of a commitment. Every figure follows from witnesses that passed the
//! exact check. Neighbouring points share them (`shared.rs` says by which rule and at what cost).
//!
//! A forecast is about data that nobody has seen. It is not recorded, and nothing may be released on it.

mod bracket;
mod curve;
#[cfg(feature = "service")]
mod figure;
#[cfg(feature = "service")]
mod picture;
mod request;
mod shared;
mod sweep;
#[cfg(feature = "service")]
mod table;
mod threshold;

use serde::{Deserialize, Serialize};

pub use self::{
    bracket::PointBracket,
    curve::{Kind, Point, Progress},
    request::{ForecastDocument, ForecastRequest, ThresholdsDocument},
    sweep::{Grid, MAX_POINTS, Spacing, Sweep, Swept},
    threshold::{RoundsNeeded, Threshold},
};
use self::{
    curve::{Effort, Forecaster},
    request::Setup,
};
#[cfg(feature = "service")]
pub use self::{
    picture::{PictureError, picture},
    table::{csv, table},
};
use crate::{
    relaxation::level::Level,
    request::{Failure, RoundModel},
    scenario::Scenario,
};

/// What a forecast says of itself.
const NOTE: &str = "A forecast: what would be certified if a batch showed exactly the expected behaviour. Nothing was measured and nothing is recorded; \
                    no bits may be released on it. It rests on the same assumptions as a certification under the same scenario and round model.";
/// How points share witnesses, in words.
const RULE: &str = "A checked witness bounds every behaviour and every leakage of its geometry, so a point may use those that were solved for other points. The \
                    optimum is concave along the grid, so that the chord through solved points bounds it from the other side; a point is solved on \
                    its own where the two differ by more than the allowed loss. A point's loss is what a solve of its own could gain at most, up to \
                    the accuracy of the solver, some 1e-6.";

/// One account over the grid.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Curve {
    pub kind: Kind,
    pub points: Vec<Point>,
}

/// How much work was saved, and what that cost.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Sharing {
    /// Points of all curves.
    pub points: usize,
    /// Points at which a programme was solved.
    pub solved: usize,
    /// Points that share the witnesses of others.
    pub shared: usize,
    /// Solves for the curves, and for thresholds and numbers of rounds.
    pub solves: usize,
    pub search_solves: usize,
    /// What sharing was allowed to cost, and the most that it may have cost anywhere, in bits per target round.
    pub allowed_loss: f64,
    pub worst_loss: f64,
    pub rule: String,
}

/// A forecast. Shapes: `setting_distribution` is `[x][y]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Forecast {
    pub note: String,
    #[cfg_attr(feature = "service", schema(value_type = crate::scenario::ScenarioDocument))]
    pub scenario: Scenario,
    pub setting_distribution: Vec<Vec<f64>>,
    pub failure: Failure,
    pub level: Level,
    pub swept: Swept,
    pub spacing: Spacing,
    pub curves: Vec<Curve>,
    pub thresholds: Vec<Threshold>,
    pub rounds_needed: Vec<RoundsNeeded>,
    pub sharing: Sharing,
    pub version: String,
}

/// Computes a forecast. `told` hears of progress, whenever something was solved.
pub fn forecast(request: &ForecastRequest, mut told: impl FnMut(Progress)) -> Forecast {
    let mut forecaster = Forecaster::new(request);
    let swept = request.sweep.swept();
    let setups: Vec<Setup> = request.values.iter().map(|value| request.setup(swept, *value)).collect();
    let mut curves = Vec::new();
    for kind in &request.kinds {
        let mut points = forecaster.points(*kind, &setups, Effort::Within(request.loss), &mut told);
        if kind.rounds == RoundModel::PlugIn {
            forecaster.add_brackets(*kind, &setups, &mut points, &mut told);
        }
        curves.push(Curve { kind: *kind, points });
    }
    let solves = forecaster.solves();
    let (mut thresholds, mut rounds_needed) = (Vec::new(), Vec::new());
    for kind in &request.kinds {
        for (quantity, tolerance) in [(Swept::Leakage, request.thresholds.leakage), (Swept::Visibility, request.thresholds.visibility)] {
            if let Some(tolerance) = tolerance {
                thresholds.push(forecaster.threshold(request, *kind, quantity, tolerance, &mut told));
            }
        }
        if let Some(wanted) = request.wanted_bits.filter(|_| kind.rounds != RoundModel::PlugIn) {
            rounds_needed.push(forecaster.rounds_needed(request, *kind, wanted, &mut told));
        }
    }
    let points: Vec<&Point> = curves.iter().flat_map(|curve| &curve.points).collect();
    let solved = points.iter().filter(|point| point.solved).count();
    let sharing = Sharing {
        points: points.len(),
        solved,
        shared: points.len() - solved,
        solves,
        search_solves: forecaster.solves() - solves,
        allowed_loss: request.loss,
        worst_loss: points.iter().map(|point| point.loss).fold(0.0, f64::max),
        rule: RULE.to_owned(),
    };
    Forecast {
        note: NOTE.to_owned(),
        scenario: request.scenario.clone(),
        setting_distribution: request.distribution.clone(),
        failure: request.failure,
        level: request.start,
        swept,
        spacing: request.sweep.spacing(),
        curves,
        thresholds,
        rounds_needed,
        sharing,
        version: concat!("bitassay ", env!("CARGO_PKG_VERSION")).to_owned(),
    }
}
