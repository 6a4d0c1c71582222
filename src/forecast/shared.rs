//! Witnesses that neighbouring points share, and what that may cost.
//!
//! A checked witness is an affine bound that holds for every behaviour and every leakage of its geometry. So witnesses that were made for
//! some points bound the claim at every other point as well, without a solve. What this gives away is bounded from the other side.
//!
//! Let `F(P, ε)` be the optimum of the relaxation over all behaviours within intervals `P = [low, high]`, with leakage ε read on average:
//! the guessing probability, or minus the power entropy. A mixture of a model for `(P₁, ε₁)` and one for `(P₂, ε₂)`, with weights λ and 1−λ, is a
//! model for the mixture of the intervals' ends and of the leakages, so F is **concave** in all of them together. It also rises as
//! intervals widen or leakage grows, and with the power. Hence, if the intervals of a point hold those of the mixture, its leakage is at
//! least that of the mixture, and its power at least the two powers,
//!
//! ```text
//! F(P, ε)  ≥  λ F(P₁, ε₁) + (1−λ) F(P₂, ε₂):
//! ```
//!
//! the chord through two solved points. A point needs no solve once the least of the witnesses' bounds and the largest of the chords differ by
//! no more than the stated loss. What is reported is the witnesses' bound, which is proved; chords decide only where to solve. They use the
//! bounds at solved points in place of the optima, which are lower by what the solver and the rounding left, some 1e-6.
//!
//! Leakage that holds for every emission limits each group on its own, `⟨N R_x⟩_e ≤ ε_x q_e`, and mixing models of different leakage does not
//! keep to that. There a chord counts only for a leakage that is at least both.
//!
//! Preparations whose leakage is exactly zero have another algebra, in which words vanish and bounds are lower. A witness from it holds for
//! nothing else (the check says so), and chords join only points that agree in what is exactly zero.

use num_traits::ToPrimitive;

use crate::{
    bound::{Answer, Found, guessing_probability, power_entropy},
    certify::Evidence,
    relaxation::level::Level,
    request::EntropyChoice,
    scenario::{LeakageDocument, LeakageReading, Scenario, Setting},
    solver::Limits,
    witness::{
        check::{CheckedBound, CheckedWitness, proves_contradiction},
        witness::Claim,
    },
};

/// Ends of intervals and leakages that differ by less are the same; they went through floating-point arithmetic.
const SAME: f64 = 1e-12;

/// Where a bound is wanted.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Spot {
    pub evidence: Evidence,
    pub leakage: Vec<f64>,
    /// `β` in units of `2^-30`; of no meaning for the guessing probability.
    pub power: u32,
}

impl Spot {
    /// Ends of all intervals, lower ones first, the upper ones negated: one list holds another one's intervals if nowhere larger.
    fn ends(&self) -> Vec<f64> {
        match &self.evidence {
            Evidence::Point(table) => table.iter().flatten().flatten().flat_map(|p| [*p, -p]).collect(),
            Evidence::Region(table) => table.iter().flatten().flatten().flat_map(|[low, high]| [*low, -high]).collect(),
            // Forecasts are made from behaviours.
            Evidence::Scores(_) => Vec::new(),
        }
    }

    fn exact(&self) -> Vec<bool> {
        self.leakage.iter().map(|leakage| *leakage == 0.0).collect()
    }
}

/// What is known at a spot.
#[derive(Debug, Clone, PartialEq)]
pub(super) enum Standing {
    /// The number of the best witness, its bound, and what a solve at this very spot might gain, in bits.
    Bounded { number: usize, bound: CheckedBound, loss: f64 },
    /// A checked witness proves that no model has the numbers.
    Outside,
    /// No witness applies.
    Unverified,
}

/// A spot that was solved, its bound in approximate numbers.
struct Corner {
    ends: Vec<f64>,
    leakage: Vec<f64>,
    exact: Vec<bool>,
    power: u32,
    value: f64,
}

/// How far the search for a spot's best witness has come.
#[derive(Default, Clone)]
struct Seen {
    witnesses: usize,
    contradictions: usize,
    best: Option<(usize, CheckedBound, f64)>,
    outside: bool,
}

