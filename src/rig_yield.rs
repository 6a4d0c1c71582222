//! What a rig really yields.

use std::collections::BTreeMap;

use num_rational::BigRational;
use num_traits::Zero;
use serde::Serialize;

use crate::{
    certificate::Verdict,
    clock::Stamp,
    exact::{decimal, round_down, round_up},
    ledger::{history::Window, rows::Tally},
    profile::RigName,
    record::Summary,
};

/// The newest certification of a window.
#[derive(Debug, Clone, PartialEq, Serialize, utoipa::ToSchema)]
pub struct Latest {
    /// Path of the record.
    pub certification: String,
    #[schema(value_type = String, format = DateTime)]
    pub recorded_at: Stamp,
    pub verdict: Verdict,
    pub certified_bits: u64,
    /// Certified bits over all rounds of the batch, rounded down.
    pub bits_per_round: f64,
}

/// A rig's certifications within a window, added up.
#[derive(Debug, Clone, PartialEq, Serialize, utoipa::ToSchema)]
pub struct RigYield {
    #[schema(value_type = String)]
    pub rig: RigName,
    /// Certifications in the window.
    pub batches: u64,
    /// The window, if it is the newest so many batches.
    pub batches_asked: Option<u32>,
    /// The window, if it begins at a time.
    #[schema(value_type = Option<String>, format = DateTime)]
    pub since: Option<Stamp>,
    pub certified: u64,
    pub estimates: u64,
    pub refusals: u64,
    /// `null` if the window is empty.
    pub latest: Option<Latest>,
    /// All certified bits over all rounds, those of refused batches and estimates too; rounded down. `null` without rounds.
    pub mean_bits_per_round: Option<f64>,
    pub total_bits: u64,
    pub total_rounds: u64,
    /// Probability, at most, that any statement of the window is wrong: the sum over its batches, rounded up. Refused batches
    /// count, since they might have been accepted; estimates claim no confidence and do not.
    pub total_failure: f64,
}

impl RigYield {
    /// Adds up tallies; `latest` is the head of the newest one's record.
    pub fn of(rig: RigName, window: Window, tallies: &[Tally], latest: Option<Summary>) -> Self {
        let count = |verdict| tallies.iter().filter(|tally| tally.verdict == verdict).count() as u64;
        let sum = |part: fn(&Tally) -> u64| tallies.iter().fold(0u64, |sum, tally| sum.saturating_add(part(tally)));
        let (total_bits, total_rounds) = (sum(|tally| tally.certified_bits), sum(|tally| tally.rounds));
        let (batches_asked, since) = match window {
            Window::Batches(batches) => (Some(batches), None),
            Window::Since(since) => (None, Some(since)),
        };
        Self {
            rig,
            batches: tallies.len() as u64,
            batches_asked,
            since,
            certified: count(Verdict::Certified),
            estimates: count(Verdict::Estimate),
            refusals: count(Verdict::Refused),
            latest: latest.map(|newest| Latest {
                certification: format!("/v1/certifications/{}", newest.id),
                recorded_at: newest.recorded_at,
                verdict: newest.verdict,
                certified_bits: newest.certified_bits,
                bits_per_round: newest.bits_per_round,
            }),
            mean_bits_per_round: quotient_below(total_bits, total_rounds),
            total_bits,
            total_rounds,
            total_failure: sum_above(tallies.iter().filter_map(|tally| tally.failure)),
        }
    }
}

/// `a / b`, rounded down; `None` if `b` is zero.
fn quotient_below(a: u64, b: u64) -> Option<f64> {
    (b > 0).then(|| round_down(&BigRational::new(a.into(), b.into())))
}

/// The sum of the decimals that are on record, rounded up.
fn sum_above(values: impl Iterator<Item = f64>) -> f64 {
    // Most batches of a rig have the same figure: added up by figure, a long window costs no more than a short one.
    let mut times: BTreeMap<u64, u64> = BTreeMap::new();
    values.for_each(|value| *times.entry(value.to_bits()).or_default() += 1);
    let sum = times.into_iter().map(|(bits, times)| decimal(f64::from_bits(bits)) * BigRational::from_integer(times.into()));
    round_up(&sum.fold(BigRational::zero(), |sum, part| sum + part))
}

#[cfg(test)]
mod tests {
    use uuid::Uuid;

    use super::*;

    fn tally(verdict: Verdict, certified_bits: u64, rounds: u64, failure: Option<f64>) -> Tally {
        let recorded_at = Stamp::from_microseconds(0).unwrap();
        Tally { id: Uuid::nil(), recorded_at, verdict, certified_bits, rounds, failure }
    }

    #[test]
    fn refused_batches_cost_rounds_and_confidence() {
        let tallies = [
            tally(Verdict::Refused, 0, 1000, Some(2e-10)),
            tally(Verdict::Certified, 300, 1000, Some(2e-10)),
            tally(Verdict::Estimate, 0, 0, None),
        ];
        let rig = RigName::try_from("r".to_owned()).unwrap();
        let sum = RigYield::of(rig, Window::Batches(10), &tallies, None);
        assert_eq!((sum.batches, sum.certified, sum.estimates, sum.refusals), (3, 1, 1, 1));
        assert_eq!((sum.total_bits, sum.total_rounds), (300, 2000));
        assert_eq!(sum.mean_bits_per_round, Some(0.15));
        assert_eq!(sum.total_failure, 4e-10);
    }

    #[test]
    fn quotients_and_sums_bound_what_they_stand_for() {
        assert_eq!(quotient_below(1, 3), Some(0.3333333333333333));
        assert_eq!(quotient_below(2, 3), Some(0.6666666666666666));
        assert_eq!(quotient_below(1, 2), Some(0.5));
        assert_eq!(quotient_below(0, 5), Some(0.0));
        assert_eq!(quotient_below(5, 0), None);
        assert_eq!(sum_above([1e-10, 1e-10, 1e-10].into_iter()), 3e-10);
        assert_eq!(sum_above([1.0, 1e-30].into_iter()), 1.0f64.next_up());
        assert_eq!(sum_above(std::iter::empty()), 0.0);
    }
}
