//! Witnesses: a document that passes the exact check is a theorem. Whatever it says is held against explicit models, which it must not undercut.
#![no_main]

use bitassay::{
    attack::{
        attained::{Attained, attained},
        objective::{Objective, likeliest},
        strategy::{Matrix, Model, Part, Strategy, Vector},
    },
    counts::Table,
    exact::decimal,
    fault::parse,
    scenario::{Geometry, LeakageReading, Setting},
    witness::{
        check::{CheckError, CheckedWitness, Place, check, complete, proves_contradiction},
        witness::{Claim, Witness},
    },
};
use nalgebra::Complex;
use num_traits::Signed;

mod engine;
mod pointer;

/// Models that each theorem is held against.
const MODELS: u64 = 3;

engine::target!(run);

fn run(text: &[u8]) {
    let witness = match parse::<Witness>(text) {
        Ok(witness) => witness,
        Err(fault) => return pointer::assert_points_into(text, &fault),
    };
    assert_eq!(parse::<Witness>(witness.canonical_json().as_bytes()).as_ref(), Ok(&witness));

    // The constants follow from the rest, so few inputs have the right ones: theorems are made from the rest.
    let stated = check(&witness);
    let completed = complete(witness.clone());
    match (&stated, &completed) {
        (Ok(theorem), Ok(other)) => assert_eq!(theorem, other),
        (Err(CheckError::Constants), Ok(theorem)) => assert_ne!(theorem.witness(), &witness),
        (Err(error), Err(other)) => assert_eq!(error, other),
        disagreement => panic!("{disagreement:?}"),
    }
    let Ok(theorem) = completed else { return };
    assert_eq!(check(theorem.witness()).as_ref(), Ok(&theorem));
    assert_eq!(theorem.digest(), theorem.witness().digest());
    consistent(&theorem);
    let seed = text.iter().fold(0u64, |seed, byte| seed.wrapping_mul(0x0100_0000_01b3) ^ u64::from(*byte));
    (0..MODELS).for_each(|number| holds(&theorem, &mut Numbers(seed ^ number)));
}

/// What has to hold between the values of one theorem at different places.
fn consistent(theorem: &CheckedWitness) {
    let witness = theorem.witness();
    let Geometry { preparations, measurements, outcomes, .. } = witness.geometry;
    // Binary fractions that add up to one: half of what is left for each outcome, in another order for each setting.
    let distribution = |first: usize| {
        let share = |b: usize| 0.5f64.powi(if b + 1 == outcomes { b } else { b + 1 } as i32);
        (0..outcomes).map(|b| share((b + first) % outcomes)).collect()
    };
    let behaviour: Table<f64> = (0..preparations).map(|x| (0..measurements).map(|y| distribution(2 * x + y)).collect()).collect();
    let around = |by: f64| -> Table<[f64; 2]> {
        let interval = |p: &f64| [(p - by).max(0.0), (p + by).min(1.0)];
        behaviour.iter().map(|t| t.iter().map(|values| values.iter().map(interval).collect()).collect()).collect()
    };
    let (narrow, wide) = (around(0.0), around(0.01));
    let leakage = |epsilon: f64| witness.exact.iter().map(|exact| if *exact { 0.0 } else { epsilon }).collect::<Vec<_>>();
    let bound = |place, epsilon| theorem.bound(place, &leakage(epsilon), witness.leakage_holds).unwrap();
    let (at, over, wider) =
        (bound(Place::Behaviour(&behaviour), 0.01), bound(Place::Region(&narrow), 0.01), bound(Place::Region(&wide), 0.01));
    assert!(at.exact() <= over.exact() && over.exact() <= wider.exact(), "a larger region has a smaller bound");
    assert!(at.exact() <= bound(Place::Behaviour(&behaviour), 0.02).exact(), "more leakage has a smaller bound");
    assert!(!at.rounded_up().is_finite() || decimal(at.rounded_up()) >= *at.exact(), "rounded down");
    // The affine form, with which rounds with memory reckon.
    let (mut value, weights) = theorem.affine(&leakage(0.01), witness.leakage_holds).unwrap();
    for (weight, p) in weights.iter().flatten().flatten().zip(behaviour.iter().flatten().flatten()) {
        value += weight * decimal(*p);
    }
    assert_eq!(value, *at.exact());
    if witness.leakage_holds == LeakageReading::EveryEmission {
        assert!(theorem.bound(Place::Behaviour(&behaviour), &leakage(0.01), LeakageReading::OnAverage).is_err());
    }
    // What lies below the likeliest outcome is a proof that nothing has this behaviour, and only that.
    let contradicts = match &witness.claim {
        Claim::Guess { .. } => *at.exact() < decimal(0.5),
        Claim::Contradiction => at.exact().is_negative(),
        Claim::Score { .. } | Claim::Power { .. } => false,
    };
    assert_eq!(proves_contradiction(theorem, &at, Place::Behaviour(&behaviour)), contradicts);
}

