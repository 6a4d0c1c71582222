//! Leakage budgets: a weight that is not below what the contributions add up to, or a fault with a place.
#![no_main]

use bitassay::{
    fault::{Fault, parse, parse_object},
    leakage::budget::{Budget, BudgetDocument, BudgetReport, Contribution},
    scenario::{LeakageReading, Scenario},
};
use serde_json::{Value, json};

mod engine;
mod pointer;

engine::target!(run);

fn run(text: &[u8]) {
    match read(text) {
        Ok((document, budget)) => sound(&document, &budget),
        Err(fault) => pointer::assert_points_into(text, &fault),
    }
}

fn read(text: &[u8]) -> Result<(BudgetDocument, Budget), Fault> {
    let document: BudgetDocument = parse_object(text)?;
    Ok((document.clone(), Budget::try_from(document)?))
}

fn sound(document: &BudgetDocument, budget: &Budget) {
    let weight = 0.0..=1.0;
    let report = budget.report();
    assert!(weight.contains(&report.leakage) && weight.contains(&report.failure), "{report:?}");
    // The sum is not below its terms; in floating point, with room for the sum's own rounding.
    let (leakage, failure) =
        report.contributions.iter().fold((0.0, 0.0), |(leakage, failure), term| (leakage + term.leakage, failure + term.failure));
    let room = 1.0 - 1e-12;
    assert!(report.leakage >= f64::min(leakage, 1.0) * room && report.leakage <= leakage / room, "{leakage} {report:?}");
    assert!(report.failure >= f64::min(failure, 1.0) * room, "{failure} {report:?}");
    let shares: f64 = report.contributions.iter().map(|term| term.share).sum();
    assert!(if leakage == 0.0 { shares == 0.0 } else { (shares - 1.0).abs() < 1e-9 }, "{report:?}");
    assert!(report.contributions.iter().all(|term| weight.contains(&term.leakage) && weight.contains(&term.failure)), "{report:?}");
    let every = report.contributions.iter().all(|term| term.leakage_holds == LeakageReading::EveryEmission);
    assert_eq!(report.leakage_holds == LeakageReading::EveryEmission, every);

    // Document and report are read back as they were written.
    let canonical = document.canonical_json();
    let (again, recomputed) = read(canonical.as_bytes()).unwrap_or_else(|fault| panic!("{canonical}: {fault}"));
    assert_eq!((&again, &recomputed), (document, budget));
    assert_eq!(again.digest(), report.digest);
    let written = serde_json::to_vec(&report).unwrap();
    assert_eq!(parse::<BudgetReport>(&written).as_ref(), Ok(&report));

    // Something more to leak does not make it less.
    if document.contributions.len() < bitassay::leakage::budget::MAX_CONTRIBUTIONS {
        let more: Contribution = serde_json::from_value(json!({ "source": "side-mode", "weight": 0.001 })).unwrap();
        let contributions = document.contributions.iter().copied().chain([more]).collect();
        let larger = Budget::try_from(BudgetDocument { contributions, ..document.clone() }).unwrap();
        assert!(larger.leakage() >= report.leakage && larger.leakage() >= 0.001);
    }
    in_a_scenario(document, budget);
}

/// A scenario that rests on the budget has its figure and keeps the document.
fn in_a_scenario(document: &BudgetDocument, budget: &Budget) {
    let text: Value = json!({ "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": document.carrier_dimension,
        "leakage": document, "leakage_holds": budget.holds(), "targets": [[0, 0]] });
    match serde_json::from_value::<Scenario>(text) {
        Ok(scenario) => {
            assert_eq!(scenario.leakage(), [budget.leakage(); 2]);
            assert_eq!(scenario.leakage_budget(), Some(budget));
            let written = serde_json::to_vec(&scenario).unwrap();
            assert_eq!(parse::<Scenario>(&written), Ok(scenario));
        }
        Err(error) => assert!(budget.failure() > 0.5, "{error}"),
    }
}
