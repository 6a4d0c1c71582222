//! Where a fault says that a document is wrong.

use bitassay::fault::Fault;
use serde_json::Value;

/// Asserts that a fault names a place of the document: one that is there, or a member that an object left out.
pub fn assert_points_into(document: &[u8], fault: &Fault) {
    assert!(!fault.detail.is_empty());
    assert!(fault.pointer.is_empty() || fault.pointer.starts_with('/'), "{fault:?} is no pointer");
    // What is no JSON has no places.
    let Ok(document) = serde_json::from_slice::<Value>(document) else { return };
    let (parent, _) = fault.pointer.rsplit_once('/').unwrap_or_default();
    let left_out = || document.pointer(parent).is_some_and(Value::is_object);
    assert!(document.pointer(&fault.pointer).is_some() || left_out(), "{fault:?} points nowhere");
}
