//! Largest values of linear scores: the relaxation with one group.

use bitassay::{bound::score, counts::Table, exact::round_up, relaxation::level::Level, solver::Limits};
use num_rational::BigRational;

use crate::codes::scenario;

/// Checked bound on `Σ coefficients · p / divisor`.
fn largest(size: (usize, usize, usize), dimension: u32, leakage: f64, coefficients: &Table<i64>, divisor: i64, level: Level) -> f64 {
    let scenario = scenario(size.0, size.1, size.2, dimension, leakage);
    let found = score(&scenario, coefficients.clone(), level, Limits::default()).expect("no checked bound");
    assert_eq!(found.level, level, "fell to a coarser level");
    let value = round_up(&(found.bound.exact() / BigRational::from_integer(divisor.into())));
    println!("{size:?} d = {dimension} leakage {leakage} {level:?}: {value}");
    value
}

/// Success probability of the n→1 random access code, times `n 2^n`.
fn code_score(bits: usize) -> Table<i64> {
    let right = |x: usize, y: usize| if x >> y & 1 == 0 { vec![1, 0] } else { vec![0, 1] };
    (0..1usize << bits).map(|x| (0..bits).map(|y| right(x, y)).collect()).collect()
}

/// Success of telling N states apart with one N-outcome measurement, times N.
fn discrimination_score(states: usize) -> Table<i64> {
    (0..states).map(|x| vec![(0..states).map(|b| i64::from(x == b)).collect()]).collect()
}

/// A combination of correlators `E_xy = p(0|xy) − p(1|xy)`.
fn correlators(signs: &[&[i64]]) -> Table<i64> {
    signs.iter().map(|row| row.iter().map(|sign| vec![*sign, -sign]).collect()).collect()
}

#[track_caller]
fn assert_close(value: f64, expected: f64, tolerance: f64) {
    assert!((value - expected).abs() <= tolerance, "{value} is not within {tolerance} of {expected}");
}

/// arXiv:0810.2937: the 2→1 code succeeds with 0.85, in closed form ½(1+1/√2).
#[test]
fn two_to_one_code_on_a_qubit() {
    let value = largest((4, 2, 2), 2, 0.0, &code_score(2), 8, Level::Lean);
    assert_close(value, 0.5 * (1.0 + 0.5f64.sqrt()), 1e-6);
    assert!(value >= 0.5 * (1.0 + 0.5f64.sqrt()));
}

/// arXiv:0810.2937: the 3→1 code succeeds with 0.79, in closed form ½(1+1/√3).
#[test]
fn three_to_one_code_on_a_qubit() {
    let value = largest((8, 3, 2), 2, 0.0, &code_score(3), 24, Level::Lean);
    assert_close(value, 0.5 * (1.0 + (1.0f64 / 3.0).sqrt()), 1e-6);
    assert!(value >= 0.5 * (1.0 + (1.0f64 / 3.0).sqrt()));
}

/// Explicit strategies in dimension 4 to 8 reach ½[1+√(½+2ε(1−ε))]; its tangent at 0, ½(1+1/√2)+ε/√2, is the first-order law of
/// Phys. Rev. Lett. 129, 250504 (2022).
#[test]
fn two_to_one_code_on_a_leaking_qubit() {
    for leakage in [1e-4, 1e-3, 1e-2, 5e-2, 1e-1f64] {
        let reached = 0.5 * (1.0 + (0.5 + 2.0 * leakage * (1.0 - leakage)).sqrt());
        let value = largest((4, 2, 2), 2, leakage, &code_score(2), 8, Level::Sharp);
        assert!(value >= reached, "{value} is below the strategy's {reached} at {leakage}");
    }
    // The first-order law, from the slope at small leakage.
    let value = largest((4, 2, 2), 2, 1e-4, &code_score(2), 8, Level::Sharp);
    assert_close((value - 0.5 * (1.0 + 0.5f64.sqrt())) / 1e-4, 0.5f64.sqrt(), 0.01);
}

/// Explicit strategies: (√(d(1−ε)) + √((N−d)ε))²/N for telling N equally likely states apart when each has at least 1−ε in rank d. For
/// d = 1 this is also the upper bound; the theme is that of arXiv:2405.07231.
#[test]
fn discrimination_with_a_leaking_carrier() {
    for (states, dimension, leakage) in [(2usize, 1u32, 0.01), (2, 1, 0.1), (3, 1, 0.05), (3, 2, 0.05), (4, 2, 0.02), (4, 3, 0.05)] {
        let (n, d) = (states as f64, f64::from(dimension));
        let reached = ((d * (1.0 - leakage)).sqrt() + ((n - d) * leakage).sqrt()).powi(2) / n;
        let value = largest((states, 1, states), dimension, leakage, &discrimination_score(states), states as i64, Level::Lean);
        assert!(value >= reached, "{value} is below the strategy's {reached}");
        if dimension == 1 {
            assert_close(value, reached, 2e-6);
        }
    }
}

/// Σ_x p(b=x|x)/N ≤ d/N, the elementary dimension witness.
#[test]
fn discrimination_within_a_dimension() {
    assert_close(largest((4, 1, 4), 2, 0.0, &discrimination_score(4), 4, Level::Lean), 0.5, 1e-6);
}

/// Phys. Rev. Lett. 105, 230501 (arXiv:1010.5064): I₃ = E₁₁+E₁₂+E₂₁−E₂₂−E₃₁ is at most 1+2√2 for qubits and 5 for trits.
#[test]
fn dimension_witness_with_three_preparations() {
    let i3 = correlators(&[&[1, 1], &[1, -1], &[-1, 0]]);
    assert_close(largest((3, 2, 2), 2, 0.0, &i3, 1, Level::Standard), 1.0 + 8f64.sqrt(), 1e-5);
    assert_close(largest((3, 2, 2), 3, 0.0, &i3, 1, Level::Standard), 5.0, 1e-5);
}

/// The same reference: I₄ = E₁₁+E₁₂+E₁₃+E₂₁+E₂₂−E₂₃+E₃₁−E₃₂−E₄₁ is at most 6 for qubits and 7.968871 for qutrits.
#[test]
fn dimension_witness_with_four_preparations() {
    let i4 = correlators(&[&[1, 1, 1], &[1, 1, -1], &[1, -1, 0], &[-1, 0, 0]]);
    assert_close(largest((4, 3, 2), 2, 0.0, &i4, 1, Level::Standard), 6.0, 1e-4);
    assert_close(largest((4, 3, 2), 3, 0.0, &i4, 1, Level::Standard), 7.968871, 2e-3);
}

/// Best deterministic encoding of two bits in one, counted: 0.75. A qubit does better, so its bound lies above.
#[test]
fn two_to_one_code_on_a_classical_bit() {
    let mut best = 0;
    for encoding in 0..16u32 {
        // Each measurement answers one of four functions of the bit it receives.
        let right = |y: usize, decoding: u32| {
            let hits = |x: usize| decoding >> (encoding >> x & 1) & 1 == (x >> y & 1) as u32;
            (0..4usize).filter(|x| hits(*x)).count()
        };
        let most = |y: usize| (0..4).map(|decoding| right(y, decoding)).max().unwrap();
        best = best.max(most(0) + most(1));
    }
    assert_eq!(best as f64 / 8.0, 0.75);
    assert!(largest((4, 2, 2), 2, 0.0, &code_score(2), 8, Level::Lean) > 0.75);
}
