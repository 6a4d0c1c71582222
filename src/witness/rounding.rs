//! From a solver's candidate to a witness of exact integers.
//!
//! Nothing here has to be right for a bound to be right: the exact check decides. What is done well here makes bounds tight.

use nalgebra::{DMatrix, DVector, SymmetricEigen};
use num_rational::BigRational;
use num_traits::ToPrimitive;

use super::{
    check::{CheckError, CheckedWitness, complete},
    witness::{Claim, FORMAT, Span, Witness},
};
use crate::{
    counts::Table,
    entropy::power::power_entropy_down,
    exact::dyadic,
    relaxation::{
        cells::{Cell, cells},
        moments::Moments,
        question::{Knowledge, Posed, Question, Shape, Slack},
    },
    scenario::LeakageReading,
    score::Score,
    solver::Candidate,
};

/// Integers stay below 2⁵³ with room for what is computed from them.
const INTEGER_BITS: u32 = 51;
/// Finest unit: `2^-44`.
const MOST_BITS: u32 = 44;

/// Why a candidate gives no witness.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum RoundingError {
    #[error("the solver left nothing usable")]
    Unusable,
    #[error(transparent)]
    Check(#[from] CheckError),
}

/// Rounds a candidate's multipliers to a witness and confirms it.
///
/// # Errors
/// A candidate with missing or non-finite numbers, or a witness that does not pass the check.
pub fn witness(moments: &Moments, question: &Question, posed: &Posed, candidate: &Candidate) -> Result<CheckedWitness, RoundingError> {
    let shapes = candidate.equality_multipliers.len() == posed.program.equalities.len()
        && candidate.inequality_multipliers.len() == posed.program.inequalities.len()
        && candidate.block_multipliers.len() == posed.program.blocks.len();
    if !shapes {
        return Err(RoundingError::Unusable);
    }
    let geometry = moments.algebra().geometry();
    let mut behaviour = vec![vec![vec![0.0; geometry.outcomes]; geometry.measurements]; geometry.preparations];
    for (i, (setting, b)) in posed.behaviour_rows.iter().enumerate() {
        behaviour[setting.x][setting.y][*b] = if posed.behaviour_within {
            candidate.inequality_multipliers[2 * i] - candidate.inequality_multipliers[2 * i + 1]
        } else {
            // The first equality is the normalisation.
            candidate.equality_multipliers[1 + i]
        };
    }
    let reading = if question.slack == Slack::Leakage { LeakageReading::OnAverage } else { question.leakage_holds };
    let rows = match reading {
        LeakageReading::OnAverage => 1,
        LeakageReading::EveryEmission => posed.groups,
    };
    let mut leakage = vec![vec![0.0; geometry.preparations]; rows];
    let first = posed.score_rows + if posed.behaviour_within { 2 * posed.behaviour_rows.len() } else { 0 };
    for ((group, x), multiplier) in posed.leakage_rows.iter().zip(&candidate.inequality_multipliers[first..]) {
        leakage[group.unwrap_or(0)][*x] = multiplier.max(0.0);
    }
    let mut factors = Vec::new();
    for (index, z) in candidate.block_multipliers.iter().enumerate() {
        let scale = posed.scales.get(index % posed.scales.len()).ok_or(RoundingError::Unusable)?;
        factors.push(factor(z, scale)?);
    }

    let chords = chords(question, posed, candidate, geometry.outcomes);
    let values = behaviour.iter().flatten().flatten().chain(chords.iter().flatten()).chain(leakage.iter().flatten()).copied();
    let of_scores = score_multipliers(question, candidate);
    let multiplier_bits = bits_for(values.chain(of_scores).chain(candidate.equality_multipliers.iter().copied()))?;
    let factor_bits = bits_for(factors.iter().flat_map(|factor| factor.iter().copied()))?.max(multiplier_bits.div_ceil(2));
    let multiplier = |value: f64| scaled(value, multiplier_bits);
    let witness = Witness {
        format: FORMAT.to_owned(),
        geometry,
        exact: moments.algebra().exact().to_vec(),
        leakage_holds: reading,
        claim: question.claim.clone(),
        multiplier_bits,
        behaviour: integer_behaviour(question, &behaviour, candidate, multiplier_bits),
        leakage: leakage.iter().map(|row| row.iter().map(|value| multiplier(*value)).collect()).collect(),
        chords: integer_chords(question, &chords, geometry.outcomes, multiplier_bits),
        factor_bits,
        constants: Vec::new(),
        remainders: Vec::new(),
        bases: moments.bases().iter().map(|basis| Span { parity: basis.parity, monomials: basis.monomials.clone() }).collect(),
        factors: factors.chunks(posed.scales.len()).map(|group| group.iter().map(|l| lower_rows(l, factor_bits)).collect()).collect(),
    };
    Ok(complete(witness)?)
}

/// The largest that a score adds to a multiplier of the behaviour, for each score.
fn score_multipliers(question: &Question, candidate: &Candidate) -> Vec<f64> {
    let Knowledge::Reaching(scores) = question.knowledge else { return Vec::new() };
    let largest = |score: &Score| score.coefficients.iter().flatten().flatten().map(|c| c.unsigned_abs()).max().unwrap_or(0) as f64;
    let count = scores.len() as f64;
    scores.iter().zip(&candidate.inequality_multipliers).map(|(score, multiplier)| count * multiplier * largest(score)).collect()
}

