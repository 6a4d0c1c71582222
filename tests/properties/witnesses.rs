//! Witnesses are exact, applicable to other data of the geometry, and worthless once touched.

use bitassay::{
    bound::contradiction,
    certificate::{Certificate, Reason, Verdict},
    relaxation::level::Level,
    request::{RequestDocument, RoundModel},
    scenario::Scenario,
    solver::Limits,
    verify::verify,
    witness::{
        check::{CheckError, Place, check, proves_contradiction},
        witness::Witness,
    },
};

use crate::rig::{code, counts, document, guess, run};

/// The document with every integer, one after the other, changed by one.
fn mutations(value: &serde_json::Value) -> Vec<serde_json::Value> {
    fn places(value: &serde_json::Value, path: String, into: &mut Vec<String>) {
        match value {
            serde_json::Value::Array(items) => items.iter().enumerate().for_each(|(i, item)| places(item, format!("{path}/{i}"), into)),
            serde_json::Value::Object(items) => items.iter().for_each(|(key, item)| places(item, format!("{path}/{key}"), into)),
            serde_json::Value::Number(_) => into.push(path),
            serde_json::Value::String(text) if text.parse::<i128>().is_ok() => into.push(path),
            _ => {}
        }
    }
    let mut found = Vec::new();
    places(value, String::new(), &mut found);
    let change = |path: &String| {
        let mut copy = value.clone();
        let place = copy.pointer_mut(path).unwrap();
        *place = match place.as_str() {
            Some(text) => (text.parse::<i128>().unwrap() + 1).to_string().into(),
            None => (place.as_i64().unwrap() + 1).into(),
        };
        copy
    };
    found.iter().map(change).collect()
}

/// Counts of the noisy code, small enough for thousands of checks.
fn certified() -> (Certificate, Vec<Witness>) {
    let certification = run(document(counts(&code(0.99), 10_000_000), 2, 0.0));
    assert_eq!(certification.certificate.verdict, Verdict::Certified);
    (certification.certificate, certification.witnesses)
}

#[test]
fn a_certificate_is_confirmed_without_a_solver() {
    let (certificate, witnesses) = certified();
    assert_eq!(verify(&certificate, None, &witnesses), Ok(()));
    assert!(verify(&certificate, None, &[]).is_err(), "without the witness nothing is confirmed");
}

/// One integer changed: the record no longer names this document, and where the check still passes the bound is another theorem, which
/// is not better than what an explicit mixture of strategies reaches (0.8818572 for these probabilities).
#[test]
fn a_witness_with_one_integer_changed_is_not_accepted() {
    let (certificate, witnesses) = certified();
    let original = serde_json::to_value(&witnesses[0]).unwrap();
    let behaviour = code(0.99);
    let (mut changed, mut passed) = (0, 0);
    for mutation in mutations(&original) {
        changed += 1;
        let Ok(witness) = serde_json::from_value::<Witness>(mutation) else { continue };
        assert!(verify(&certificate, None, std::slice::from_ref(&witness)).is_err());
        let Ok(checked) = check(&witness) else { continue };
        passed += 1;
        let applies = checked.bound(Place::Behaviour(&behaviour), certificate.scenario.leakage(), certificate.scenario.leakage_holds());
        let same_claim = witness.claim == witnesses[0].claim && witness.geometry == witnesses[0].geometry;
        if let (Ok(bound), true) = (applies, same_claim) {
            assert!(bound.rounded_up() >= 0.8818572, "{}", bound.rounded_up());
        }
    }
    println!("{changed} integers changed, {passed} documents still consistent in themselves");
    assert!(changed > 300);
    // Where the change happens to cancel between two words, the document proves the same constant in another way.
    assert!(passed * 50 < changed, "{passed} of {changed} changed witnesses pass the exact check");
}