/// The witnesses of one target and one claim.
pub(super) struct Shared {
    scenario: Scenario,
    target: Setting,
    entropy: EntropyChoice,
    level: Level,
    witnesses: Vec<Found>,
    contradictions: Vec<CheckedWitness>,
    corners: Vec<Corner>,
    pub solves: usize,
}

impl Shared {
    pub fn new(scenario: Scenario, target: Setting, entropy: EntropyChoice, level: Level) -> Self {
        Self { scenario, target, entropy, level, witnesses: vec![], contradictions: vec![], corners: vec![], solves: 0 }
    }

    /// The witness of this number; numbers come from [`Standing::Bounded`].
    pub fn found(&self, number: usize) -> Option<&Found> {
        self.witnesses.get(number)
    }

    /// What the kept witnesses say, without a solve.
    pub fn standing(&self, spot: &Spot) -> Standing {
        let mut seen = Seen::default();
        self.look(spot, &mut seen);
        self.standing_of(spot, &seen)
    }

    /// What is known at each of the spots once sharing costs no more than `loss` bits anywhere. As long as there is a spot at which
    /// it might, the worst of them is solved, ends of the list before others. `told` hears of every solve: how many spots are settled, and how many solves there were.
    pub fn settle(&mut self, spots: &[Spot], loss: f64, told: &mut dyn FnMut(usize, usize)) -> Vec<(Standing, bool)> {
        let mut seen = vec![Seen::default(); spots.len()];
        let mut solved = vec![false; spots.len()];
        loop {
            let mut worst: Option<(f64, usize)> = None;
            let mut settled = 0;
            for (i, spot) in spots.iter().enumerate() {
                self.look(spot, &mut seen[i]);
                let end = i == 0 || i + 1 == spots.len();
                let open = match self.standing_of(spot, &seen[i]) {
                    _ if solved[i] => None,
                    Standing::Outside => None,
                    Standing::Unverified => Some(f64::INFINITY),
                    Standing::Bounded { loss: lost, .. } => (lost > loss).then_some(if end { f64::MAX } else { lost }),
                };
                match open {
                    None => settled += 1,
                    Some(lost) if worst.is_none_or(|(most, _)| lost > most) => worst = Some((lost, i)),
                    Some(_) => {}
                }
            }
            told(settled, self.solves);
            let Some((_, i)) = worst else { break };
            self.solve(&spots[i]);
            solved[i] = true;
        }
        spots.iter().zip(seen).map(|(spot, seen)| self.standing_of(spot, &seen)).zip(solved).collect()
    }

    /// Solves at a spot, and keeps what comes out.
    pub fn solve(&mut self, spot: &Spot) {
        self.solves += 1;
        let Ok(scenario) = self.scenario.clone().with_leakage(LeakageDocument::PerPreparation(spot.leakage.clone())) else { return };
        let place = spot.evidence.place();
        let found = match self.entropy {
            EntropyChoice::Guessing => match guessing_probability(&scenario, self.target, place, self.level, Limits::default()) {
                Answer::Bounded(found) => Some(*found),
                Answer::Outside(contradiction) => return self.contradictions.push(contradiction.found.witness),
                Answer::Unverified => None,
            },
            EntropyChoice::Auto | EntropyChoice::Power => {
                power_entropy(&scenario, self.target, place, spot.power, self.level, Limits::default())
            }
        };
        let Some(found) = found else { return };
        let value = self.capped(found.bound.exact().to_f64().unwrap_or(f64::INFINITY));
        let Spot { leakage, power, .. } = spot.clone();
        self.corners.push(Corner { ends: spot.ends(), leakage, exact: spot.exact(), power, value });
        self.witnesses.push(found);
    }

    /// The claim's trivial bound is taken where a witness says less: a probability is at most 1, an entropy at least 0.
    fn capped(&self, value: f64) -> f64 {
        value.min(match self.entropy {
            EntropyChoice::Guessing => 1.0,
            EntropyChoice::Auto | EntropyChoice::Power => 0.0,
        })
    }