/// Rounds the multipliers of the behaviour. Those of scores are rounded before they multiply the coefficients, so that the result is an exact
/// multiple of the score.
fn integer_behaviour(question: &Question, behaviour: &Table<f64>, candidate: &Candidate, bits: u32) -> Table<i64> {
    let rounded = |values: &Vec<f64>| values.iter().map(|v| scaled(*v, bits)).collect();
    let mut integers: Table<i64> = behaviour.iter().map(|table| table.iter().map(rounded).collect()).collect();
    if let Knowledge::Reaching(scores) = question.knowledge {
        for (score, multiplier) in scores.iter().zip(&candidate.inequality_multipliers) {
            let multiplier = scaled(multiplier.max(0.0), bits);
            let cells = integers.iter_mut().flatten().flatten().zip(score.coefficients.iter().flatten().flatten());
            cells.for_each(|(integer, coefficient)| *integer = integer.saturating_sub(multiplier.saturating_mul(*coefficient)));
        }
    }
    integers
}

/// The affine function of each cell: the chord through `η_β − τ_j` at the vertices, with `τ` the multipliers of the cell's facets.
fn chords(question: &Question, posed: &Posed, candidate: &Candidate, outcomes: usize) -> Vec<Vec<f64>> {
    let Claim::Power { power, .. } = &question.claim else { return Vec::new() };
    let multipliers = candidate.inequality_multipliers.get(posed.facet_rows..).unwrap_or_default();
    let shapes = Shape::of(&question.claim, outcomes);
    let chord = |(shape, facets): (&Shape, &[f64])| {
        let values = shape.values(*power) - DVector::from_iterator(outcomes, facets.iter().map(|tau| tau.max(0.0)));
        shape.affine_through(&values).iter().copied().collect()
    };
    shapes.iter().zip(multipliers.chunks_exact(outcomes)).map(chord).collect()
}

/// Rounds the chords to integers and lowers each, by equal amounts for all outcomes, until it is nowhere above `η_β`.
fn integer_chords(question: &Question, chords: &[Vec<f64>], outcomes: usize, bits: u32) -> Vec<Vec<i64>> {
    let Claim::Power { power, cuts, .. } = &question.claim else { return Vec::new() };
    let lowered = |(chord, cell): (&Vec<f64>, Cell)| {
        let integers: Vec<i64> = chord.iter().map(|value| scaled(*value, bits)).collect();
        let excess = cell.vertices.iter().map(|vertex| {
            let probabilities: Vec<f64> = vertex.iter().map(|p| p.to_f64().unwrap_or(0.0)).collect();
            let value: BigRational = integers.iter().zip(vertex).map(|(l, p)| dyadic(*l, bits) * p).sum();
            let entropy = BigRational::from_float(power_entropy_down(&probabilities, *power)).unwrap_or_default();
            ((value - entropy) * dyadic(1i64 << bits, 0)).ceil().to_integer().to_i64().unwrap_or(0)
        });
        let excess = excess.max().unwrap_or(0).max(0);
        integers.iter().map(|integer| integer - excess).collect()
    };
    chords.iter().zip(cells(outcomes, cuts).unwrap_or_default()).map(lowered).collect()
}

/// Lower triangular `L` with `L Lᵀ` the positive part of the unscaled multiplier.
fn factor(z: &DMatrix<f64>, scale: &[f64]) -> Result<DMatrix<f64>, RoundingError> {
    let side = scale.len();
    if z.shape() != (side, side) || z.iter().any(|value| !value.is_finite()) {
        return Err(RoundingError::Unusable);
    }
    // Eigenvalues are cut off in the solver's scaling, where its errors are uniform.
    let eigen = SymmetricEigen::try_new(z.clone(), f64::EPSILON, 10_000).ok_or(RoundingError::Unusable)?;
    let roots = eigen.eigenvalues.map(|value| value.max(0.0).sqrt());
    let mut root = eigen.eigenvectors * DMatrix::from_diagonal(&roots);
    for (mut row, factor) in root.row_iter_mut().zip(scale) {
        row *= *factor;
    }
    // root rootᵀ = (QR)ᵀ(QR) = RᵀR with rootᵀ = QR.
    let mut lower = root.transpose().qr().r().transpose();
    for mut column in lower.column_iter_mut() {
        // One sign convention, so that equal multipliers give equal documents.
        if column.iter().find(|value| **value != 0.0).is_some_and(|value| *value < 0.0) {
            column.neg_mut();
        }
    }
    Ok(lower)
}

/// Bits after the binary point such that all values fit.
fn bits_for(values: impl Iterator<Item = f64>) -> Result<u32, RoundingError> {
    let largest = values.fold(0.0f64, |largest, value| if value.is_nan() { f64::INFINITY } else { largest.max(value.abs()) });
    if !largest.is_finite() {
        return Err(RoundingError::Unusable);
    }
    let whole = largest.max(1.0).log2().ceil() as u32;
    Ok(INTEGER_BITS.saturating_sub(whole).min(MOST_BITS))
}

fn scaled(value: f64, bits: u32) -> i64 {
    (value * 2f64.powi(bits as i32)).round() as i64
}

fn lower_rows(lower: &DMatrix<f64>, bits: u32) -> Vec<Vec<i64>> {
    (0..lower.nrows()).map(|i| (0..=i).map(|j| scaled(lower[(i, j)], bits)).collect()).collect()
}