/// The check of a monomial takes twice as long with every carrier that it holds, so long ones are turned away unseen.
#[test]
fn a_witness_with_a_long_monomial_is_not_looked_at() {
    let (_, witnesses) = certified();
    let with = |monomial: &str| {
        let mut witness = witnesses[0].clone();
        witness.bases[0].monomials[0] = monomial.parse().unwrap();
        check(&witness).unwrap_err()
    };
    assert_eq!(with("R0 V M0|0 V"), CheckError::Constants);
    for carriers in [4, 60] {
        let monomial = format!("R0{}", " V".repeat(carriers));
        assert_eq!(with(&monomial), CheckError::Malformed("a monomial is too long".into()), "{carriers} carriers");
    }
}

/// Any figure of a record that is changed is found.
#[test]
fn a_certificate_with_a_changed_figure_is_not_confirmed() {
    let (certificate, witnesses) = certified();
    let original = serde_json::to_value(&certificate).unwrap();
    let changes: [(&str, serde_json::Value); 12] = [
        ("/certified_bits", (certificate.certified_bits + 1).into()),
        ("/bits_per_round", (certificate.bits_per_round * 1.001).into()),
        ("/targets/0/certified_bits", (certificate.targets[0].certified_bits + 1).into()),
        ("/targets/0/guessing_probability_bound", (guess(&certificate) - 1e-9).into()),
        ("/targets/0/min_entropy_per_round", 0.5.into()),
        ("/targets/0/level", "sharp".into()),
        ("/counts/0/0/0", (certificate.counts.as_ref().unwrap()[0][0][0] + 1).into()),
        ("/counts_digest", "sha256:00".into()),
        ("/scenario/carrier_dimension", 3.into()),
        ("/scenario/leakage", 1e-3.into()),
        ("/failure/estimation", 1e-9.into()),
        ("/region/0/0/0/0", 0.84.into()),
    ];
    for (pointer, value) in changes {
        let mut changed = original.clone();
        *changed.pointer_mut(pointer).unwrap() = value;
        let changed: Certificate = serde_json::from_value(changed).unwrap();
        assert!(verify(&changed, None, &witnesses).is_err(), "{pointer}");
    }
}

/// A kept witness bounds another batch of its geometry, soundly and almost as well as a new one.
#[test]
fn a_witness_serves_the_next_batch() {
    let (certificate, witnesses) = certified();
    let witness = check(&witnesses[0]).unwrap();
    let other = run(document(counts(&code(0.9895), 10_000_000), 2, 0.0)).certificate;
    let region = other.region.as_ref().unwrap();
    let kept =
        witness.bound(Place::Region(region), certificate.scenario.leakage(), certificate.scenario.leakage_holds()).unwrap().rounded_up();
    let fresh = guess(&other);
    assert!(kept >= fresh - 1e-6 && kept <= fresh + 1e-3, "{kept} {fresh}");
    // It takes leakage to be exactly zero, and says so when it is not.
    let leaking = [1e-6; 4];
    assert!(witness.bound(Place::Region(region), &leaking, certificate.scenario.leakage_holds()).is_err());
}

#[test]
fn equal_requests_give_equal_bytes() {
    let request = || RequestDocument {
        level: bitassay::relaxation::level::LevelChoice::Standard,
        ..document(counts(&code(0.99), 1_000_000), 2, 1e-3)
    };
    let (one, other) = (run(request()), run(request()));
    assert_eq!(serde_json::to_string(&one.certificate).unwrap(), serde_json::to_string(&other.certificate).unwrap());
    assert_eq!(one.witnesses[0].canonical_json(), other.witnesses[0].canonical_json());
}

/// Frequencies a little better than any qubit allows: no model has them exactly, but the confidence region holds behaviours that one has.
#[test]
fn frequencies_just_outside_the_model_are_certified_through_their_region() {
    let frequencies = code(1.0005);
    let plug_in = RequestDocument { rounds: RoundModel::PlugIn, ..document(counts(&frequencies, 100_000), 2, 0.0) };
    assert_eq!(run(plug_in).certificate.reason, Some(Reason::OutsideModel));
    let certification = run(document(counts(&frequencies, 100_000), 2, 0.0));
    println!("{:?}", certification.certificate.targets);
    assert_eq!(certification.certificate.verdict, Verdict::Certified);
}