    /// Evaluates the witnesses that a spot has not seen yet.
    fn look(&self, spot: &Spot, seen: &mut Seen) {
        let (place, reading) = (spot.evidence.place(), self.scenario.leakage_holds());
        for witness in &self.contradictions[seen.contradictions..] {
            let bound = witness.bound(place, &spot.leakage, reading);
            seen.outside |= bound.is_ok_and(|bound| proves_contradiction(witness, &bound, place));
        }
        for (number, found) in self.witnesses.iter().enumerate().skip(seen.witnesses) {
            // One that was made for a larger power holds for a smaller one, the power entropy falling with the power.
            let power = match &found.witness.witness().claim {
                Claim::Power { power, .. } => *power,
                Claim::Guess { .. } | Claim::Score { .. } | Claim::Contradiction => u32::MAX,
            };
            if power < spot.power {
                continue;
            }
            let Ok(bound) = found.witness.bound(place, &spot.leakage, reading) else { continue };
            seen.outside |= proves_contradiction(&found.witness, &bound, place);
            if seen.best.as_ref().is_none_or(|(_, best, _)| bound.exact() < best.exact()) {
                let value = self.capped(bound.exact().to_f64().unwrap_or(f64::INFINITY));
                seen.best = Some((number, bound, value));
            }
        }
        (seen.witnesses, seen.contradictions) = (self.witnesses.len(), self.contradictions.len());
    }

    fn standing_of(&self, spot: &Spot, seen: &Seen) -> Standing {
        if seen.outside {
            return Standing::Outside;
        }
        let Some((number, bound, value)) = &seen.best else { return Standing::Unverified };
        let least = self.least(spot);
        let loss = match self.entropy {
            EntropyChoice::Guessing => value.log2() - least.log2(),
            EntropyChoice::Auto | EntropyChoice::Power => (value - least) * std::f64::consts::LOG2_E,
        };
        Standing::Bounded { number: *number, bound: bound.clone(), loss: loss.max(0.0) }
    }

    /// The largest lower bound on the optimum that chords through solved spots give; see the module's documentation.
    fn least(&self, spot: &Spot) -> f64 {
        let (ends, exact) = (spot.ends(), spot.exact());
        // Without any chord: the likeliest outcome is guessed with its probability; an entropy is at most ln B.
        let outcomes = self.scenario.geometry().outcomes;
        let trivial = match self.entropy {
            EntropyChoice::Guessing => 1.0 / outcomes as f64,
            EntropyChoice::Auto | EntropyChoice::Power => -(outcomes as f64).ln(),
        };
        let usable: Vec<&Corner> = self.corners.iter().filter(|corner| corner.power <= spot.power && corner.exact == exact).collect();
        let mut least: f64 = trivial;
        for (i, one) in usable.iter().enumerate() {
            for other in &usable[i..] {
                let Some((from, to)) = self.weights(&ends, &spot.leakage, one, other) else { continue };
                for weight in [from, to] {
                    least = least.max(weight * one.value + (1.0 - weight) * other.value);
                }
            }
        }
        least
    }

