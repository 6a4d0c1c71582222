//! `/v1/leakage`

use serde_json::json;

use crate::server::with_rig;

const JSON: [(&str, &str); 1] = [("content-type", "application/json")];

#[test]
fn a_budget_is_added_up_with_its_assumptions() {
    let (_running, client) = with_rig();
    // Poisson tail P(n ≥ 2) at mean 0.1, a handbook value: 0.00468; plus a side mode of 0.001.
    let budget = json!({ "carrier_dimension": 2, "contributions": [
        { "source": "coherent", "mean_photon_number": 0.1 }, { "source": "side-mode", "weight": 0.001 }] });
    let report = client.call("POST", "/v1/leakage", &JSON, Some(budget.to_string().as_bytes())).expect(200).json();
    let leakage = report["leakage"].as_f64().unwrap();
    assert!((leakage - 0.005_678_840_160_444).abs() < 1e-12, "{leakage}");
    assert_eq!((&report["leakage_holds"], &report["failure"]), (&json!("on-average"), &json!(0.0)));
    assert_eq!(report["contributions"].as_array().unwrap().len(), 2);
    assert!(report["contributions"][0]["assumptions"].as_array().is_some_and(|assumptions| !assumptions.is_empty()));
}

#[test]
fn what_cannot_be_measured_is_refused_with_a_pointer() {
    let (_running, client) = with_rig();
    let coherent = json!({ "source": "coherent", "mean_photon_number": 0.1 });
    let cases = [
        (json!({ "carrier_dimension": 0, "contributions": [coherent] }), 422, "/carrier_dimension"),
        (json!({ "carrier_dimension": 2, "contributions": [] }), 422, "/contributions"),
        (
            json!({ "carrier_dimension": 2, "contributions": [{ "source": "coherent", "mean_photon_number": -0.1 }] }),
            422,
            "/contributions/0/mean_photon_number",
        ),
        (json!({ "carrier_dimension": 2, "contributions": [{ "source": "g2", "g2": 0.02 }] }), 400, "/contributions/0"),
        (
            json!({ "carrier_dimension": 2, "contributions": [
                { "source": "heralded", "pairs": "thermal", "mean_pairs": 0.1, "herald_efficiency": 1.2 }] }),
            422,
            "/contributions/0/herald_efficiency",
        ),
        (json!({ "carrier_dimension": 2, "contributions": [coherent], "more": 1 }), 400, "/more"),
    ];
    for (budget, status, pointer) in cases {
        let problem = client.call("POST", "/v1/leakage", &JSON, Some(budget.to_string().as_bytes())).expect(status).json();
        assert_eq!(problem["pointer"], pointer, "{budget}: {problem}");
    }
}
