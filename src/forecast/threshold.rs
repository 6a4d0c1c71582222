//! Where certification ends: the largest leakage, the smallest visibility, the rounds needed.
//!
//! Searches halve a bracket. The end that is said to certify does so by checked witnesses, which stand beside it. The other end is one at which
//! this relaxation, at this level, does not certify: no proof that nothing could.

use serde::{Deserialize, Serialize};

use super::{
    curve::{Effort, Forecaster, Kind, Point, Progress},
    request::ForecastRequest,
    sweep::Swept,
};
use crate::{
    certificate::{Reason, Verdict},
    counts::MAX_ROUNDS,
    request::RoundModel,
};

/// The search for the largest leakage begins here; what does not certify with less is not worth a forecast.
const LEAST_LEAKAGE: f64 = 1e-7;
/// Rounds that are needed are bracketed to this share.
const ROUNDS_TOLERANCE: f64 = 0.01;

/// A threshold of one curve, bracketed.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Threshold {
    pub quantity: Swept,
    pub kind: Kind,
    /// Here there are bits, by the witnesses; `null` if nowhere.
    pub certifies_at: Option<f64>,
    /// `sha256:` digests of the checked witnesses.
    pub witnesses: Vec<String>,
    /// Here this relaxation at this level certifies nothing, which proves nothing about other methods; `null` if it certifies everywhere.
    pub not_certified_at: Option<f64>,
}

/// How many rounds one curve needs for a wanted number of bits, bracketed.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct RoundsNeeded {
    pub kind: Kind,
    pub wanted_bits: u64,
    /// A batch of this many rounds, with exactly the expected counts, is certified at least the wanted bits; `null` if no batch is.
    pub enough: Option<u64>,
    /// `sha256:` digests of the checked witnesses.
    pub witnesses: Vec<String>,
    /// This many are not enough, up to what sharing witnesses may cost.
    pub not_enough: Option<u64>,
}

/// What a point says to a search for a threshold.
enum Side {
    Certifies(Vec<String>),
    Nothing,
    /// More leakage or less visibility would explain the numbers.
    Outside,
}

impl Side {
    fn of(point: Point) -> Self {
        match (point.verdict, point.reason) {
            (Verdict::Certified | Verdict::Estimate, _) => Self::Certifies(point.witnesses),
            (Verdict::Refused, Some(Reason::OutsideModel)) => Self::Outside,
            (Verdict::Refused, _) => Self::Nothing,
        }
    }
}

impl Forecaster<'_> {
    /// The largest leakage, the same for all preparations, or the smallest visibility at which a curve has bits. `tolerance` is relative for
    /// leakage and absolute for visibility.
    pub fn threshold(
        &mut self,
        request: &ForecastRequest,
        kind: Kind,
        quantity: Swept,
        tolerance: f64,
        told: &mut dyn FnMut(Progress),
    ) -> Threshold {
        let mut threshold = Threshold { quantity, kind, certifies_at: None, witnesses: vec![], not_certified_at: None };
        // From the end at which certification is likelier to the other one.
        let (mut good, mut bad) = match quantity {
            Swept::Leakage => (LEAST_LEAKAGE, 1.0),
            Swept::Visibility | Swept::Rounds => (1.0, 0.0),
        };
        let mut side = |value: f64| self.side(request, kind, quantity, value, told);
        let mut next = good;
        loop {
            match side(next) {
                Side::Certifies(witnesses) => {
                    good = next;
                    (threshold.certifies_at, threshold.witnesses) = (Some(next), witnesses);
                }
                Side::Outside => good = next,
                Side::Nothing => {
                    bad = next;
                    threshold.not_certified_at = Some(next);
                }
            }
            let close = if quantity == Swept::Leakage { bad <= good * (1.0 + tolerance) } else { good - bad <= tolerance };
            if close {
                break;
            }
            next = if quantity == Swept::Leakage { (good * bad).sqrt() } else { 0.5 * (good + bad) };
        }
        threshold.not_certified_at = threshold.not_certified_at.or(Some(bad).filter(|_| threshold.certifies_at.is_some()));
        threshold
    }

    fn side(&mut self, request: &ForecastRequest, kind: Kind, quantity: Swept, value: f64, told: &mut dyn FnMut(Progress)) -> Side {
        let setups = [request.setup(quantity, value)];
        let mut side = Side::Nothing;
        for effort in [Effort::Kept, Effort::Fresh] {
            let point = self.points(kind, &setups, effort, told).pop();
            side = point.map_or(Side::Nothing, Side::of);
            if !matches!(side, Side::Nothing) {
                break;
            }
        }
        side
    }

    /// Rounds that are needed for a number of bits.
    pub fn rounds_needed(
        &mut self,
        request: &ForecastRequest,
        kind: Kind,
        wanted_bits: u64,
        told: &mut dyn FnMut(Progress),
    ) -> RoundsNeeded {
        let mut needed = RoundsNeeded { kind, wanted_bits, enough: None, witnesses: vec![], not_enough: None };
        let limit = Kind { rounds: RoundModel::PlugIn, ..kind };
        let at_best = self.points(limit, &[request.base()], Effort::Within(request.loss), told).pop();
        let Some(rate) = at_best.map(|point| point.bits_per_round + point.loss).filter(|rate| *rate > 0.0) else { return needed };
        let mut bits = |forecaster: &mut Self, rounds: u64| {
            let setups = [request.setup(Swept::Rounds, rounds as f64)];
            let point = forecaster.points(kind, &setups, Effort::Within(request.loss), told).pop();
            point.filter(|point| point.certified_bits.is_some_and(|bits| bits >= wanted_bits)).map(|point| point.witnesses)
        };
        // A block gives no more per round than many rounds do.
        let mut low = (wanted_bits as f64 / rate).floor().clamp(1.0, MAX_ROUNDS as f64) as u64;
        let mut high = low;
        while needed.enough.is_none() && high < MAX_ROUNDS {
            high = high.saturating_mul(2).min(MAX_ROUNDS);
            match bits(self, high) {
                Some(witnesses) => (needed.enough, needed.witnesses) = (Some(high), witnesses),
                None => low = high,
            }
        }
        while needed.enough.is_some() && (high - low) as f64 > ROUNDS_TOLERANCE * low as f64 && high - low > 1 {
            let middle = low + (high - low) / 2;
            match bits(self, middle) {
                Some(witnesses) => {
                    high = middle;
                    (needed.enough, needed.witnesses) = (Some(high), witnesses);
                }
                None => low = middle,
            }
        }
        needed.not_enough = Some(low);
        needed
    }
}
