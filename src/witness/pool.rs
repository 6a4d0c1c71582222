//! Kept witnesses: theorems that were proved for one batch and hold for every other of their geometry.
//!
//! A witness is an affine bound in behaviour and leakage, so another batch of the same geometry needs a sum of products in place of a
//! solve. All kept witnesses hold at once, so the best may be picked after the data were seen; nothing is paid for the choice. The choice is
//! made in floating point, the figure comes from [`CheckedWitness::bound`].
//!
//! # When a kept witness is good enough
//!
//! The least bound `G(z)` at a place z, that is, at the intervals of the behaviour and the leakage, is concave in z, and a witness is an
//! affine function above it which touches it where it was made, at `z_i`. What a kept witness gives away is therefore of second order in
//! the distance,
//!
//! ```text
//! loss(z) ≈ c · D²(z, z_i),   D² = ½ Σ_{xyb} [(√low − √low_i)² + (√high − √high_i)²] + Σ_x (√ε − √ε_i)² / √ε_i,
//! ```
//!
//! a squared Hellinger distance: near the ends of the probabilities and of the leakage, bounds bend like square roots. The curvature c is measured:
//! whenever a witness is added, it and the others of its family are evaluated where each was made, and what each loses there against the
//! other is known. Until two were made near each other, [`FIRST_CURVATURE`] stands in. The estimate decides when to solve anew; no
//! certified figure depends on it.
//!
//! An estimate says nothing about places that no model has. A witness counts as made near a batch only if every interval of the batch
//! overlaps the interval it was made for, so that the batch may well come from the behaviour that was solved, and if no leakage is
//! below the one that it was made for. What is told apart from everything that was solved so far is solved.

use std::{
    collections::HashMap,
    sync::{
        Arc, PoisonError, RwLock,
        atomic::{AtomicU64, Ordering},
    },
};

use serde::{Deserialize, Serialize};

use super::{
    check::{CheckError, CheckedWitness, check},
    witness::{Claim, Witness},
};
use crate::{
    counts::{Table, fits},
    relaxation::level::Level,
    scenario::{Geometry, LeakageReading, Scenario, Setting},
};

/// Curvature, in bits per unit of `D²`, that is assumed until one was measured.
pub const FIRST_CURVATURE: f64 = 40.0;
/// Losses are measured over squared distances up to this.
const MEASURED_WITHIN: f64 = 1e-2;
/// What solves differ by anyway, in bits.
const NOISE: f64 = 2e-5;
/// The same for power entropies, whose covers differ.
const POWER_NOISE: f64 = 1e-3;

/// What a witness bounds.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Subject {
    Guess(Setting),
    Power(Setting),
    Contradiction,
}

impl Subject {
    fn of(claim: &Claim) -> Option<Self> {
        match claim {
            Claim::Guess { target } => Some(Self::Guess(*target)),
            Claim::Power { target, .. } => Some(Self::Power(*target)),
            Claim::Contradiction => Some(Self::Contradiction),
            Claim::Score { .. } => None,
        }
    }
}

/// The place that a witness was made for.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct MadeFor {
    /// Intervals `[low, high]` of the behaviour, `[x][y][b]`.
    pub region: Table<[f64; 2]>,
    pub leakage: Vec<f64>,
    pub leakage_holds: LeakageReading,
    /// The level that was asked for; the witness may be of a coarser one.
    pub asked: Level,
    /// Level of the witness.
    pub level: Level,
}

/// A place as it is compared and evaluated: everything in one row.
#[derive(Debug, Clone, PartialEq)]
pub struct Spot {
    geometry: Geometry,
    intervals: Vec<[f64; 2]>,
    /// Roots of the intervals' ends.
    roots: Vec<[f64; 2]>,
    leakage: Vec<f64>,
    leakage_holds: LeakageReading,
}

impl Spot {
    /// The place of a batch: its region and its scenario's leakage.
    pub fn new(scenario: &Scenario, region: &Table<[f64; 2]>) -> Self {
        Self::of(scenario.geometry(), region, scenario.leakage().to_vec(), scenario.leakage_holds())
    }

    fn of(geometry: Geometry, region: &Table<[f64; 2]>, leakage: Vec<f64>, leakage_holds: LeakageReading) -> Self {
        let intervals: Vec<[f64; 2]> = region.iter().flatten().flatten().copied().collect();
        let roots = intervals.iter().map(|ends| ends.map(f64::sqrt)).collect();
        Self { geometry, intervals, roots, leakage, leakage_holds }
    }