/// Numbers that are clearly too good are a result of their own, with a proof, and with the leakage that would explain them.
#[test]
fn numbers_outside_the_model_are_refused_with_a_proof() {
    let certification = run(document(counts(&code(1.02), 10_000_000), 2, 1e-3));
    let certificate = &certification.certificate;
    assert_eq!((certificate.verdict, certificate.reason), (Verdict::Refused, Some(Reason::OutsideModel)));
    assert_eq!(verify(certificate, None, &certification.witnesses), Ok(()));
    let least = certificate.outside_model.as_ref().unwrap().smallest_uniform_leakage.unwrap();
    // Success ½(1 + 1.02/√2) needs ½[1+√(½+2ε(1−ε))] of an explicit strategy, so at most about that much.
    assert!(least > 1e-3 && least < 0.0102, "{least}");
    // With that leakage declared the same numbers are no longer outside.
    let declared = run(document(counts(&code(1.02), 10_000_000), 2, 0.0105)).certificate;
    assert_ne!(declared.reason, Some(Reason::OutsideModel));
    let scenario: Scenario = certificate.scenario.clone();
    assert!(contradiction(&scenario, Place::Behaviour(&code(0.99)), Level::Lean, Limits::default()).is_none());
}

/// Where no model exists, affine bounds fall below any probability. That is a contradiction and not entropy, whatever a record says.
#[test]
fn a_bound_below_the_likeliest_outcome_is_no_entropy() {
    let (certificate, witnesses) = certified();
    let witness = check(&witnesses[0]).unwrap();
    let impossible = code(1.1);
    let place = Place::Behaviour(&impossible);
    let bound = witness.bound(place, certificate.scenario.leakage(), certificate.scenario.leakage_holds()).unwrap();
    assert!(bound.rounded_up() < impossible[0][0][0], "the test needs a bound that contradicts");
    assert!(proves_contradiction(&witness, &bound, place));
    // A record that takes it for entropy, consistent in every figure but this.
    let mut forged = run(document(counts(&impossible, 10_000_000), 2, 0.0)).certificate;
    assert_eq!(forged.reason, Some(Reason::OutsideModel));
    forged.outside_model = None;
    forged.targets = certificate.targets.clone();
    let discrepancies = verify(&forged, None, &witnesses).unwrap_err();
    assert!(discrepancies[0].to_string().contains("contradict"), "{discrepancies:?}");
}

/// Probabilities rounded to seven decimals lie outside the model by 1e-8. Whatever is said of them, it is not more than the exact ones give.
#[test]
fn rounded_probabilities_at_the_border_certify_nothing_extra() {
    for digits in [5, 6, 7, 8, 9, 10, 12] {
        let scale = 10f64.powi(digits);
        let rounded: Vec<Vec<Vec<f64>>> = code(1.0)
            .iter()
            .map(|t| t.iter().map(|p| vec![(p[0] * scale).round() / scale, 1.0 - (p[0] * scale).round() / scale]).collect())
            .collect();
        let mut request = document(counts(&code(1.0), 100), 2, 0.0);
        request.counts = None;
        request.rounds = RoundModel::PlugIn;
        request.behaviour = Some(rounded.clone());
        let certificate = run(request).certificate;
        println!(
            "{digits}: {:?} {:?} {:?}",
            certificate.verdict,
            certificate.reason,
            certificate.targets.first().map(|t| t.guessing_probability_bound)
        );
        match certificate.verdict {
            Verdict::Estimate => assert!(guess(&certificate) >= rounded[0][0][0]),
            Verdict::Refused => assert_eq!(certificate.reason, Some(Reason::OutsideModel)),
            Verdict::Certified => panic!("plug-in figures release no bits"),
        }
    }
}
