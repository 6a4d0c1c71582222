//! `/livez` and `/readyz`

use crate::server::Running;

#[test]
fn a_running_server_is_live_and_ready() {
    let running = Running::new();
    let client = running.client();
    assert_eq!(client.get("/livez").expect(200).json()["status"], "live");
    let ready = client.get("/readyz").expect(200).json();
    let names: Vec<&str> = ready["checks"].as_array().unwrap().iter().map(|check| check["name"].as_str().unwrap()).collect();
    assert_eq!(names, ["accepting", "database", "writer", "ledger", "solvers"]);
}