    /// `D²` of the module's documentation, from where a witness was made. Infinite if the place is not near enough for it to mean anything.
    fn squared_distance(&self, made: &Self) -> f64 {
        let mut sum = 0.0;
        for ((ends, made_ends), (roots, made_roots)) in self.intervals.iter().zip(&made.intervals).zip(self.roots.iter().zip(&made.roots)) {
            if ends[0] > made_ends[1] || made_ends[0] > ends[1] {
                return f64::INFINITY;
            }
            sum += 0.5 * ((roots[0] - made_roots[0]).powi(2) + (roots[1] - made_roots[1]).powi(2));
        }
        for (epsilon, made) in self.leakage.iter().zip(&made.leakage) {
            if epsilon < made {
                return f64::INFINITY;
            }
            if epsilon > made {
                // Infinite where the witness was made for no leakage at all.
                sum += (epsilon.sqrt() - made.sqrt()).powi(2) / made.sqrt();
            }
        }
        if self.leakage_holds == made.leakage_holds && self.intervals.len() == made.intervals.len() { sum } else { f64::INFINITY }
    }
}

/// The affine bound of a witness in floating point.
#[derive(Debug, Clone, PartialEq)]
struct Quick {
    /// `κ_e` and `μ^e` of each group.
    groups: Vec<(f64, Vec<f64>)>,
    /// `ν`, in the order of the intervals.
    weights: Vec<f64>,
    /// Outcomes of each setting, largest `ν` first.
    order: Vec<usize>,
}

impl Quick {
    fn new(witness: &Witness) -> Self {
        let unit = 2f64.powi(-(witness.multiplier_bits as i32));
        let constant_unit = 2f64.powi(-2 * witness.factor_bits as i32);
        let multipliers = |group: usize| witness.leakage.get(group).or(witness.leakage.first());
        let row = |group: usize| multipliers(group).into_iter().flatten().map(|multiplier| *multiplier as f64 * unit).collect();
        let groups = witness.constants.iter().enumerate().map(|(group, constant)| (constant.0 as f64 * constant_unit, row(group)));
        let sorted = |weights: &Vec<i64>| {
            let mut order: Vec<usize> = (0..weights.len()).collect();
            order.sort_by_key(|b| std::cmp::Reverse(weights.get(*b)));
            order
        };
        Self {
            groups: groups.collect(),
            weights: witness.behaviour.iter().flatten().flatten().map(|weight| *weight as f64 * unit).collect(),
            order: witness.behaviour.iter().flatten().flat_map(sorted).collect(),
        }
    }

    /// Nearly the bound over the intervals.
    fn at(&self, spot: &Spot) -> f64 {
        let constant = |(constant, multipliers): &(f64, Vec<f64>)| {
            constant + multipliers.iter().zip(&spot.leakage).map(|(multiplier, epsilon)| multiplier * epsilon).sum::<f64>()
        };
        let mut sum = self.groups.iter().map(constant).fold(f64::NEG_INFINITY, f64::max);
        let outcomes = spot.geometry.outcomes;
        let settings =
            spot.intervals.chunks_exact(outcomes).zip(self.weights.chunks_exact(outcomes)).zip(self.order.chunks_exact(outcomes));
        for ((intervals, weights), order) in settings {
            let mut left = 1.0 - intervals.iter().map(|[low, _]| low).sum::<f64>();
            for b in order {
                let (Some([low, high]), Some(weight)) = (intervals.get(*b), weights.get(*b)) else { continue };
                let given = (high - low).min(left).max(0.0);
                left -= given;
                sum += weight * (low + given);
            }
        }
        sum
    }
}

/// One kept witness.
#[derive(Debug)]
pub struct Kept {
    witness: CheckedWitness,
    made_for: MadeFor,
    /// The text of the witness, for as long as it is nowhere else.
    document: RwLock<Option<Arc<str>>>,
    spot: Spot,
    subject: Subject,
    quick: Quick,
    /// What it gave where it was made, in bits.
    bits: f64,
    last_best: AtomicU64,
}

