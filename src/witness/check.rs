//! The exact check. Trusts the witness document and the word rules, nothing else; all arithmetic is on integers and rationals.
//!
//! For group e let
//!
//! ```text
//! s_e = Σ ν_{xyb} [R_x M_{b|y}] + Σ μ^e_x [N R_x] − c_e − Σ_blocks Σ_ij Z_ij [(u_i ± u_i†)† (u_j ± u_j†)]
//! ```
//!
//! as a combination of moment words. The last sum is not negative in any model, so `c_e ≤ ν·p_e + μ·leak_e − s_e`, and `−s_e` is
//! at most `κ_e q_e` with
//!
//! ```text
//! κ_e = Σ_{R_x} (−s) + d Σ_{V} (−s) + Σ_{other words with a state} |s| + d Σ_{other words} |s|,
//! ```
//!
//! because `⟨R_x⟩ = q`, `⟨V⟩ = d q`, and any product of projectors that holds a state (the carrier) has a trace of at most
//! `q` (`d q`). Summing over the groups, with `Σ q_e = 1` and the leakage either limited in the sum or in each group, gives the bound
//! that `witness.rs` states.

use nalgebra::{DMatrix, DVector};
use num_bigint::BigInt;
use num_rational::BigRational;
use num_traits::{One, Signed, ToPrimitive, Zero};
use std::collections::BTreeMap;

use super::{
    fixed,
    witness::{Claim, Constant, FORMAT, Witness},
};
use crate::{
    counts::{Table, fits},
    entropy::power::{POWER_BITS, power_entropy_down},
    exact::{decimal, dyadic, round_up},
    relaxation::{
        cells::{MAX_CELLS, cells},
        parity::gram,
        word::{Algebra, Letter, Word, WordError},
    },
    scenario::{Geometry, LeakageReading, Setting},
    score::Score,
};

/// Why a witness is not accepted.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum CheckError {
    #[error("unknown witness format \"{0}\"")]
    Format(String),
    #[error("the witness is malformed: {0}")]
    Malformed(String),
    #[error(transparent)]
    Word(#[from] WordError),
    #[error("a leakage multiplier is negative")]
    NegativeMultiplier,
    #[error("an integer of the witness is out of range")]
    Range,
    #[error("a chord of the witness is above the entropy it stands for")]
    Chord,
    #[error("the constants of the witness do not follow from its factors and multipliers")]
    Constants,
    #[error("the witness does not apply: {0}")]
    Inapplicable(String),
}

/// Largest block side, and largest sum of sides over blocks, that is worth checking.
const MAX_SIDE: usize = 512;
/// Most letters of a monomial; those of the levels have three at most. What a product comes to doubles with every carrier in it, so without a
/// limit a short document would keep the check busy for ever.
const MAX_LETTERS: usize = 4;
/// Every integer of a witness stays below this in size, so that any JSON reader keeps it.
const MAX_INTEGER: i64 = 1 << 53;

/// A theorem: a witness whose identity was confirmed in exact arithmetic. Only this module makes one.
#[derive(Debug, Clone, PartialEq)]
pub struct CheckedWitness {
    witness: Witness,
    digest: String,
    rounding_cost: f64,
}

/// An upper bound that follows from a checked witness. Only this module makes one.
#[derive(Debug, Clone, PartialEq)]
pub struct CheckedBound {
    value: BigRational,
    rounded_up: f64,
}

impl CheckedBound {
    fn new(value: BigRational) -> Self {
        let rounded_up = round_up(&value);
        Self { value, rounded_up }
    }

    pub fn exact(&self) -> &BigRational {
        &self.value
    }

    /// The bound as a decimal, rounded up.
    pub fn rounded_up(&self) -> f64 {
        self.rounded_up
    }
}

