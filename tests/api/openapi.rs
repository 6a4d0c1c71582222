//! `/v1/openapi.json` and `api/openapi.json`

use std::path::Path;

use bitassay::http::openapi::document;

use crate::server::Running;

#[test]
fn the_repository_has_the_current_document() {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("api/openapi.json");
    let kept = std::fs::read_to_string(&path).unwrap_or_default();
    assert!(kept == document().unwrap(), "the interface changed: run `cargo run -- openapi > api/openapi.json` and look at the difference");
}

#[test]
fn the_server_describes_itself() {
    let running = Running::new();
    let served = running.client().get("/v1/openapi.json").expect(200);
    assert_eq!(served.text(), document().unwrap());
    assert_eq!(served.json()["openapi"], "3.1.0");
}

#[test]
fn every_reference_leads_somewhere() {
    let document: serde_json::Value = serde_json::from_str(&document().unwrap()).unwrap();
    let text = document.to_string();
    let references = text.split("\"$ref\":\"").skip(1).map(|rest| rest.split('"').next().unwrap());
    for reference in references {
        assert!(document.pointer(reference.strip_prefix('#').unwrap()).is_some(), "{reference}");
    }
}
