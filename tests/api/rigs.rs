//! `/v1/rigs` and `/v1/rigs/{rig}`

use serde_json::{Value, json};

use crate::server::{Running, profile, with_rig};

fn other(notes: &str) -> Value {
    let mut profile = profile();
    profile["notes"] = json!(notes);
    profile
}

#[test]
fn a_profile_is_put_and_got_with_its_defaults() {
    let running = Running::new();
    let client = running.client();
    let put = client.put_rig("bench", &profile(), &[]).expect(201);
    assert_eq!(put.header("location"), Some("/v1/rigs/bench"));
    assert_eq!(put.header("etag"), Some("\"1\""));
    let got = client.get("/v1/rigs/bench").expect(200);
    assert_eq!(got.header("etag"), Some("\"1\""));
    assert_eq!(got.body, put.body);
    assert_eq!(got.json()["failure"], json!({"estimation": 1e-10, "hashing": 1e-10}));
    // What was got can be put as it is: nothing changes.
    client.put_rig("bench", &got.json(), &[]).expect(200);
    assert_eq!(client.get("/v1/rigs/bench").header("etag"), Some("\"1\""));
}

#[test]
fn a_change_says_what_it_changes() {
    let (running, client) = with_rig();
    let before = running.rows();
    client.put_rig("bench", &other("a"), &[]).expect(428);
    client.put_rig("bench", &other("a"), &[("if-match", "\"2\"")]).expect(412);
    client.put_rig("bench", &other("a"), &[("if-match", "W/\"1\"")]).expect(412);
    client.put_rig("bench", &other("a"), &[("if-none-match", "*")]).expect(412);
    client.put_rig("bench", &profile(), &[("if-none-match", "*")]).expect(412);
    client.put_rig("fresh", &profile(), &[("if-match", "\"1\"")]).expect(412);
    client.put_rig("fresh", &profile(), &[("if-match", "*")]).expect(412);
    assert_eq!(running.rows(), before);

    let changed = client.put_rig("bench", &other("a"), &[("if-match", "\"1\"")]).expect(200);
    assert_eq!(changed.header("etag"), Some("\"2\""));
    // Whoever did not hear the answer and sends the change again is told the same.
    let again = client.put_rig("bench", &other("a"), &[("if-match", "\"1\"")]).expect(200);
    assert_eq!(again.header("etag"), Some("\"2\""));
    client.put_rig("bench", &other("b"), &[("if-match", "\"1\"")]).expect(412);
    let listed = client.put_rig("bench", &other("b"), &[("if-match", "\"7\", \"2\"")]).expect(200);
    assert_eq!(listed.header("etag"), Some("\"3\""));
    client.put_rig("bench", &other("c"), &[("if-match", "*")]).expect(200);

    assert_eq!(client.get("/v1/rigs/bench").json()["notes"], "c");
    assert_eq!(client.get("/v1/rigs/bench?version=2").json()["notes"], "a");
    assert_eq!(client.get("/v1/rigs/bench?version=1").json()["notes"], Value::Null);
    client.get("/v1/rigs/bench?version=5").expect(404);
    client.get("/v1/rigs/bench?version=18446744073709551615").expect(404);
}

#[test]
fn of_two_changes_from_one_version_one_wins() {
    let (_running, client) = with_rig();
    let change = |notes: &'static str| {
        let client = client.clone();
        std::thread::spawn(move || client.put_rig("bench", &other(notes), &[("if-match", "\"1\"")]).status)
    };
    let threads: Vec<_> = ["a", "b", "c", "d"].map(change).into_iter().collect();
    let mut statuses: Vec<u16> = threads.into_iter().map(|thread| thread.join().unwrap()).collect();
    statuses.sort();
    assert_eq!(statuses, [200, 412, 412, 412]);
}

#[test]
fn a_version_that_the_client_has_is_not_sent_again() {
    let (_running, client) = with_rig();
    let same = client.call("GET", "/v1/rigs/bench", &[("if-none-match", "W/\"1\"")], None).expect(304);
    assert!(same.body.is_empty());
    client.call("GET", "/v1/rigs/bench", &[("if-none-match", "\"2\"")], None).expect(200);
}

#[test]
fn rigs_are_listed_by_name() {
    let running = Running::new();
    let client = running.client();
    for rig in ["m", "a", "z-9", "b"] {
        client.put_rig(rig, &profile(), &[]).expect(201);
    }
    client.put_rig("m", &other("new"), &[("if-match", "\"1\"")]).expect(200);
    let mut names = vec![];
    let mut path = "/v1/rigs?limit=3".to_owned();
    loop {
        let page = client.get(&path).expect(200);
        let json = page.json();
        names.extend(json["items"].as_array().unwrap().iter().map(|item| item["rig"].as_str().unwrap().to_owned()));
        let Some(next) = json["next"].as_str() else {
            assert_eq!(page.header("link"), None);
            break;
        };
        assert_eq!(page.header("link"), Some(format!("</v1/rigs?limit=3&cursor={next}>; rel=\"next\"").as_str()));
        path = format!("/v1/rigs?limit=3&cursor={next}");
    }
    assert_eq!(names, ["a", "b", "m", "z-9"]);
    let newest = client.get("/v1/rigs").json()["items"][2].clone();
    assert_eq!((&newest["version"], &newest["profile"]["notes"]), (&json!(2), &json!("new")));
}