/// Where a witness is evaluated.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Place<'a> {
    /// At a behaviour `[x][y][b]`; the last outcome's probability is one minus the others.
    Behaviour(&'a Table<f64>),
    /// At the worst behaviour within the intervals `[low, high]`, `[x][y][b]`.
    Region(&'a Table<[f64; 2]>),
    /// At the worst of all behaviours that reach these scores.
    Scores(&'a [Score]),
}

/// Confirms a witness document, its constants included.
///
/// # Errors
/// The first reason not to accept it.
pub fn check(witness: &Witness) -> Result<CheckedWitness, CheckError> {
    let checked = complete(witness.clone())?;
    if checked.witness != *witness {
        return Err(CheckError::Constants);
    }
    Ok(checked)
}

/// Computes the constants and remainders of a witness from the rest of it, replacing whatever stood there, and confirms it.
///
/// # Errors
/// The first reason not to accept it.
pub fn complete(mut witness: Witness) -> Result<CheckedWitness, CheckError> {
    check_shape(&witness)?;
    let algebra = Algebra::new(witness.geometry, &witness.exact);
    for monomial in witness.bases.iter().flat_map(|span| &span.monomials) {
        algebra.check_letters(monomial)?;
    }
    check_chords(&witness)?;
    let grams = gram_matrices(&algebra, &witness)?;
    let (mut constants, mut remainders) = (Vec::new(), Vec::new());
    for group in 0..witness.claim.groups(witness.geometry) {
        let remainder = remainder(&algebra, &witness, &grams, group)?;
        let (constant, paid) = constant(&remainder, witness.geometry.carrier_dimension)?;
        constants.push(Constant(constant));
        remainders.push(Constant(paid));
    }
    let largest = remainders.iter().map(|remainder| remainder.0).max().unwrap_or(0);
    let rounding_cost = largest as f64 / 2f64.powi(2 * witness.factor_bits as i32);
    witness.constants = constants;
    witness.remainders = remainders;
    let digest = witness.digest();
    Ok(CheckedWitness { witness, digest, rounding_cost })
}

fn check_shape(witness: &Witness) -> Result<(), CheckError> {
    let malformed = |what: &str| Err(CheckError::Malformed(what.to_owned()));
    if witness.format != FORMAT {
        return Err(CheckError::Format(witness.format.clone()));
    }
    let geometry = witness.geometry;
    if let Err(fault) = geometry.check() {
        return Err(CheckError::Malformed(fault.to_string()));
    }
    let Geometry { preparations, measurements, outcomes, .. } = geometry;
    let fits = |table: &Table<i64>| {
        table.len() == preparations && table.iter().all(|t| t.len() == measurements && t.iter().all(|values| values.len() == outcomes))
    };
    if witness.exact.len() != preparations {
        return malformed("\"exact\" needs one entry per preparation");
    }
    if !fits(&witness.behaviour) {
        return malformed("\"behaviour\" does not have the shape of the geometry");
    }
    match &witness.claim {
        Claim::Guess { target } if target.x >= preparations || target.y >= measurements => return malformed("there is no such target"),
        Claim::Power { target, .. } if target.x >= preparations || target.y >= measurements => return malformed("there is no such target"),
        Claim::Power { power, .. } if *power == 0 || *power > 1 << POWER_BITS => return malformed("the power is not in (0, 1]"),
        Claim::Power { cuts, .. } if cuts.len() > 2 * MAX_CELLS => return malformed("there are too many cells"),
        Claim::Score { coefficients } if !fits(coefficients) => return malformed("\"coefficients\" do not have the shape of the geometry"),
        Claim::Guess { .. } | Claim::Power { .. } | Claim::Score { .. } | Claim::Contradiction => {}
    }
    let groups = witness.claim.groups(geometry);
    let rows = match witness.leakage_holds {
        LeakageReading::OnAverage => 1,
        LeakageReading::EveryEmission => groups,
    };
    if witness.leakage.len() != rows || witness.leakage.iter().any(|row| row.len() != preparations) {
        return malformed("\"leakage\" does not have the shape of its reading");
    }
    if witness.leakage.iter().flatten().any(|multiplier| *multiplier < 0) {
        return Err(CheckError::NegativeMultiplier);
    }
    if witness.leakage.iter().any(|row| row.iter().zip(&witness.exact).any(|(multiplier, exact)| *exact && *multiplier != 0)) {
        return malformed("a leakage that is exactly zero has no multiplier");
    }
    if witness.multiplier_bits > 52 || witness.factor_bits > 52 || 2 * witness.factor_bits < witness.multiplier_bits {
        return malformed("bits are out of range");
    }
    let sides: Vec<usize> = witness.bases.iter().map(|span| span.monomials.len()).collect();
    if sides.iter().sum::<usize>() > MAX_SIDE {
        return malformed("the blocks are too large");
    }
    if witness.bases.iter().flat_map(|span| &span.monomials).any(|monomial| monomial.letters().len() > MAX_LETTERS) {
        return malformed("a monomial is too long");
    }
    let triangular = |rows: &Vec<Vec<i64>>, side: usize| rows.len() == side && rows.iter().enumerate().all(|(i, row)| row.len() == i + 1);
    let complete =
        |blocks: &Vec<Vec<Vec<i64>>>| blocks.len() == sides.len() && blocks.iter().zip(&sides).all(|(rows, side)| triangular(rows, *side));
    if witness.factors.len() != groups || !witness.factors.iter().all(complete) {
        return malformed("\"factors\" do not have the shape of the groups and bases");
    }
    let integers = witness.behaviour.iter().flatten().flatten().chain(witness.leakage.iter().flatten());
    let integers = integers.chain(witness.factors.iter().flatten().flatten().flatten()).chain(witness.chords.iter().flatten());
    let scores = match &witness.claim {
        Claim::Score { coefficients } => coefficients.as_slice(),
        Claim::Guess { .. } | Claim::Power { .. } | Claim::Contradiction => &[],
    };
    if integers.chain(scores.iter().flatten().flatten()).any(|integer| integer.unsigned_abs() >= MAX_INTEGER.unsigned_abs()) {
        return Err(CheckError::Range);
    }
    Ok(())
}

/// Every chord of a power claim lies below `η_β` at the vertices of its cell. `η_β` is concave and the chord affine, so it lies below
/// throughout the cell; and the cells cover every distribution.
fn check_chords(witness: &Witness) -> Result<(), CheckError> {
    let malformed = |what: &str| Err(CheckError::Malformed(what.to_owned()));
    let Claim::Power { power, cuts, .. } = &witness.claim else {
        return if witness.chords.is_empty() { Ok(()) } else { malformed("only a power claim has chords") };
    };
    let outcomes = witness.geometry.outcomes;
    let Some(cells) = cells(outcomes, cuts) else { return malformed("the cuts do not make a cover") };
    if witness.chords.len() != cells.len() || witness.chords.iter().any(|chord| chord.len() != outcomes) {
        return malformed("\"chords\" do not have the shape of the cover");
    }
    for (cell, chord) in cells.iter().zip(&witness.chords) {
        for vertex in &cell.vertices {
            let probabilities: Vec<f64> = vertex.iter().map(|p| p.to_f64().unwrap_or(0.0)).collect();
            let value: BigRational = chord.iter().zip(vertex).map(|(l, p)| dyadic(*l, witness.multiplier_bits) * p).sum();
            let entropy = power_entropy_down(&probabilities, *power);
            if BigRational::from_float(entropy).is_none_or(|entropy| value > entropy) {
                return Err(CheckError::Chord);
            }
        }
    }
    Ok(())
}

/// A combination of words, over `2^(2f)`.
type Combination = BTreeMap<Word, i128>;

/// Entry `(i, j)`, `i ≥ j`, of a basis's Gram matrix, as numbered words with coefficients.
struct Gram {
    row: usize,
    column: usize,
    terms: Vec<(usize, i128)>,
}

struct Grams {
    words: Vec<Word>,
    blocks: Vec<Vec<Gram>>,
}

fn gram_matrices(algebra: &Algebra, witness: &Witness) -> Result<Grams, CheckError> {
    let mut numbers = BTreeMap::new();
    let mut blocks = Vec::new();
    for span in &witness.bases {
        let mut entries = Vec::new();
        for (row, u) in span.monomials.iter().enumerate() {
            for (column, v) in span.monomials[..=row].iter().enumerate() {
                let terms = gram(algebra, span.parity, u, v)?;
                let numbered = terms.into_iter().map(|(word, coefficient)| {
                    let next = numbers.len();
                    (*numbers.entry(word).or_insert(next), i128::from(coefficient))
                });
                entries.push(Gram { row, column, terms: numbered.collect() });
            }
        }
        blocks.push(entries);
    }
    let mut words: Vec<(usize, Word)> = numbers.into_iter().map(|(word, number)| (number, word)).collect();
    words.sort();
    Ok(Grams { words: words.into_iter().map(|(_, word)| word).collect(), blocks })
}

/// `s_e` of the module's documentation, over `2^(2f)`.
fn remainder(algebra: &Algebra, witness: &Witness, grams: &Grams, group: usize) -> Result<Combination, CheckError> {
    let mut sums = vec![0i128; grams.words.len()];
    for (entries, factor) in grams.blocks.iter().zip(&witness.factors[group]) {
        for entry in entries {
            // Z_ij = Σ_k L_ik L_jk; each product is below 2^106.
            let (left, right) = (&factor[entry.row], &factor[entry.column]);
            let mut z = 0i128;
            for (a, b) in left.iter().zip(right) {
                z = z.checked_add(i128::from(*a) * i128::from(*b)).ok_or(CheckError::Range)?;
            }
            let multiplicity = if entry.row == entry.column { 1 } else { 2 };
            for (number, coefficient) in &entry.terms {
                let term = z.checked_mul(coefficient * multiplicity).ok_or(CheckError::Range)?;
                sums[*number] = sums[*number].checked_sub(term).ok_or(CheckError::Range)?;
            }
        }
    }
    let mut remainder: Combination = grams.words.iter().cloned().zip(sums).collect();
    let mut add = |letters: &[Letter], times: i128| -> Result<(), CheckError> {
        for (word, coefficient) in algebra.trace(letters)? {
            let sum = remainder.entry(word).or_insert(0);
            let term = times.checked_mul(i128::from(coefficient)).ok_or(CheckError::Range)?;
            *sum = sum.checked_add(term).ok_or(CheckError::Range)?;
        }
        Ok(())
    };
    let multiplier_unit = 1i128 << (2 * witness.factor_bits - witness.multiplier_bits);
    let one = 1i128 << (2 * witness.factor_bits);
    let geometry = witness.geometry;
    let last = geometry.outcomes - 1;
    let mut add_probability = |setting: Setting, b: usize, times: i128| -> Result<(), CheckError> {
        let (state, y) = (Letter::State(setting.x as u8), setting.y as u8);
        if b < last {
            return add(&[state, Letter::Outcome { b: b as u8, y }], times);
        }
        add(&[state], times)?;
        (0..last as u8).try_for_each(|b| add(&[state, Letter::Outcome { b, y }], -times))
    };
    for setting in geometry.settings() {
        for b in 0..geometry.outcomes {
            let multiplier = i128::from(witness.behaviour[setting.x][setting.y][b]);
            add_probability(setting, b, multiplier * multiplier_unit)?;
        }
    }
    match &witness.claim {
        Claim::Guess { target } => add_probability(*target, group, -one)?,
        Claim::Power { target, .. } => {
            for (b, chord) in witness.chords.get(group).into_iter().flatten().enumerate() {
                add_probability(*target, b, i128::from(*chord) * multiplier_unit)?;
            }
        }
        Claim::Score { coefficients } => {
            for setting in geometry.settings() {
                for (b, coefficient) in coefficients[setting.x][setting.y].iter().enumerate() {
                    let times = i128::from(*coefficient).checked_mul(-one).ok_or(CheckError::Range)?;
                    add_probability(setting, b, times)?;
                }
            }
        }
        Claim::Contradiction => {}
    }
    let leakage = witness.leakage.get(group).or(witness.leakage.first());
    for (x, multiplier) in leakage.into_iter().flatten().enumerate() {
        add(&[Letter::Outside, Letter::State(x as u8)], i128::from(*multiplier) * multiplier_unit)?;
    }
    Ok(remainder)
}

/// `κ` of the module's documentation and the part of it that pays for words which should have cancelled, over `2^(2f)`.
fn constant(remainder: &Combination, dimension: u32) -> Result<(i128, i128), CheckError> {
    let dimension = i128::from(dimension);
    let (mut constant, mut paid) = (0i128, 0i128);
    for (word, s) in remainder {
        let weight = if word.holds_state() { 1 } else { dimension };
        let constrained = matches!(word.letters(), [Letter::State(_)] | [Letter::Carrier]);
        let cost = if constrained { -*s } else { s.abs() };
        let cost = cost.checked_mul(weight).ok_or(CheckError::Range)?;
        constant = constant.checked_add(cost).ok_or(CheckError::Range)?;
        if !constrained {
            paid = paid.checked_add(cost).ok_or(CheckError::Range)?;
        }
    }
    Ok((constant, paid))
}

impl CheckedWitness {
    pub fn witness(&self) -> &Witness {
        &self.witness
    }

    /// The theorem alone: the factors, which prove it and are most of the document, are left out. Its digest is still that of the whole.
    pub fn without_proof(mut self) -> Self {
        self.witness.factors = Vec::new();
        self.witness.bases = Vec::new();
        self
    }

    /// `sha256:` digest of the document.
    pub fn digest(&self) -> &str {
        &self.digest
    }

    /// What the words that did not cancel add to the bound: the price of rounding, approximately.
    pub fn rounding_cost(&self) -> f64 {
        self.rounding_cost
    }

    /// Upper bound on the claim: `max_e (κ_e + μ^e·ε) + max ν·p` over the place.
    ///
    /// # Errors
    /// [`CheckError::Inapplicable`] if the witness is for another geometry, needs a stronger reading of the leakage or exactly zero
    /// leakage where it is not, or if the intervals hold no behaviour.
    pub fn bound(&self, place: Place, leakage: &[f64], leakage_holds: LeakageReading) -> Result<CheckedBound, CheckError> {
        self.applies(leakage, leakage_holds)?;
        if let Place::Region(table) = place
            && let Some(value) = fixed::bound(&self.witness, table, leakage)
        {
            return Ok(CheckedBound::new(value));
        }
        let constant = self.largest_constant(leakage)?;
        Ok(CheckedBound::new(constant + self.worst_behaviour(place)?))
    }

    /// Lower bound on every leakage that is uniform, read on average and explains the place: from a contradiction,
    /// `0 ≤ κ + ν·p + ε Σ_x μ_x`. `None` if the multipliers of the leakage are all zero, so that no leakage explains it.
    ///
    /// # Errors
    /// [`CheckError::Inapplicable`] if the witness is not such a contradiction.
    pub fn least_uniform_leakage(&self, place: Place) -> Result<Option<BigRational>, CheckError> {
        let on_average = self.witness.leakage_holds == LeakageReading::OnAverage;
        if self.witness.claim != Claim::Contradiction || !on_average || self.witness.exact.contains(&true) {
            return Err(CheckError::Inapplicable("it is not a contradiction for leaking carriers".into()));
        }
        let constants = self.witness.constants.iter().map(|constant| self.constant(*constant));
        let value = constants.max().ok_or(CheckError::Range)? + self.worst_behaviour(place)?;
        let slope: BigRational = self.witness.leakage.iter().flatten().map(|multiplier| self.unit(*multiplier)).sum();
        Ok(slope.is_positive().then(|| -value / slope))
    }

    /// `κ`, with the declared leakage in it, and `ν` of the affine bound `Σ_e c_e ≤ κ + ν·p`, for use round by round.
    ///
    /// # Errors
    /// [`CheckError::Inapplicable`] as for [`Self::bound`].
    pub fn affine(&self, leakage: &[f64], leakage_holds: LeakageReading) -> Result<(BigRational, Table<BigRational>), CheckError> {
        self.applies(leakage, leakage_holds)?;
        let constant = self.largest_constant(leakage)?;
        let rational = |values: &Vec<i64>| values.iter().map(|value| self.unit(*value)).collect();
        Ok((constant, self.witness.behaviour.iter().map(|table| table.iter().map(rational).collect()).collect()))
    }

    /// `max_e (κ_e + μ^e·ε)`.
    fn largest_constant(&self, leakage: &[f64]) -> Result<BigRational, CheckError> {
        let constants = self.witness.constants.iter().enumerate().map(|(group, constant)| {
            let multipliers = self.witness.leakage.get(group).or(self.witness.leakage.first());
            let products =
                multipliers.into_iter().flatten().zip(leakage).map(|(multiplier, epsilon)| self.unit(*multiplier) * decimal(*epsilon));
            self.constant(*constant) + products.sum::<BigRational>()
        });
        constants.max().ok_or(CheckError::Range)
    }

    fn unit(&self, integer: i64) -> BigRational {
        dyadic(integer, self.witness.multiplier_bits)
    }

    fn constant(&self, constant: Constant) -> BigRational {
        dyadic(constant.0, 2 * self.witness.factor_bits)
    }

    fn applies(&self, leakage: &[f64], leakage_holds: LeakageReading) -> Result<(), CheckError> {
        let no = |what: &str| Err(CheckError::Inapplicable(what.to_owned()));
        if leakage.len() != self.witness.geometry.preparations {
            return no("it has another number of preparations");
        }
        if self.witness.leakage_holds == LeakageReading::EveryEmission && leakage_holds == LeakageReading::OnAverage {
            return no("it needs the leakage to hold for every emission");
        }
        if self.witness.exact.iter().zip(leakage).any(|(exact, epsilon)| *exact && *epsilon != 0.0) {
            return no("it takes a leakage to be exactly zero that is not");
        }
        Ok(())
    }

    /// `max ν·p` over the place.
    fn worst_behaviour(&self, place: Place) -> Result<BigRational, CheckError> {
        let geometry = self.witness.geometry;
        if let Place::Scores(scores) = place {
            return self.over_scores(scores);
        }
        let mut sum = BigRational::zero();
        for setting in geometry.settings() {
            let weights = &self.witness.behaviour[setting.x][setting.y];
            let missing = || CheckError::Inapplicable("the behaviour has another shape".into());
            sum += match place {
                Place::Behaviour(table) => {
                    let probabilities = table.get(setting.x).and_then(|t| t.get(setting.y)).ok_or_else(missing)?;
                    self.at_probabilities(weights, probabilities)?
                }
                Place::Region(table) => {
                    let intervals = table.get(setting.x).and_then(|t| t.get(setting.y)).ok_or_else(missing)?;
                    self.over_intervals(weights, intervals)?
                }
                Place::Scores(_) => return Err(missing()),
            };
        }
        Ok(sum)
    }

    /// Upper bound on `ν·p` over the behaviours that reach the scores: `Σ_{xy} max_b (ν + Σ_k λ_k c^k)_{xyb} − Σ_k λ_k s_k`, which holds for every
    /// `λ ≥ 0` (see [`crate::score`]). The λ that is used makes `ν + Σ λ c` as small as possible in the least squares sense, rounded to the
    /// unit of the multipliers: where ν is a combination of scores, as in a witness that was made for them, nothing is lost.
    fn over_scores(&self, scores: &[Score]) -> Result<BigRational, CheckError> {
        if !scores.iter().all(|score| fits(&score.coefficients, self.witness.geometry)) {
            return Err(CheckError::Inapplicable("the scores have another shape".into()));
        }
        let multipliers = self.score_multipliers(scores);
        let mut sum = BigRational::zero();
        for setting in self.witness.geometry.settings() {
            let weight = |(b, nu): (usize, &i64)| {
                let of_scores = scores.iter().zip(&multipliers).filter_map(|(score, lambda)| Some((score.at(setting).get(b)?, lambda)));
                BigInt::from(*nu) + of_scores.map(|(c, lambda)| BigInt::from(*c) * lambda).sum::<BigInt>()
            };
            let weights = self.witness.behaviour[setting.x][setting.y].iter().enumerate().map(weight);
            sum += dyadic(weights.max().ok_or(CheckError::Range)?, self.witness.multiplier_bits);
        }
        let paid = scores.iter().zip(&multipliers).map(|(score, lambda)| self.unit(*lambda) * decimal(score.at_least));
        Ok(sum - paid.sum::<BigRational>())
    }

    /// Multipliers `λ ≥ 0` of scores, over `2^m`. Any would do: this choice is made in floating point.
    fn score_multipliers(&self, scores: &[Score]) -> Vec<i64> {
        let cells = self.witness.behaviour.iter().flatten().flatten();
        let right = DVector::from_iterator(cells.clone().count(), cells.map(|nu| -(*nu as f64)));
        let coefficients = scores.iter().flat_map(|score| score.coefficients.iter().flatten().flatten().map(|c| *c as f64));
        let left = DMatrix::from_iterator(right.len(), scores.len(), coefficients);
        let solved = left.svd(true, true).solve(&right, 1e-9).ok();
        let whole = |value: f64| value.round().clamp(0.0, MAX_INTEGER as f64) as i64;
        solved.map_or_else(|| vec![0; scores.len()], |lambda| lambda.iter().map(|value| whole(*value)).collect())
    }

    fn at_probabilities(&self, weights: &[i64], probabilities: &[f64]) -> Result<BigRational, CheckError> {
        let (Some((last, first)), true) = (weights.split_last(), weights.len() == probabilities.len()) else {
            return Err(CheckError::Inapplicable("the behaviour has another shape".into()));
        };
        // ν·p with the last probability replaced by one minus the others.
        let terms = first.iter().zip(probabilities).map(|(weight, p)| self.unit(weight - last) * decimal(*p));
        Ok(terms.sum::<BigRational>() + self.unit(*last))
    }

    /// The linear programme `max ν·p`, `low ≤ p ≤ high`, `Σ p = 1`: start at the lows and give what is left to the largest `ν`.
    fn over_intervals(&self, weights: &[i64], intervals: &[[f64; 2]]) -> Result<BigRational, CheckError> {
        if weights.len() != intervals.len() {
            return Err(CheckError::Inapplicable("the region has another shape".into()));
        }
        let mut left = BigRational::one() - intervals.iter().map(|[low, _]| decimal(*low)).sum::<BigRational>();
        let mut sum: BigRational = weights.iter().zip(intervals).map(|(weight, [low, _])| self.unit(*weight) * decimal(*low)).sum();
        let mut order: Vec<usize> = (0..weights.len()).collect();
        order.sort_by_key(|b| std::cmp::Reverse(weights[*b]));
        let empty = || Err(CheckError::Inapplicable("the intervals hold no behaviour".into()));
        if left.is_negative() {
            return empty();
        }
        for b in order {
            let [low, high] = intervals[b];
            let room = decimal(high) - decimal(low);
            if room.is_negative() {
                return empty();
            }
            let given = room.min(left.clone());
            sum += self.unit(weights[b]) * &given;
            left -= given;
        }
        if left.is_positive() { empty() } else { Ok(sum) }
    }
}

/// Whether a bound proves that no model of the declaration has a behaviour in the place: a contradiction's if it is below zero, and
/// a guessing probability's if it is below what guessing the likeliest outcome reaches anyway, `P_g(t) ≥ p(b|t)` for every b.
///
/// Such a bound on a guessing probability says nothing about an adversary; it must never be taken for entropy.
pub fn proves_contradiction(witness: &CheckedWitness, bound: &CheckedBound, place: Place) -> bool {
    match &witness.witness.claim {
        Claim::Contradiction => bound.value.is_negative(),
        Claim::Guess { target } => {
            !surely_above(bound, place, *target) && least_likeliest(place, *target).is_some_and(|least| bound.value < least)
        }
        Claim::Score { .. } | Claim::Power { .. } => false,
    }
}

/// Whether a bound is so far above the likeliest outcome of a region that nothing has to be compared exactly.
fn surely_above(bound: &CheckedBound, place: Place, target: Setting) -> bool {
    let Place::Region(table) = place else { return false };
    let intervals = table.get(target.x).and_then(|t| t.get(target.y));
    // Decimal and binary fraction, and the bound and its rounding, are a few units in the last place apart.
    intervals.is_some_and(|intervals| intervals.iter().all(|[low, _]| bound.rounded_up > low + 1e-14))
}

/// Lower bound on `max_b p(b|t)` over the place; `None` if the place has no such setting.
fn least_likeliest(place: Place, target: Setting) -> Option<BigRational> {
    match place {
        Place::Behaviour(table) => {
            let (_, first) = table.get(target.x)?.get(target.y)?.split_last()?;
            let stated: Vec<BigRational> = first.iter().map(|p| decimal(*p)).collect();
            let last = BigRational::one() - stated.iter().sum::<BigRational>();
            stated.into_iter().chain([last]).max()
        }
        Place::Region(table) => table.get(target.x)?.get(target.y)?.iter().map(|[low, _]| decimal(*low)).max(),
        // Whatever the distribution, one outcome has its share.
        Place::Scores(scores) => {
            let outcomes = scores.first()?.coefficients.get(target.x)?.get(target.y)?.len();
            Some(BigRational::new(1.into(), outcomes.into()))
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::{
        relaxation::{cells::Cut, parity::Parity, word::Monomial},
        witness::witness::Span,
    };

    /// Uniform numbers, splitmix64.
    struct Numbers(u64);

    impl Numbers {
        /// In [−1, 1).
        fn next(&mut self) -> f64 {
            self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
            let mut z = self.0;
            z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
            z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
            ((z ^ (z >> 31)) >> 11) as f64 / 2f64.powi(52) - 1.0
        }

        /// From −size to size.
        fn integer(&mut self, size: i64) -> i64 {
            (self.next() * size as f64).round() as i64
        }
    }

    const GEOMETRY: Geometry = Geometry { preparations: 3, measurements: 2, outcomes: 3, carrier_dimension: 2 };

    /// Explicit states, measurements and a carrier, as matrices.
    struct Model {
        states: Vec<DMatrix<f64>>,
        /// `[y][b]`, the last outcome included.
        outcomes: Vec<Vec<DMatrix<f64>>>,
        carrier: DMatrix<f64>,
    }

    impl Model {
        /// In seven dimensions, the first two of which are the carrier; preparation 1 does not leak.
        fn new(numbers: &mut Numbers) -> Self {
            let side = 7;
            let carrier = DMatrix::from_fn(side, side, |i, j| if i == j && i < 2 { 1.0 } else { 0.0 });
            let mut state = |leaks: bool| {
                let vector = DVector::from_fn(side, |i, _| if leaks || i < 2 { numbers.next() } else { 0.0 }).normalize();
                &vector * vector.transpose()
            };
            let states = [true, false, true].map(&mut state).into();
            let mut measurement = || {
                let basis = DMatrix::from_fn(side, side, |_, _| numbers.next()).qr().q();
                let projector = |b: usize| {
                    (0..side).filter(|column| column % 3 == b).map(|column| basis.column(column) * basis.column(column).transpose()).sum()
                };
                (0..3).map(projector).collect()
            };
            Self { states, outcomes: vec![measurement(), measurement()], carrier }
        }

        fn product(&self, letters: &[Letter]) -> DMatrix<f64> {
            let one = DMatrix::identity(7, 7);
            letters.iter().fold(one.clone(), |product, letter| match letter {
                Letter::State(x) => product * &self.states[usize::from(*x)],
                Letter::Outcome { b, y } => product * &self.outcomes[usize::from(*y)][usize::from(*b)],
                Letter::Carrier => product * &self.carrier,
                Letter::Outside => product * (&one - &self.carrier),
            })
        }

        fn probability(&self, setting: Setting, b: usize) -> f64 {
            (&self.states[setting.x] * &self.outcomes[setting.y][b]).trace()
        }

        /// `Σ c p`.
        fn score(&self, coefficients: &Table<i64>) -> f64 {
            let cells = GEOMETRY.settings().flat_map(|setting| (0..3).map(move |b| (setting, b)));
            cells.map(|(setting, b)| coefficients[setting.x][setting.y][b] as f64 * self.probability(setting, b)).sum()
        }
    }

    fn table(numbers: &mut Numbers, size: i64) -> Table<i64> {
        (0..3).map(|_| (0..2).map(|_| (0..3).map(|_| numbers.integer(size)).collect()).collect()).collect()
    }

    /// A document with random integers, which prove something, if nothing good.
    fn document(numbers: &mut Numbers, claim: Claim, leakage_holds: LeakageReading) -> Witness {
        let span = |parity, words: &[&str]| Span { parity, monomials: words.iter().map(|word| word.parse().unwrap()).collect() };
        let bases = vec![
            span(Parity::Even, &["R0", "R1", "V", "V M0|0", "R0 M1|1", "N R2"]),
            span(Parity::Odd, &["V M0|0", "R0 M1|1", "R1 M0|0", "N R2"]),
        ];
        let groups = claim.groups(GEOMETRY);
        let rows = if leakage_holds == LeakageReading::OnAverage { 1 } else { groups };
        let mut factor = |side: usize| (0..side).map(|i| (0..=i).map(|_| numbers.integer(900)).collect()).collect();
        let factors = (0..groups).map(|_| vec![factor(6), factor(4)]).collect();
        Witness {
            format: FORMAT.into(),
            geometry: GEOMETRY,
            exact: vec![false, true, false],
            leakage_holds,
            claim,
            multiplier_bits: 12,
            behaviour: table(numbers, 9000),
            leakage: (0..rows).map(|_| [1, 0, 1].map(|leaks| leaks * numbers.integer(9000).abs()).to_vec()).collect(),
            chords: vec![],
            factor_bits: 10,
            constants: vec![],
            remainders: vec![],
            bases,
            factors,
        }
    }

    const TARGET: Setting = Setting { x: 2, y: 1 };

    /// Every claim, with chords far below any entropy.
    fn documents(numbers: &mut Numbers) -> Vec<Witness> {
        use LeakageReading::{EveryEmission, OnAverage};
        let coefficients = table(numbers, 5);
        let cuts = vec![Some(Cut { first: 0, second: 2, at: 1000 }), None, None];
        let mut power = document(numbers, Claim::Power { target: TARGET, power: 1 << 20, cuts }, EveryEmission);
        power.chords = (0..2).map(|_| (0..3).map(|_| -numbers.integer(9000).abs()).collect()).collect();
        let guess = Claim::Guess { target: TARGET };
        vec![
            document(numbers, guess.clone(), OnAverage),
            document(numbers, guess, EveryEmission),
            document(numbers, Claim::Score { coefficients }, OnAverage),
            document(numbers, Claim::Contradiction, OnAverage),
            power,
        ]
    }

    /// The identity of the module's documentation, evaluated with the matrices of explicit models, where nothing but products and
    /// traces of matrices is needed; and that the constants pay for the remainder.
    #[test]
    fn the_identity_holds_on_explicit_matrices() {
        let mut numbers = Numbers(11);
        for witness in documents(&mut numbers) {
            let algebra = Algebra::new(GEOMETRY, &witness.exact);
            let grams = gram_matrices(&algebra, &witness).unwrap();
            let constants = complete(witness.clone()).unwrap().witness.constants;
            assert_eq!(constants.len(), witness.claim.groups(GEOMETRY));
            for _ in 0..3 {
                let model = Model::new(&mut numbers);
                for (group, constant) in constants.iter().enumerate() {
                    let claimed = match &witness.claim {
                        Claim::Guess { target } => model.probability(*target, group),
                        Claim::Score { coefficients } => model.score(coefficients),
                        Claim::Power { target, .. } => {
                            let chord = witness.chords[group].iter().enumerate();
                            -chord.map(|(b, l)| *l as f64 / 2f64.powi(12) * model.probability(*target, b)).sum::<f64>()
                        }
                        Claim::Contradiction => 0.0,
                    };
                    let row = if witness.leakage.len() == 1 { 0 } else { group };
                    let leaking = |(x, multiplier): (usize, &i64)| *multiplier as f64 * (1.0 - (&model.carrier * &model.states[x]).trace());
                    let multiplied = model.score(&witness.behaviour) + witness.leakage[row].iter().enumerate().map(leaking).sum::<f64>();
                    let mut squares = 0.0;
                    for (span, factor) in witness.bases.iter().zip(&witness.factors[group]) {
                        let sign = if span.parity == Parity::Even { 1.0 } else { -1.0 };
                        let elements = span.monomials.iter().map(|u| model.product(u.letters()));
                        let elements: Vec<DMatrix<f64>> = elements.map(|u| &u + u.transpose() * sign).collect();
                        // Column k of L belongs to the square of Σ_i L_ik (u_i ± u_i†).
                        let square = |k: usize| {
                            let column = (k..elements.len()).map(|i| &elements[i] * (factor[i][k] as f64 / 2f64.powi(10)));
                            let root = column.sum::<DMatrix<f64>>();
                            (root.transpose() * root).trace()
                        };
                        squares += (0..elements.len()).map(square).sum::<f64>();
                    }
                    let expected = multiplied / 2f64.powi(12) - claimed - squares;
                    let remainder = remainder(&algebra, &witness, &grams, group).unwrap();
                    // The last outcome is no letter: as one, its words would be paid for instead of cancelling.
                    let exist = |word: &Word| algebra.check_letters(&Monomial::new(word.letters())).is_ok();
                    assert!(remainder.keys().all(exist), "{:?}", witness.claim);
                    let found: f64 = remainder.iter().map(|(word, s)| *s as f64 * model.product(word.letters()).trace()).sum();
                    let found = found / 2f64.powi(20);
                    assert!((found - expected).abs() < 1e-9 * (1.0 + squares), "{:?} {group}: {found} {expected}", witness.claim);
                    assert!(constant.0 as f64 / 2f64.powi(20) >= -expected - 1e-9 * squares, "{:?} {group}", witness.claim);
                }
            }
        }
    }

    /// By hand, for a carrier of three dimensions: only `R_x` and `V` may count in favour of the bound, and without a state a word weighs
    /// three times as much.
    #[test]
    fn words_that_do_not_cancel_are_paid_for() {
        let word = |text: &str| {
            let monomial: Monomial = text.parse().unwrap();
            let terms = Algebra::new(GEOMETRY, &[false; 3]).trace(monomial.letters()).unwrap();
            assert_eq!(terms.len(), 1);
            terms.into_keys().next().unwrap()
        };
        let of = |terms: &[(&str, i128)]| constant(&terms.iter().map(|(text, s)| (word(text), *s)).collect(), 3);
        assert_eq!(of(&[("R0", -5), ("R1", 2), ("V", -7)]), Ok((5 - 2 + 21, 0)));
        assert_eq!(of(&[("R0", 5), ("V", 7)]), Ok((-26, 0)));
        assert_eq!(of(&[("R0 M0|0", -5), ("R0 M1|0", 4), ("V M0|1", -2), ("V M0|0", 3)]), Ok((5 + 4 + 6 + 9, 24)));
        assert_eq!(of(&[("R0", 100), ("N R0", -3), ("R0 R1", 2)]), Ok((-95, 5)));
        assert_eq!(of(&[("V", i128::MAX / 2)]), Err(CheckError::Range));
    }

    #[test]
    fn the_price_of_rounding_is_the_largest_remainder() {
        for witness in documents(&mut Numbers(5)) {
            let checked = complete(witness).unwrap();
            let largest = checked.witness.remainders.iter().map(|remainder| remainder.0).max().unwrap();
            assert!(largest > 0);
            assert_eq!(checked.rounding_cost(), largest as f64 / f64::from(1 << 20));
            let mut changed = checked.witness.clone();
            assert_eq!(check(&changed), Ok(checked));
            changed.remainders[0].0 += 1;
            assert_eq!(check(&changed), Err(CheckError::Constants));
        }
    }

    /// What is wrong with one document after one change.
    fn fault(witness: &Witness, change: impl Fn(&mut Witness)) -> String {
        let mut changed = witness.clone();
        change(&mut changed);
        check_shape(&changed).err().map_or_else(String::new, |fault| fault.to_string())
    }

    #[test]
    fn malformed_documents_are_refused() {
        let documents = documents(&mut Numbers(3));
        let [guess, every_emission, score, _, power] = documents.as_slice() else { panic!() };
        for witness in &documents {
            assert_eq!(fault(witness, |_| {}), "");
        }
        type Change = fn(&mut Witness);
        fn target(witness: &mut Witness) -> &mut Setting {
            match &mut witness.claim {
                Claim::Guess { target } | Claim::Power { target, .. } => target,
                Claim::Score { .. } | Claim::Contradiction => panic!(),
            }
        }
        fn beta(witness: &mut Witness) -> &mut u32 {
            let Claim::Power { power, .. } = &mut witness.claim else { panic!() };
            power
        }
        fn coefficients(witness: &mut Witness) -> &mut Table<i64> {
            let Claim::Score { coefficients } = &mut witness.claim else { panic!() };
            coefficients
        }
        /// A document without squares, for many groups of a power claim.
        fn many_cells(witness: &mut Witness, entries: usize) {
            let Claim::Power { cuts, .. } = &mut witness.claim else { panic!() };
            *cuts = vec![None; entries];
            witness.factors = vec![witness.factors[0].clone(); entries];
            witness.leakage = vec![witness.leakage[0].clone(); entries];
        }
        fn one_block(witness: &mut Witness, side: usize) {
            witness.bases = vec![Span { parity: Parity::Even, monomials: vec!["V".parse().unwrap(); side] }];
            witness.factors = vec![vec![(0..side).map(|i| vec![0; i + 1]).collect()]; 3];
        }
        fn one_monomial(witness: &mut Witness, letters: usize) {
            witness.bases[1].monomials[2] = Monomial::new(vec![Letter::Carrier; letters]);
        }
        let cases: [(&Witness, Change, &str); 46] = [
            (guess, |w| w.format.push('0'), "unknown witness format"),
            (guess, |w| w.geometry.outcomes = 1, "outcomes"),
            (guess, |w| w.exact.truncate(2), "\"exact\""),
            (guess, |w| drop(w.behaviour.pop()), "\"behaviour\""),
            (guess, |w| drop(w.behaviour[2].pop()), "\"behaviour\""),
            (guess, |w| w.behaviour[0][1].truncate(2), "\"behaviour\""),
            (guess, |w| target(w).x = 3, "no such target"),
            (guess, |w| target(w).y = 2, "no such target"),
            (power, |w| target(w).x = 3, "no such target"),
            (power, |w| target(w).y = 2, "no such target"),
            (power, |w| *beta(w) = 0, "the power"),
            (power, |w| *beta(w) = 1, ""),
            (power, |w| *beta(w) = 1 << 30, ""),
            (power, |w| *beta(w) = (1 << 30) + 1, "the power"),
            (power, |w| many_cells(w, 128), ""),
            (power, |w| many_cells(w, 129), "too many cells"),
            (score, |w| coefficients(w)[1][1].truncate(2), "\"coefficients\""),
            (guess, |w| w.leakage.push(vec![0; 3]), "\"leakage\""),
            (guess, |w| w.leakage[0].truncate(2), "\"leakage\""),
            (every_emission, |w| drop(w.leakage.pop()), "\"leakage\""),
            (every_emission, |w| w.leakage[2].truncate(2), "\"leakage\""),
            (guess, |w| w.leakage[0][2] = -1, "negative"),
            (guess, |w| w.leakage[0] = vec![0; 3], ""),
            (guess, |w| w.leakage[0][1] = 1, "exactly zero"),
            (guess, |w| (w.multiplier_bits, w.factor_bits) = (52, 52), ""),
            (guess, |w| w.multiplier_bits = 53, "bits"),
            (guess, |w| (w.multiplier_bits, w.factor_bits) = (53, 52), "bits"),
            (guess, |w| w.factor_bits = 53, "bits"),
            (guess, |w| (w.multiplier_bits, w.factor_bits) = (2, 1), ""),
            (guess, |w| (w.multiplier_bits, w.factor_bits) = (3, 1), "bits"),
            (guess, |w| one_block(w, 512), ""),
            (guess, |w| one_block(w, 513), "too large"),
            (guess, |w| one_monomial(w, 4), ""),
            (guess, |w| one_monomial(w, 5), "too long"),
            (guess, |w| one_monomial(w, 6), "too long"),
            (guess, |w| drop(w.factors.pop()), "\"factors\""),
            (guess, |w| drop(w.factors[1].pop()), "\"factors\""),
            (guess, |w| drop(w.factors[1][1].pop()), "\"factors\""),
            (guess, |w| w.factors[1][1][2].push(0), "\"factors\""),
            (guess, |w| w.factors[1][0][0].clear(), "\"factors\""),
            (guess, |w| w.behaviour[0][0][1] = -(1 << 53), "out of range"),
            (guess, |w| w.behaviour[0][0][1] = 1 - (1 << 53), ""),
            (guess, |w| w.leakage[0][2] = 1 << 53, "out of range"),
            (guess, |w| w.factors[2][1][3][0] = i64::MIN, "out of range"),
            (power, |w| w.chords[1][1] = 1 << 53, "out of range"),
            (score, |w| coefficients(w)[2][1][2] = 1 << 53, "out of range"),
        ];
        for (number, (witness, change, expected)) in cases.iter().enumerate() {
            let found = fault(witness, change);
            assert!(found.contains(expected) && found.is_empty() == expected.is_empty(), "{number}: \"{found}\", not \"{expected}\"");
        }
    }

    #[test]
    fn chords_lie_below_the_entropy_or_are_refused() {
        let mut witness = documents(&mut Numbers(7)).pop().unwrap();
        witness.multiplier_bits = 40;
        let refused = |witness: &Witness| check_chords(witness).unwrap_err();
        assert_eq!(check_chords(&witness), Ok(()));
        // Certain outcomes have no entropy, and a chord may be as high as that.
        witness.chords = vec![vec![0; 3]; 2];
        assert_eq!(check_chords(&witness), Ok(()));
        for (cell, b) in [(0, 0), (0, 1), (0, 2), (1, 0), (1, 1), (1, 2)] {
            let mut high = witness.clone();
            high.chords[cell][b] = 1;
            // The vertex at outcome 0 was cut off from the first cell, that at outcome 2 from the second.
            let cut_off = (cell, b) == (0, 0) || (cell, b) == (1, 2);
            assert_eq!(check_chords(&high).is_err(), !cut_off, "{cell} {b}");
        }
        // At the cut, outcome 2 has the share 1000/4096. With β = 2⁻¹⁰ the entropy is Σ p (1 − p^β)/β, here with the standard library's functions.
        let share = 1000.0 / 4096.0f64;
        let entropy: f64 = [share, 1.0 - share].iter().map(|p| p * (1.0 - p.powf(2f64.powi(-10))) * 1024.0).sum();
        let highest = (entropy / (1.0 - share) * 2f64.powi(40)) as i64;
        witness.chords[0] = vec![highest - 4, 0, 0];
        assert_eq!(check_chords(&witness), Ok(()));
        witness.chords[0] = vec![highest + 4, 0, 0];
        assert_eq!(refused(&witness), CheckError::Chord);
        let shape = |change: fn(&mut Witness)| {
            let mut changed = witness.clone();
            change(&mut changed);
            refused(&changed).to_string()
        };
        assert!(shape(|w| drop(w.chords.pop())).contains("\"chords\""));
        assert!(shape(|w| w.chords[1].truncate(2)).contains("\"chords\""));
        assert!(shape(|w| w.claim = Claim::Contradiction).contains("only a power claim"));
        assert!(
            shape(|w| if let Claim::Power { cuts, .. } = &mut w.claim {
                cuts.truncate(2)
            })
            .contains("cover")
        );
    }

    /// A theorem that nobody proved, for tests of what is done with one: two outcomes, one measurement, `κ` in quarters.
    fn stated(claim: Claim, behaviour: [[i64; 2]; 2], leakage: &[[i64; 2]], constants: &[i128]) -> CheckedWitness {
        let mut witness = document(&mut Numbers(1), claim, LeakageReading::OnAverage);
        witness.geometry = Geometry { preparations: 2, measurements: 1, outcomes: 2, carrier_dimension: 1 };
        witness.exact = vec![false; 2];
        (witness.multiplier_bits, witness.factor_bits) = (2, 1);
        witness.behaviour = behaviour.map(|weights| vec![weights.to_vec()]).to_vec();
        witness.leakage = leakage.iter().map(|row| row.to_vec()).collect();
        if leakage.len() > 1 {
            witness.leakage_holds = LeakageReading::EveryEmission;
        }
        witness.constants = constants.iter().map(|constant| Constant(*constant)).collect();
        CheckedWitness { digest: witness.digest(), witness, rounding_cost: 0.0 }
    }

    fn ratio(n: i64, d: i64) -> BigRational {
        BigRational::new(n.into(), d.into())
    }

    const FIRST: Setting = Setting { x: 0, y: 0 };

    #[test]
    fn a_bound_is_the_affine_function_at_the_place() {
        use LeakageReading::{EveryEmission, OnAverage};
        // κ = (3/4, 1/4), μ = (1/4, 2/4) for both groups, ν = (5, 1; −1, 2)/4.
        let witness = stated(Claim::Guess { target: FIRST }, [[5, 1], [-1, 2]], &[[1, 2]], &[3, 1]);
        // The last probability is one minus the others, whatever is written there.
        let behaviour = vec![vec![vec![0.75, 0.3]], vec![vec![0.5, 0.5]]];
        let bound = witness.bound(Place::Behaviour(&behaviour), &[0.5, 0.25], OnAverage).unwrap();
        let expected = ratio(3, 4) + ratio(1, 8) + ratio(1, 8) + ratio(15 + 1, 16) + ratio(-1 + 2, 8);
        assert_eq!(bound.exact(), &expected);
        assert_eq!(bound.rounded_up(), 2.125);
        assert_eq!(
            witness.affine(&[0.5, 0.25], OnAverage).unwrap(),
            (ratio(1, 1), vec![vec![vec![ratio(5, 4), ratio(1, 4)]], vec![vec![ratio(-1, 4), ratio(1, 2)]]])
        );
        // Each group has its own leakage: 3/4 + 1/2 + 1/2 against 1/4 + 3 + 1.
        let witness = stated(Claim::Guess { target: FIRST }, [[0, 0], [0, 0]], &[[4, 8], [24, 16]], &[3, 1]);
        let bound = witness.bound(Place::Behaviour(&behaviour), &[0.5, 0.25], EveryEmission).unwrap();
        assert_eq!(bound.exact(), &ratio(17, 4));
        let region = vec![vec![vec![[0.0, 1.0]; 2]]; 2];
        let bound = witness.bound(Place::Region(&region), &[0.5, 0.25], EveryEmission).unwrap();
        assert!(*bound.exact() >= ratio(17, 4) && bound.rounded_up() < 4.25 + 1e-14);
    }

    #[test]
    fn a_witness_applies_where_its_assumptions_hold() {
        use LeakageReading::{EveryEmission, OnAverage};
        let claim = || Claim::Guess { target: FIRST };
        let why =
            |witness: &CheckedWitness, leakage: &[f64], reading| witness.applies(leakage, reading).err().map(|fault| fault.to_string());
        let average = stated(claim(), [[0, 0], [0, 0]], &[[1, 2]], &[3, 1]);
        assert_eq!(why(&average, &[0.1, 0.1], OnAverage), None);
        assert_eq!(why(&average, &[0.1, 0.1], EveryEmission), None);
        assert!(why(&average, &[0.1], OnAverage).unwrap().contains("number of preparations"));
        let every = stated(claim(), [[0, 0], [0, 0]], &[[1, 2], [1, 2]], &[3, 1]);
        assert_eq!(why(&every, &[0.1, 0.1], EveryEmission), None);
        assert!(why(&every, &[0.1, 0.1], OnAverage).unwrap().contains("every emission"));
        let mut exact = stated(claim(), [[0, 0], [0, 0]], &[[0, 2]], &[3, 1]);
        exact.witness.exact = vec![true, false];
        assert_eq!(why(&exact, &[0.0, 0.1], OnAverage), None);
        assert!(why(&exact, &[1e-300, 0.1], OnAverage).unwrap().contains("exactly zero"));
        // Every way to evaluate asks first.
        let behaviour = vec![vec![vec![0.75, 0.25]]; 2];
        assert!(exact.bound(Place::Behaviour(&behaviour), &[0.1, 0.1], OnAverage).is_err());
        assert!(exact.affine(&[0.1, 0.1], OnAverage).is_err());
    }

    /// All corners of a box of distributions: all outcomes but one at an end of their interval.
    fn corners(intervals: &[[f64; 2]]) -> Vec<Vec<BigRational>> {
        let mut found = Vec::new();
        for free in 0..intervals.len() {
            for ends in 0..1 << intervals.len() {
                let mut p: Vec<BigRational> = intervals.iter().enumerate().map(|(b, ends_of)| decimal(ends_of[ends >> b & 1])).collect();
                p[free] = BigRational::zero();
                p[free] = BigRational::one() - p.iter().sum::<BigRational>();
                if (decimal(intervals[free][0])..=decimal(intervals[free][1])).contains(&p[free]) {
                    found.push(p);
                }
            }
        }
        found
    }

    /// A linear function is largest at a corner; and the fast sum is above the exact one by next to nothing.
    #[test]
    fn the_worst_behaviour_of_a_region_is_at_a_corner() {
        let mut numbers = Numbers(23);
        let mut interval = || {
            let middle = 1.0 / 3.0 + 0.2 * numbers.next();
            [middle - 0.15 - 0.1 * numbers.next(), middle + 0.15 + 0.1 * numbers.next()]
                .map(|end| ((end * 1e4).round() / 1e4).clamp(0.0, 1.0))
        };
        let regions: Vec<Table<[f64; 2]>> =
            (0..8).map(|_| (0..3).map(|_| (0..2).map(|_| (0..3).map(|_| interval()).collect()).collect()).collect()).collect();
        for mut witness in documents(&mut Numbers(29)) {
            for (multiplier_bits, factor_bits) in [(12, 10), (40, 52), (0, 30)] {
                (witness.multiplier_bits, witness.factor_bits) = (multiplier_bits, factor_bits);
                let checked = complete(witness.clone()).unwrap();
                for region in &regions {
                    let Some(corner_values) = region
                        .iter()
                        .flatten()
                        .zip(witness.behaviour.iter().flatten())
                        .map(|(intervals, weights)| {
                            let value = |p: Vec<BigRational>| {
                                weights.iter().zip(p).map(|(weight, p)| checked.unit(*weight) * p).sum::<BigRational>()
                            };
                            corners(intervals).into_iter().map(value).max()
                        })
                        .collect::<Option<Vec<_>>>()
                    else {
                        assert!(checked.worst_behaviour(Place::Region(region)).is_err());
                        continue;
                    };
                    let worst = corner_values.into_iter().sum::<BigRational>();
                    assert_eq!(checked.worst_behaviour(Place::Region(region)), Ok(worst.clone()));
                    let leakage = [0.01, 0.0, 0.003];
                    let exact = checked.largest_constant(&leakage).unwrap() + worst;
                    let fast = fixed::bound(&checked.witness, region, &leakage).unwrap();
                    let size =
                        witness.behaviour.iter().chain([&witness.leakage]).flatten().flatten().map(|weight| weight.abs()).sum::<i64>();
                    let allowed = size as f64 * 2f64.powi(-50 - multiplier_bits as i32) + 2f64.powi(-59);
                    let given_away = (&fast - &exact).to_f64().unwrap();
                    assert!(fast >= exact && given_away <= allowed, "{given_away} {allowed}");
                    assert_eq!(checked.bound(Place::Region(region), &leakage, LeakageReading::EveryEmission).unwrap().value, fast);
                }
            }
        }
    }

    #[test]
    fn places_of_another_shape_or_without_a_behaviour_are_refused() {
        let witness = stated(Claim::Contradiction, [[5, 1], [-1, 2]], &[[1, 2]], &[3]);
        let why = |place: Place| witness.bound(place, &[0.0; 2], LeakageReading::OnAverage).unwrap_err().to_string();
        assert!(why(Place::Behaviour(&vec![vec![vec![0.5, 0.5]]])).contains("another shape"));
        assert!(why(Place::Behaviour(&vec![vec![vec![0.5, 0.25, 0.25]]; 2])).contains("another shape"));
        assert!(why(Place::Region(&vec![vec![], vec![]])).contains("another shape"));
        assert!(why(Place::Region(&vec![vec![vec![[0.0, 1.0]; 3]]; 2])).contains("another shape"));
        for intervals in [[[0.6, 0.7], [0.5, 0.6]], [[0.1, 0.4], [0.1, 0.5]], [[0.6, 0.5], [0.1, 0.9]]] {
            let region = vec![vec![intervals.to_vec()], vec![vec![[0.0, 1.0]; 2]]];
            assert!(why(Place::Region(&region)).contains("no behaviour"), "{intervals:?}");
            assert_eq!(fixed::bound(&witness.witness, &region, &[0.0; 2]), None, "{intervals:?}");
        }
        let score = Score { coefficients: vec![vec![vec![1, 0]]], at_least: 0.5 };
        assert!(why(Place::Scores(&[score])).contains("another shape"));
        // One behaviour is enough.
        let point = vec![vec![vec![[0.75, 0.75], [0.25, 0.25]]]; 2];
        assert_eq!(witness.worst_behaviour(Place::Region(&point)), Ok(ratio(15 + 1 - 3 + 2, 16)));
    }

    #[test]
    fn scores_bound_the_behaviours_that_reach_them() {
        // ν = −2 c − 3 c': nothing is lost, and constants cost what they are.
        let (one, other) = ([[1, 0], [0, 1]], [[0, 0], [-2, 3]]);
        let behaviour = [[-2, 0], [6, -2 - 9]];
        let witness = stated(Claim::Contradiction, behaviour, &[[0, 0]], &[0]);
        let score = |c: [[i64; 2]; 2], at_least| Score { coefficients: c.map(|row| vec![row.to_vec()]).to_vec(), at_least };
        let scores = [score(one, 1.75), score(other, 0.5)];
        let found = witness.worst_behaviour(Place::Scores(&scores)).unwrap();
        assert_eq!(found, ratio(-2, 4) * ratio(7, 4) + ratio(-3, 4) * ratio(1, 2));
        // Where ν grows with the scores they are of no use, and the bound is that over everything.
        let witness = stated(Claim::Contradiction, behaviour.map(|row| row.map(|nu| -nu)), &[[0, 0]], &[0]);
        assert_eq!(witness.worst_behaviour(Place::Scores(&scores)), Ok(ratio(2 + 11, 4)));
        // In between it is an upper bound: on a grid of all behaviours that reach them.
        let mut numbers = Numbers(31);
        let (mut reached, mut used) = (0, 0);
        for _ in 0..60 {
            let behaviour = [(); 2].map(|()| [(); 2].map(|()| numbers.integer(20)));
            let witness = stated(Claim::Contradiction, behaviour, &[[0, 0]], &[0]);
            let scores = [score([(); 2].map(|()| [(); 2].map(|()| numbers.integer(3))), 1.5)];
            let bound = witness.worst_behaviour(Place::Scores(&scores)).unwrap();
            let anything = witness.worst_behaviour(Place::Region(&vec![vec![vec![[0.0, 1.0]; 2]]; 2])).unwrap();
            used += usize::from(bound < anything);
            for (p, q) in (0..=10).flat_map(|p| (0..=10).map(move |q| (p, q))) {
                let at = |c: &Table<i64>| c[0][0][0] * p + c[0][0][1] * (10 - p) + c[1][0][0] * q + c[1][0][1] * (10 - q);
                if at(&scores[0].coefficients) >= 15 {
                    reached += 1;
                    assert!(ratio(at(&witness.witness.behaviour), 40) <= bound, "{behaviour:?} {scores:?}");
                }
            }
        }
        assert!(reached > 500 && used > 5, "{reached} {used}");
    }

    /// At the least leakage the affine bound is exactly zero: below it no model, above it perhaps.
    #[test]
    fn the_least_leakage_is_where_the_proof_ends() {
        let behaviour = vec![vec![vec![0.75, 0.25]], vec![vec![0.5, 0.5]]];
        let place = Place::Behaviour(&behaviour);
        // −2 + (5·3 + 1)/16 + (−1 + 2)/8 = −7/8, and the multipliers add up to 7/2.
        let witness = stated(Claim::Contradiction, [[5, 1], [-1, 2]], &[[10, 4]], &[-8]);
        let least = witness.least_uniform_leakage(place).unwrap();
        assert_eq!(least, Some(ratio(1, 4)));
        assert!(witness.bound(place, &[0.25; 2], LeakageReading::OnAverage).unwrap().exact().is_zero());
        assert_eq!(stated(Claim::Contradiction, [[5, 1], [-1, 2]], &[[0, 0]], &[-8]).least_uniform_leakage(place), Ok(None));
        let refused = |witness: CheckedWitness| assert!(witness.least_uniform_leakage(place).is_err());
        refused(stated(Claim::Guess { target: FIRST }, [[5, 1], [-1, 2]], &[[10, 4]], &[-8, -8]));
        refused(stated(Claim::Contradiction, [[5, 1], [-1, 2]], &[[10, 4], [10, 4]], &[-8]));
        let mut exact = witness;
        exact.witness.exact[1] = true;
        refused(exact);
    }

    #[test]
    fn a_guess_below_the_likeliest_outcome_is_a_contradiction() {
        let guess = |constant| {
            let mut witness = stated(Claim::Guess { target: FIRST }, [[0, 0], [0, 0]], &[[0, 0]], &[constant, constant - 1]);
            (witness.witness.multiplier_bits, witness.witness.factor_bits) = (0, 25);
            witness
        };
        let proves = |witness: &CheckedWitness, place| {
            let bound = witness.bound(place, &[0.0; 2], LeakageReading::OnAverage).unwrap();
            proves_contradiction(witness, &bound, place)
        };
        let three_quarters = 3i128 << 48;
        let other = vec![vec![0.5, 0.5]];
        let behaviours = [vec![vec![0.75, 0.25]], vec![vec![0.25, 0.75]]].map(|table| vec![table, other.clone()]);
        let regions =
            [[[0.75, 0.8], [0.2, 0.25]], [[0.2, 0.25], [0.75, 0.8]]].map(|row| vec![vec![row.to_vec()], vec![vec![[0.0, 1.0]; 2]]]);
        let places = behaviours.iter().map(Place::Behaviour).chain(regions.iter().map(Place::Region));
        for place in places {
            assert!(!proves(&guess(three_quarters), place), "{place:?}");
            assert!(proves(&guess(three_quarters - 1), place), "{place:?}");
            // Also where it is below every outcome.
            assert!(proves(&guess(1 << 47), place), "{place:?}");
            assert!(!proves(&guess(three_quarters + 1), place), "{place:?}");
        }
        // Of two outcomes one has a half.
        let scores = [Score { coefficients: vec![vec![vec![0, 0]]; 2], at_least: 0.0 }];
        assert!(!proves(&guess(1 << 49), Place::Scores(&scores)));
        assert!(proves(&guess((1 << 49) - 1), Place::Scores(&scores)));
        // The other claims: below zero, and never.
        let contradiction = |constant| stated(Claim::Contradiction, [[0, 0], [0, 0]], &[[0, 0]], &[constant]);
        assert!(proves(&contradiction(-1), Place::Behaviour(&behaviours[0])));
        assert!(!proves(&contradiction(0), Place::Behaviour(&behaviours[0])));
        let score = stated(Claim::Score { coefficients: vec![vec![vec![1, 0]]; 2] }, [[0, 0], [0, 0]], &[[0, 0]], &[-1]);
        assert!(!proves(&score, Place::Behaviour(&behaviours[0])));
    }

    #[test]
    fn a_theorem_without_its_proof_keeps_its_name() {
        let checked = complete(documents(&mut Numbers(41)).remove(0)).unwrap();
        let digest = checked.witness().digest();
        let alone = checked.clone().without_proof();
        assert_eq!((alone.digest(), checked.digest()), (digest.as_str(), digest.as_str()));
        assert!(alone.witness().factors.is_empty() && alone.witness().bases.is_empty());
        assert_eq!(alone.witness().constants, checked.witness().constants);
        assert_eq!(alone.rounding_cost(), checked.rounding_cost());
    }
}
