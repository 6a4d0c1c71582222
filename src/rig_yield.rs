//! What a rig really yields.

use serde::Serialize;

use crate::{
    certificate::Verdict,
    clock::Stamp,
    ledger::{history::Window, rows::Tally},
    profile::RigName,
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
    /// Adds up tallies, newest first.
    pub fn of(rig: RigName, window: Window, tallies: &[Tally]) -> Self {
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
            latest: tallies.first().map(|tally| Latest {
                certification: format!("/v1/certifications/{}", tally.id),
                recorded_at: tally.recorded_at,
                verdict: tally.verdict,
                certified_bits: tally.certified_bits,
                bits_per_round: quotient_below(tally.certified_bits, tally.rounds).unwrap_or(0.0),
            }),
            mean_bits_per_round: quotient_below(total_bits, total_rounds),
            total_bits,
            total_rounds,
            total_failure: tallies.iter().filter_map(|tally| tally.failure).fold(0.0, sum_above),
        }
    }
}

/// `a / b`, rounded down; `None` if `b` is zero.
fn quotient_below(a: u64, b: u64) -> Option<f64> {
    if b == 0 {
        return None;
    }
    let exact = |n: u64| n as f64 as u128 == u128::from(n);
    let quotient = a as f64 / b as f64;
    if exact(a) && exact(b) {
        // One rounding: the remainder, which a fused multiply-add gives with its sign, tells its direction.
        let above = libm::fma(quotient, b as f64, -(a as f64)) > 0.0;
        return Some(if above { quotient.next_down() } else { quotient });
    }
    // Three roundings, each off by a 2⁻⁵³th at most, which is one step at most: three steps down are below.
    Some(quotient.next_down().next_down().next_down().max(0.0))
}

/// `a + b`, rounded up.
fn sum_above(a: f64, b: f64) -> f64 {
    let sum = a + b;
    // Exactly what the sum lost, by Knuth's two-sum.
    let rest = sum - a;
    let lost = (a - (sum - rest)) + (b - rest);
    if lost > 0.0 { sum.next_up() } else { sum }
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
        let sum = RigYield::of(rig, Window::Batches(10), &tallies);
        assert_eq!((sum.batches, sum.certified, sum.estimates, sum.refusals), (3, 1, 1, 1));
        assert_eq!((sum.total_bits, sum.total_rounds), (300, 2000));
        let mean = sum.mean_bits_per_round.unwrap();
        assert!(mean > 0.1499999 && libm::fma(mean, 2000.0, -300.0) <= 0.0);
        assert!(sum.total_failure >= 4e-10 && sum.total_failure < 4.000001e-10);
        assert_eq!(sum.latest.unwrap().verdict, Verdict::Refused);
    }

    #[test]
    fn quotients_and_sums_bound_what_they_stand_for() {
        // 1/3 is not a double; 0.333…33 below it is.
        let third = quotient_below(1, 3).unwrap();
        assert!(libm::fma(third, 3.0, -1.0) <= 0.0 && third > 0.333333333333333);
        assert_eq!(quotient_below(1, 2), Some(0.5));
        assert_eq!(quotient_below(0, 5), Some(0.0));
        assert_eq!(quotient_below(5, 0), None);
        let huge = quotient_below(u64::MAX, u64::MAX - 1).unwrap();
        assert!(huge <= 1.0);
        assert_eq!(sum_above(1.0, 1e-30), 1.0f64.next_up());
        assert_eq!(sum_above(0.5, 0.25), 0.75);
    }
}
