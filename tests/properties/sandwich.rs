//! Attack ≤ bound on generated behaviours, at every level, and levels in order: a few cases, of which the battery runs many.

use bitassay::{
    attack::{
        Attack, Effort, Hints, attack,
        attained::{ModelFault, attained},
        objective::Objective,
        sandwich::{Summary, case, outcome},
        strategy::Model,
    },
    relaxation::level::{Level, LevelChoice},
    request::RequestDocument,
    scenario::Scenario,
    verify::verify,
    witness::check::Place,
};
use nalgebra::Complex;

use crate::rig::{code, counts, document, run};

/// Cases that take little time, and that the sharpest level is for.
const CASES: [u64; 4] = [1, 3, 13, 26];

#[test]
fn no_bound_lies_below_an_attack() {
    let outcomes: Vec<_> = CASES
        .into_iter()
        .map(|number| {
            let outcome = outcome(&case(number).unwrap(), Effort::default());
            let gaps: Vec<String> = outcome.bounds.iter().map(|bounded| format!("{:?} {:.1e}", bounded.level, bounded.gap)).collect();
            println!("{}: attack {:?}, gaps {}", outcome.name, outcome.attack, gaps.join(", "));
            outcome
        })
        .collect();
    let summary = Summary::of(&outcomes);
    print!("{summary}");
    assert_eq!(summary.violations, Vec::<String>::new());
    assert!(outcomes.iter().any(|outcome| outcome.attack.is_some_and(|attack| attack < 0.99)), "every case is trivial");
    for outcome in &outcomes {
        let keen = outcome.bounds.iter().find(|bounded| bounded.level == Level::Keen);
        assert!(keen.is_none_or(|keen| keen.gap < 1e-5), "{}: {keen:?}", outcome.name);
    }
    for level in Level::ALL {
        assert!(summary.gaps.iter().any(|(of, gaps)| *of == level && !gaps.is_empty()), "{level:?} was not tried");
    }
}

fn noisy_code() -> (Scenario, Attack) {
    let scenario = Scenario::try_from(document(counts(&code(0.99), 100), 2, 1e-2).scenario).unwrap();
    let behaviour = code(0.99);
    let effort = Effort { rounds: 60, gain: 1e-4, ..Effort::default() };
    let found = attack(&scenario, scenario.targets()[0], Place::Behaviour(&behaviour), Objective::Guess, Hints::default(), effort);
    (scenario, found.unwrap())
}

/// The verification looks at matrices only, and sees what is wrong with them.
#[test]
fn models_that_are_none_are_turned_away() {
    let (scenario, found) = noisy_code();
    let check = |model: &Model| attained(model, scenario.geometry(), scenario.targets()[0], Objective::Guess);
    assert_eq!(check(&found.model).unwrap(), found.attained);
    let spoiled = |spoil: &dyn Fn(&mut Model)| {
        let mut model = found.model.clone();
        spoil(&mut model);
        check(&model)
    };
    let by = Complex::from(1.0 + 1e-6);
    assert_eq!(spoiled(&|m| m.parts[1].strategy.states[2] *= by), Err(ModelFault::State { part: 1, x: 2 }));
    assert_eq!(spoiled(&|m| m.parts[0].strategy.measurements[1][0] *= by), Err(ModelFault::Measurement { part: 0, y: 1 }));
    // Complete, but not positive.
    let unbalanced = spoiled(&|m| {
        let shift = m.parts[0].carrier.clone() * Complex::from(0.1);
        let elements = &mut m.parts[0].strategy.measurements[0];
        elements[0] += &shift;
        elements[1] -= &shift;
    });
    assert_eq!(unbalanced, Err(ModelFault::Measurement { part: 0, y: 0 }));
    assert_eq!(spoiled(&|m| m.parts[1].carrier[(2, 2)] = Complex::from(1.0)), Err(ModelFault::Carrier(1)));
    assert_eq!(spoiled(&|m| m.parts[1].carrier *= by), Err(ModelFault::Carrier(1)));
    assert!(matches!(spoiled(&|m| m.parts[0].weight += 1e-3), Err(ModelFault::Weights(_))));
    assert_eq!(spoiled(&|m| drop(m.parts[0].strategy.states.pop())), Err(ModelFault::Shape(0)));
    assert_eq!(spoiled(&|m| m.parts[0].guess = 2), Err(ModelFault::Shape(0)));
    // A worse guess is a model all the same, and guesses less.
    let other = spoiled(&|m| m.parts.iter_mut().for_each(|part| part.guess = 1 - part.guess)).unwrap();
    assert!((other.guessing_probability + found.attained.guessing_probability - 1.0).abs() < 1e-9);
}

/// A search is the same for the same seed.
#[test]
fn a_search_can_be_repeated() {
    let ((_, one), (_, other)) = (noisy_code(), noisy_code());
    assert_eq!(one, other);
}

/// A bracket is added to the record, changes nothing else in it, and is refused by `verify` where it contradicts the witness.
#[test]
fn a_bracket_is_for_information() {
    let plain = || RequestDocument { level: LevelChoice::Sharp, ..document(counts(&code(0.99), 10_000_000), 2, 0.0) };
    let (without, with) = (run(plain()), run(RequestDocument { bracket: true, ..plain() }));
    let mut certificate = with.certificate.clone();
    let bracket = certificate.targets[0].bracket.unwrap();
    println!("{bracket:?}");
    assert_eq!(Some(bracket.bound), certificate.targets[0].guessing_probability_bound);
    assert!(bracket.residual == 0.0 && bracket.attack <= bracket.bound && bracket.bound - bracket.attack < 1e-4);
    assert_eq!(verify(&certificate, None, &with.witnesses), Ok(()));
    certificate.targets[0].bracket = None;
    assert_eq!(certificate, without.certificate);
    // Recorded attacks that the witness rules out, and bounds that are not the record's.
    let mut forged = with.certificate.clone();
    forged.targets[0].bracket.as_mut().unwrap().attack = bracket.bound + 1e-9;
    let discrepancies = verify(&forged, None, &with.witnesses).unwrap_err();
    assert!(discrepancies[0].to_string().contains("attack"), "{discrepancies:?}");
    let mut forged = with.certificate;
    forged.targets[0].bracket.as_mut().unwrap().bound += 1e-3;
    assert!(verify(&forged, None, &with.witnesses).is_err());
}