/// The theorem at what a random model does.
fn holds(theorem: &CheckedWitness, numbers: &mut Numbers) {
    let witness = theorem.witness();
    let (target, objective) = match &witness.claim {
        Claim::Guess { target } => (*target, Objective::Guess),
        Claim::Power { target, power, .. } => (*target, Objective::PowerEntropy { power: *power }),
        Claim::Score { .. } | Claim::Contradiction => (Setting { x: 0, y: 0 }, Objective::Guess),
    };
    let model = model(witness, target, numbers);
    let Attained { behaviour, mean_leakage, largest_leakage, guessing_probability, value, error } =
        attained(&model, witness.geometry, target, objective).unwrap();
    let leaked = match witness.leakage_holds {
        LeakageReading::OnAverage => mean_leakage,
        LeakageReading::EveryEmission => largest_leakage,
    };
    let leakage: Vec<f64> =
        leaked.iter().zip(&witness.exact).map(|(weight, exact)| if *exact { 0.0 } else { (weight + error).min(1.0) }).collect();
    let around = |p: &f64| [(p - error).max(0.0), (p + error).min(1.0)];
    let region: Table<[f64; 2]> = behaviour.iter().map(|t| t.iter().map(|values| values.iter().map(around).collect()).collect()).collect();
    let place = Place::Region(&region);
    let bound = theorem.bound(place, &leakage, witness.leakage_holds).unwrap();
    assert!(!proves_contradiction(theorem, &bound, place), "called impossible: {model:?}");
    let reached = match &witness.claim {
        Claim::Guess { .. } => guessing_probability - 2.0 * error,
        // The slope of the entropy is a logarithm.
        Claim::Power { .. } => value - 1e-9,
        Claim::Score { coefficients } => {
            let terms = coefficients.iter().flatten().flatten().zip(behaviour.iter().flatten().flatten());
            terms.map(|(c, p)| *c as f64 * p - c.unsigned_abs() as f64 * 2.0 * error).sum()
        }
        Claim::Contradiction => 0.0,
    };
    assert!(bound.rounded_up() >= reached, "{} is below {reached}: {model:?}", bound.rounded_up());
}

/// Two strategies with their weights. Carriers are the first axes of a space that is larger by two, and at most three of them: a smaller one
/// may be enlarged.
fn model(witness: &Witness, target: Setting, numbers: &mut Numbers) -> Model {
    let Geometry { carrier_dimension, .. } = witness.geometry;
    let carrier_dimension = carrier_dimension.min(3) as usize;
    let side = carrier_dimension + 2;
    let carrier = Matrix::from_fn(side, side, |i, j| Complex::from(f64::from(u8::from(i == j && i < carrier_dimension))));
    let share = numbers.choose(&[0.0, 0.1, 0.5]);
    let parts = [share, 1.0 - share].map(|weight| {
        let strategy = strategy(witness, carrier_dimension, side, numbers);
        let guess = likeliest(&strategy.behaviour()[target.x][target.y]);
        Part { weight, strategy, carrier: carrier.clone(), guess }
    });
    Model { parts: parts.into() }
}

/// States with a random weight outside the carrier, none where the witness takes it to be none, and measurements whose outcomes are columns of a
/// random basis, or one that is the same for all.
fn strategy(witness: &Witness, carrier_dimension: usize, side: usize, numbers: &mut Numbers) -> Strategy {
    let Geometry { measurements, outcomes, .. } = witness.geometry;
    let state = |exact: &bool| {
        let outside = if *exact { 0.0 } else { numbers.choose(&[0.0, 1e-6, 0.01, 0.3, 1.0]) };
        let mut part = |from: usize, to: usize, weight: f64| {
            let amplitude = |i: usize, _| if (from..to).contains(&i) { numbers.complex() } else { Complex::from(0.0) };
            Vector::from_fn(side, amplitude).normalize() * Complex::from(f64::sqrt(weight))
        };
        part(0, carrier_dimension, 1.0 - outside) + part(carrier_dimension, side, outside)
    };
    let states = witness.exact.iter().map(state).collect();
    let measurement = |_| {
        let basis = Matrix::from_fn(side, side, |_, _| numbers.complex()).qr().q();
        let constant = numbers.choose(&[false, false, false, true]);
        let seen = |column: usize| if constant { 0 } else { column % outcomes };
        let element = |b: usize| {
            let columns = (0..side).filter(|column| seen(*column) == b).map(|column| basis.column(column));
            columns.fold(Matrix::zeros(side, side), |sum, column| sum + column * column.adjoint())
        };
        (0..outcomes).map(element).collect()
    };
    Strategy { states, measurements: (0..measurements).map(measurement).collect() }
}

/// Numbers that follow from the input (splitmix64).
struct Numbers(u64);

impl Numbers {
    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let z = (self.0 ^ (self.0 >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        let z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// In the square of side two around zero.
    fn complex(&mut self) -> Complex<f64> {
        let mut number = || (self.next() >> 11) as f64 / 2f64.powi(52) - 1.0;
        Complex::new(number(), number())
    }

    fn choose<T: Copy>(&mut self, among: &[T]) -> T {
        among[(self.next() % among.len() as u64) as usize]
    }
}
