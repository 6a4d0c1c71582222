//! Power entropies.

use bitassay::{bound::power_entropy, relaxation::level::Level, scenario::Setting, solver::Limits, witness::check::Place};

use crate::codes::{code, scenario};

/// Brackets [relaxation at level standard with 12 fixed cells in an independent implementation, mixture of explicit strategies] for the
/// least mean Shannon entropy of the target outcome, bits; noisy 2→1 code on a qubit. 0.600876 is the binary entropy of ½(1+1/√2).
/// The cells made here are better placed than the fixed ones. At `β = 2^-20` the power entropy is the Shannon entropy to six digits.
#[test]
fn mean_shannon_entropy_of_the_two_to_one_code() {
    for (visibility, leakage, low, high) in [(1.0, 0.0, 0.5865, 0.600876), (0.99, 0.0, 0.5067, 0.518205), (0.99, 1e-3, 0.4803, 0.490386)] {
        let scenario = scenario(4, 2, 2, 2, leakage);
        let place = code(2, visibility);
        let found = power_entropy(&scenario, Setting { x: 0, y: 0 }, Place::Behaviour(&place), 1 << 10, Level::Standard, Limits::default())
            .unwrap();
        let bits = -found.bound.rounded_up() / 2f64.ln();
        println!("visibility {visibility}, leakage {leakage}: {bits} bit, rounding cost {:.1e}", found.witness.rounding_cost());
        assert!(bits >= low && bits <= high, "{bits}");
        assert!(found.witness.rounding_cost() < 5e-6);
    }
}
