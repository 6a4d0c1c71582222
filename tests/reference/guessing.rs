//! Guessing probabilities, full statistics.

use bitassay::{counts::Table, entropy::extraction::min_entropy_per_round, relaxation::level::Level};

use crate::codes::{bound, code, every_emission, scenario};

#[track_caller]
fn assert_close(value: f64, expected: f64, tolerance: f64) {
    assert!((value - expected).abs() <= tolerance, "{value} is not within {tolerance} of {expected}");
}

/// An independent implementation of the same relaxation (a general modelling layer on the unsplit moment matrix), and mixtures
/// of explicit strategies found by column generation; noisy 2→1 code on a qubit.
#[test]
fn noisy_two_to_one_code() {
    let cases = [
        (0.0, Some(0.883614), 0.8827929, 0.8818577, 0.8818572),
        (1e-3, Some(0.9043707), 0.8923526, 0.8917489, 0.8917125),
        (1e-2, None, 0.9463996, 0.9446873, 0.9440455),
    ];
    for (leakage, lean, standard, sharp, attack) in cases {
        let expected = [(Level::Lean, lean), (Level::Standard, Some(standard)), (Level::Sharp, Some(sharp))];
        for (level, expected) in expected {
            let found = bound(&scenario(4, 2, 2, 2, leakage), &code(2, 0.99), level);
            let value = found.bound.rounded_up();
            println!("leakage {leakage} {level:?}: {value}, rounding cost {:.1e}", found.witness.rounding_cost());
            if let Some(expected) = expected {
                assert_close(value, expected, 1e-5);
            }
            assert!(value >= attack, "{value} is below the attack's {attack}");
            assert!(found.witness.rounding_cost() < 5e-6);
        }
    }
}

/// p(0|0) = p(1|1) = s.
fn two_states(success: f64) -> Table<f64> {
    vec![vec![vec![success, 1.0 - success]], vec![vec![1.0 - success, success]]]
}

/// Bounded vacuum (d = 1), two preparations, one two-outcome measurement: an independent implementation of the relaxation and explicit
/// strategies agree to 1e-6.
#[test]
fn two_states_with_bounded_vacuum() {
    let cases =
        [(0.01, 0.597499, 0.645016), (0.01, 0.589499, 0.753777), (0.1, 0.798, 0.809762), (0.1, 0.79, 0.844484), (0.1, 0.75, 0.948554)];
    for (leakage, success, expected) in cases {
        let found = bound(&scenario(2, 1, 2, 1, leakage), &two_states(success), Level::Lean);
        assert_close(found.bound.rounded_up(), expected, 1e-5);
    }
}

/// The same with the leakage holding for every emission; an independent implementation of the relaxation, level lean.
#[test]
fn two_states_with_vacuum_bounded_in_every_emission() {
    for (leakage, success, expected) in [(0.1, 0.79, 0.822481), (0.1, 0.75, 0.896723), (0.01, 0.5895, 0.736075)] {
        let found = bound(&every_emission(scenario(2, 1, 2, 1, leakage)), &two_states(success), Level::Lean);
        assert_close(found.bound.rounded_up(), expected, 1e-5);
    }
}

/// Two states of overlap c, unambiguous discrimination p(x|x) = 1−c, p(2|x) = c, mixed with white noise 1−η; d = 1 and leakage
/// (1−c)/2. For every emission: an independent implementation of the relaxation, level lean. On average the same numbers certify nothing,
/// since an adversary imitates them with orthogonal states sent now and then.
#[test]
fn unambiguous_discrimination() {
    for (overlap, visibility, expected) in [(0.9, 0.99, 0.903043), (0.8, 0.99, 0.810572), (0.95, 0.995, 0.950654)] {
        let noise = (1.0 - visibility) / 3.0;
        let (conclusive, inconclusive) = (visibility * (1.0 - overlap) + noise, visibility * overlap + noise);
        let behaviour = vec![vec![vec![conclusive, noise, inconclusive]], vec![vec![noise, conclusive, inconclusive]]];
        let on_average = scenario(2, 1, 3, 1, (1.0 - overlap) / 2.0);
        assert!(bound(&on_average, &behaviour, Level::Lean).bound.rounded_up() >= 1.0);
        assert!(bound(&on_average, &behaviour, Level::Sharp).bound.rounded_up() >= 1.0);
        let value = bound(&every_emission(on_average), &behaviour, Level::Lean).bound.rounded_up();
        assert_close(value, expected, 1e-5);
    }
}

/// arXiv:1108.1480 (Phys. Rev. A 84, 034301): 0.2284 bit at the maximal 2→1 value on a qubit.
#[test]
fn ideal_two_to_one_code() {
    for level in Level::ALL {
        let value = bound(&scenario(4, 2, 2, 2, 0.0), &code(2, 1.0), level).bound.rounded_up();
        assert!((0.8535533905932737..=0.853560).contains(&value), "{value}");
        assert_close(min_entropy_per_round(value), 0.22844669683638807, 1e-5);
    }
}

/// arXiv:2111.14082, abstract: −log2 ½(1+1/√3) is the most that any qubit prepare-and-measure scenario certifies; the ideal 3→1 code
/// reaches it.
#[test]
fn ideal_three_to_one_code() {
    let found = bound(&scenario(8, 3, 2, 2, 0.0), &code(3, 1.0), Level::Lean);
    let value = found.bound.rounded_up();
    assert!((0.7886751345948129..=0.788676).contains(&value), "{value}");
    assert_close(min_entropy_per_round(value), 0.3424969368840823, 1e-5);
    assert!(found.witness.witness().bases.iter().all(|span| span.monomials.len() <= 45));
}