    /// The range of weights of the first of two corners for which the spot holds their mixture.
    fn weights(&self, ends: &[f64], leakage: &[f64], one: &Corner, other: &Corner) -> Option<(f64, f64)> {
        let (mut from, mut to) = (0.0f64, 1.0f64);
        // weight · a + (1 − weight) · b has to be at least (for ends) or at most (for leakages) the spot's own.
        let mut keep = |a: f64, b: f64, limit: f64| {
            // weight · (a − b) ≤ limit − b
            let (slope, room) = (a - b, limit - b + SAME);
            if slope.abs() <= SAME {
                if room < 0.0 {
                    to = -1.0;
                }
            } else if slope > 0.0 {
                to = to.min(room / slope);
            } else {
                from = from.max(room / slope);
            }
        };
        for ((a, b), end) in one.ends.iter().zip(&other.ends).zip(ends) {
            keep(-a, -b, -end);
        }
        match self.scenario.leakage_holds() {
            LeakageReading::OnAverage => {
                for ((a, b), limit) in one.leakage.iter().zip(&other.leakage).zip(leakage) {
                    keep(*a, *b, *limit);
                }
            }
            LeakageReading::EveryEmission => {
                let fits = |corner: &Corner| corner.leakage.iter().zip(leakage).all(|(a, limit)| *a <= limit + SAME);
                match (fits(one), fits(other)) {
                    (true, true) => {}
                    (true, false) => from = 1.0,
                    (false, true) => to = 0.0,
                    (false, false) => return None,
                }
            }
        }
        (from <= to).then_some((from, to))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{fault::parse, scenario::ScenarioDocument};

    fn shared(reading: &str) -> Shared {
        let text = format!(
            r#"{{"preparations":2,"measurements":1,"outcomes":2,"carrier_dimension":1,"leakage":0.1,"leakage_holds":"{reading}","targets":[[0,0]]}}"#
        );
        let scenario = Scenario::try_from(parse::<ScenarioDocument>(text.as_bytes()).unwrap()).unwrap();
        Shared::new(scenario, Setting { x: 0, y: 0 }, EntropyChoice::Guessing, Level::Lean)
    }

    /// `p(0|0) = p(1|1) = s`.
    fn spot(success: f64, leakage: f64) -> Spot {
        let table = vec![vec![vec![success, 1.0 - success]], vec![vec![1.0 - success, success]]];
        Spot { evidence: Evidence::Point(table), leakage: vec![leakage; 2], power: 0 }
    }

    fn corner(success: f64, leakage: f64, value: f64) -> Corner {
        let spot = spot(success, leakage);
        Corner { ends: spot.ends(), exact: spot.exact(), leakage: spot.leakage, power: 0, value }
    }

    #[test]
    fn a_chord_joins_two_points() {
        let mut kept = shared("on-average");
        kept.corners = vec![corner(0.75, 0.1, 0.8), corner(0.75, 0.3, 1.0)];
        assert!((kept.least(&spot(0.75, 0.15)) - 0.85).abs() < 1e-9);
        // Beyond both, the larger one holds by monotony; before both, neither does.
        assert!((kept.least(&spot(0.75, 0.4)) - 1.0).abs() < 1e-9);
        assert!((kept.least(&spot(0.75, 0.05)) - 0.5).abs() < 1e-9);
        // Another behaviour lies on no chord.
        assert!((kept.least(&spot(0.76, 0.15)) - 0.5).abs() < 1e-9);
        kept.corners = vec![corner(0.7, 0.1, 1.0), corner(0.8, 0.1, 0.8)];
        assert!((kept.least(&spot(0.78, 0.1)) - 0.84).abs() < 1e-9);
    }

    #[test]
    fn wider_intervals_hold_a_mixture_of_narrower_ones() {
        let mut kept = shared("on-average");
        kept.corners = vec![corner(0.7, 0.1, 1.0), corner(0.8, 0.1, 0.8)];
        let interval = |p: f64| [p - 0.02, p + 0.02];
        let table = vec![vec![vec![interval(0.78), interval(0.22)]], vec![vec![interval(0.22), interval(0.78)]]];
        // As far down as 0.76: 0.4 of the first corner.
        let wide = Spot { evidence: Evidence::Region(table), ..spot(0.78, 0.1) };
        assert!((kept.least(&wide) - 0.88).abs() < 1e-9);
    }

    #[test]
    fn leakage_of_every_emission_is_not_mixed() {
        let mut kept = shared("every-emission");
        kept.corners = vec![corner(0.75, 0.1, 0.8), corner(0.75, 0.3, 1.0)];
        assert!((kept.least(&spot(0.75, 0.15)) - 0.8).abs() < 1e-9);
        kept.corners = vec![corner(0.7, 0.1, 1.0), corner(0.8, 0.1, 0.8)];
        assert!((kept.least(&spot(0.78, 0.1)) - 0.84).abs() < 1e-9);
    }

    #[test]
    fn no_chord_leads_to_exactly_zero_leakage() {
        let mut kept = shared("on-average");
        kept.corners = vec![corner(0.75, 0.0, 0.8), corner(0.75, 0.3, 1.0)];
        assert!((kept.least(&spot(0.75, 0.15)) - 0.5).abs() < 1e-9);
    }

    /// A witness that was made for no leakage at all says nothing where there is some.
    #[test]
    fn a_witness_for_exactly_zero_leakage_is_not_shared() {
        let mut kept = shared("on-average");
        let (without, with) = (spot(0.5, 0.0), spot(0.5, 1e-9));
        kept.solve(&without);
        assert!(matches!(kept.standing(&without), Standing::Bounded { .. }));
        assert_eq!(kept.standing(&with), Standing::Unverified);
        kept.solve(&with);
        assert!(matches!(kept.standing(&with), Standing::Bounded { number: 1, .. }));
    }
}