impl Kept {
    /// Checks a witness and prepares it for use.
    ///
    /// # Errors
    /// A witness that is not accepted, or whose level or place is not what is said.
    pub fn try_new(witness: &Witness, made_for: MadeFor) -> Result<Self, CheckError> {
        let inapplicable = |what: &str| CheckError::Inapplicable(what.to_owned());
        let checked = check(witness)?;
        let geometry = witness.geometry;
        let sound = |[low, high]: &[f64; 2]| (0.0..=1.0).contains(low) && (0.0..=1.0).contains(high) && low <= high;
        if !fits(&made_for.region, geometry) || !made_for.region.iter().flatten().flatten().all(sound) {
            return Err(inapplicable("it was made for another geometry"));
        }
        if made_for.leakage.len() != geometry.preparations || !made_for.leakage.iter().all(|epsilon| (0.0..=1.0).contains(epsilon)) {
            return Err(inapplicable("it was made for another number of preparations"));
        }
        if !witness.is_of_level(made_for.level) {
            return Err(inapplicable("it is of another level"));
        }
        let subject = Subject::of(&witness.claim).ok_or_else(|| inapplicable("scores are not kept"))?;
        let spot = Spot::of(geometry, &made_for.region, made_for.leakage.clone(), made_for.leakage_holds);
        let quick = Quick::new(witness);
        let bits = in_bits(subject, quick.at(&spot));
        let document = RwLock::new(Some(witness.canonical_json().into()));
        let last_best = AtomicU64::new(0);
        Ok(Self { witness: checked.without_proof(), made_for, document, spot, subject, quick, bits, last_best })
    }

    /// The theorem, without its proof.
    pub fn witness(&self) -> &CheckedWitness {
        &self.witness
    }

    pub fn made_for(&self) -> &MadeFor {
        &self.made_for
    }

    pub fn level(&self) -> Level {
        self.made_for.level
    }

    pub fn subject(&self) -> Subject {
        self.subject
    }

    /// The text of the witness, unless it was filed.
    pub fn document(&self) -> Option<Arc<str>> {
        self.document.read().unwrap_or_else(PoisonError::into_inner).clone()
    }

    /// Forgets the text: from now on it is found elsewhere, under the witness's digest.
    pub fn filed(&self) {
        *self.document.write().unwrap_or_else(PoisonError::into_inner) = None;
    }

    /// Whether the witness says anything about a place and, of a power entropy, a power.
    fn applies(&self, spot: &Spot, power: Option<u32>) -> bool {
        let witness = self.witness.witness();
        let strong_enough = match &witness.claim {
            // η_β falls with β: a bound for one power is one for every smaller power.
            Claim::Power { power: of, .. } => power.is_some_and(|power| power <= *of),
            Claim::Guess { .. } | Claim::Score { .. } | Claim::Contradiction => true,
        };
        let exact = witness.exact.iter().zip(&spot.leakage).all(|(exact, epsilon)| !exact || *epsilon == 0.0);
        let reading = witness.leakage_holds == LeakageReading::OnAverage || spot.leakage_holds == LeakageReading::EveryEmission;
        strong_enough && exact && reading
    }

    fn power(&self) -> Option<u32> {
        match self.witness.witness().claim {
            Claim::Power { power, .. } => Some(power),
            Claim::Guess { .. } | Claim::Score { .. } | Claim::Contradiction => None,
        }
    }
}

/// A value of a witness as entropy per round; more is better.
fn in_bits(subject: Subject, value: f64) -> f64 {
    match subject {
        Subject::Guess(_) => -value.clamp(f64::MIN_POSITIVE, 1.0).log2(),
        Subject::Power(_) => -value * std::f64::consts::LOG2_E,
        Subject::Contradiction => -value,
    }
}

/// Witnesses that bound the same thing in the same geometry.
#[derive(Debug)]
struct Family {
    kept: Vec<Arc<Kept>>,
    /// Measured; `None` until it was.
    curvature: Option<f64>,
}

impl Family {
    /// Takes what can be learned about the curvature from a new member.
    fn measure(&mut self, new: &Kept) {
        for other in &self.kept {
            for (made, seen) in [(new, other.as_ref()), (other.as_ref(), new)] {
                let squared = seen.spot.squared_distance(&made.spot);
                let noise = if matches!(new.subject, Subject::Power(_)) { POWER_NOISE } else { NOISE };
                // Nearer than this, the noise would say more than the curvature.
                let within = 4.0 * noise / FIRST_CURVATURE..=MEASURED_WITHIN;
                if !within.contains(&squared) || !made.applies(&seen.spot, seen.power()) {
                    continue;
                }
                let lost = seen.bits - in_bits(made.subject, made.quick.at(&seen.spot));
                let curvature = (lost.max(0.0) + noise) / squared;
                self.curvature = Some(self.curvature.map_or(curvature, |known| known.max(curvature)));
            }
        }
    }

    fn curvature(&self) -> f64 {
        self.curvature.unwrap_or(FIRST_CURVATURE)
    }
}

