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