/// The best of the pool at a place.
#[derive(Debug, Clone)]
pub struct Best {
    pub kept: Arc<Kept>,
    /// Estimate of how many bits per round a solve would give more; infinite where nothing was solved nearby.
    pub loss: f64,
}

/// All kept witnesses.
#[derive(Debug)]
pub struct Pool {
    families: HashMap<(Geometry, Subject), Family>,
    /// Most members of one family, and of all together.
    family_limit: usize,
    limit: usize,
    /// Counts choices and additions: the pool's sense of time.
    ticks: AtomicU64,
}

impl Default for Pool {
    fn default() -> Self {
        Self::new(64, 1024)
    }
}

impl Pool {
    /// An empty pool that keeps at most so many witnesses of one family, and of all together.
    pub fn new(family_limit: usize, limit: usize) -> Self {
        Self { families: HashMap::new(), family_limit: family_limit.max(1), limit: limit.max(1), ticks: AtomicU64::new(0) }
    }

    /// Number of kept witnesses.
    pub fn len(&self) -> usize {
        self.families.values().map(|family| family.kept.len()).sum()
    }

    pub fn is_empty(&self) -> bool {
        self.families.is_empty()
    }

    fn tick(&self) -> u64 {
        self.ticks.fetch_add(1, Ordering::Relaxed) + 1
    }

    /// Keeps a witness; answers with those that are dropped for it, the ones that were best the longest time ago. `None` if it is kept already.
    pub fn add(&mut self, kept: Arc<Kept>) -> Option<Vec<Arc<Kept>>> {
        let name = (kept.witness.witness().geometry, kept.subject);
        let now = self.tick();
        let family = self.families.entry(name).or_insert_with(|| Family { kept: Vec::new(), curvature: None });
        if family.kept.iter().any(|other| other.witness.digest() == kept.witness.digest()) {
            return None;
        }
        kept.last_best.store(now, Ordering::Relaxed);
        family.measure(&kept);
        family.kept.push(kept);
        let mut dropped = Vec::new();
        if family.kept.len() > self.family_limit {
            dropped.extend(drop_oldest(&mut family.kept));
        }
        if self.len() > self.limit {
            let oldest = |family: &Family| family.kept.iter().map(|kept| kept.last_best.load(Ordering::Relaxed)).min().unwrap_or(u64::MAX);
            if let Some(family) = self.families.values_mut().min_by_key(|family| oldest(family)) {
                dropped.extend(drop_oldest(&mut family.kept));
            }
            self.families.retain(|_, family| !family.kept.is_empty());
        }
        Some(dropped)
    }

    /// The witness that gives the best bound at a place, for power entropies also at a power, in units of `2^-30`, and what a solve would give more
    /// that begins at the level `asked`. `None` if none applies.
    pub fn best(&self, subject: Subject, spot: &Spot, asked: Level, power: Option<u32>) -> Option<Best> {
        let family = self.families.get(&(spot.geometry, subject))?;
        let mut best: Option<(f64, &Arc<Kept>)> = None;
        // Least estimate, over where witnesses were made, of what a solve would give.
        let mut reachable = f64::INFINITY;
        for kept in &family.kept {
            if !kept.applies(spot, power) {
                continue;
            }
            let bits = in_bits(subject, kept.quick.at(spot));
            if best.is_none_or(|(most, _)| bits > most) {
                best = Some((bits, kept));
            }
            if kept.made_for.asked >= asked {
                let mut loss = family.curvature() * spot.squared_distance(&kept.spot);
                if let (Some(power), Some(of)) = (power, kept.power()) {
                    // η_β falls by at most half the mean of (ln p)² for each unit of β.
                    loss += f64::from(of - power) / f64::from(1u32 << 30) * 0.5;
                }
                reachable = reachable.min(bits + loss);
            }
        }
        let (bits, kept) = best?;
        kept.last_best.store(self.tick(), Ordering::Relaxed);
        Some(Best { kept: Arc::clone(kept), loss: (reachable - bits).max(0.0) })
    }

    /// Whether a kept contradiction seems to show that no model has a behaviour in the place.
    pub fn contradicts(&self, spot: &Spot) -> bool {
        let family = self.families.get(&(spot.geometry, Subject::Contradiction));
        family.is_some_and(|family| family.kept.iter().any(|kept| kept.applies(spot, None) && kept.quick.at(spot) < 0.0))
    }
}

fn drop_oldest(kept: &mut Vec<Arc<Kept>>) -> Option<Arc<Kept>> {
    let (at, _) = kept.iter().enumerate().min_by_key(|(_, kept)| kept.last_best.load(Ordering::Relaxed))?;
    Some(kept.remove(at))
}
