//! `/v1/certifications` and what is below it

use std::collections::HashSet;

use serde_json::Value;

use crate::{
    client::Client,
    server::{batch, profile, with_rig},
};

/// Posts a batch; answers with the record's identifier.
fn post(client: &Client, rig: &str, key: &str, first: u64) -> String {
    let reply = client.post_batch(rig, key, &batch(first));
    let location = reply.header("location").unwrap_or_else(|| panic!("{}", reply.text()));
    location.rsplit('/').next().unwrap().to_owned()
}

fn ids(page: &Value) -> Vec<String> {
    page["items"].as_array().unwrap().iter().map(|item| item["id"].as_str().unwrap().to_owned()).collect()
}

#[test]
fn pages_stay_where_they_are_while_records_arrive() {
    let (_running, client) = with_rig();
    let mut posted: Vec<String> = (0..10).map(|i| post(&client, "bench", &format!("k{i}"), 1000 + i)).collect();
    posted.reverse();
    let mut seen = vec![];
    let mut path = "/v1/certifications?limit=3".to_owned();
    for arrival in 0.. {
        let page = client.get(&path).expect(200);
        let json = page.json();
        seen.extend(ids(&json));
        let Some(next) = json["next"].as_str() else {
            assert_eq!(page.header("link"), None);
            break;
        };
        let link = page.header("link").unwrap();
        path = link.strip_prefix('<').unwrap().strip_suffix(">; rel=\"next\"").unwrap().to_owned();
        assert!(path.contains(next), "{link}");
        // New records go before what is being read.
        post(&client, "bench", &format!("late{arrival}"), 1000);
    }
    assert_eq!(seen, posted);
}

#[test]
fn the_history_is_filtered() {
    let (_running, client) = with_rig();
    client.put_rig("other", &profile(), &[]).expect(201);
    let certified = post(&client, "bench", "a", 1000);
    let refused = post(&client, "bench", "b", 999);
    let estimate = post(&client, "other", "c", 2);
    let also_refused = post(&client, "other", "d", 1001);
    let list = |query: &str| ids(&client.get(&format!("/v1/certifications?{query}")).expect(200).json());
    assert_eq!(list(""), [&*also_refused, &*estimate, &*refused, &*certified]);
    assert_eq!(list("rig=other"), [&*also_refused, &*estimate]);
    assert_eq!(list("verdict=refused"), [&*also_refused, &*refused]);
    assert_eq!(list("verdict=estimate"), [&*estimate]);
    assert_eq!(list("verdict=certified&rig=other"), Vec::<String>::new());
    assert_eq!(list("rig=nobody"), Vec::<String>::new());
    let recorded_at = client.get(&format!("/v1/certifications/{estimate}")).json()["recorded_at"].as_str().unwrap().to_owned();
    assert_eq!(list(&format!("since={recorded_at}")), [&*also_refused, &*estimate]);
    assert_eq!(list(&format!("until={recorded_at}")), [&*refused, &*certified]);
    // The next page keeps the filters.
    let page = client.get(&format!("/v1/certifications?verdict=refused&limit=1&since=2020-01-01T00:00:00Z&until={recorded_at}&rig=bench"));
    assert_eq!(page.header("link"), None);
    let page = client.get("/v1/certifications?verdict=refused&limit=1&since=2020-01-01T00:00:00Z").expect(200);
    let link = page.header("link").unwrap().trim_start_matches('<').split('>').next().unwrap().to_owned();
    assert_eq!(ids(&client.get(&link).expect(200).json()), [&*refused]);
}

#[test]
fn the_history_comes_as_rows_too() {
    let (_running, client) = with_rig();
    let certified = post(&client, "bench", "a", 1000);
    let refused = post(&client, "bench", "b", 999);
    let csv = client.call("GET", "/v1/certifications?limit=2", &[("accept", "text/csv")], None).expect(200);
    assert_eq!(csv.header("content-type"), Some("text/csv; charset=utf-8; header=present"));
    assert_eq!(csv.header("vary"), Some("Accept"));
    let mut reader = csv::Reader::from_reader(&csv.body[..]);
    let columns = reader.headers().unwrap().clone();
    let rows: Vec<csv::StringRecord> = reader.records().map(Result::unwrap).collect();
    let field = |row: usize, name: &str| rows[row][columns.iter().position(|column| column == name).unwrap()].to_owned();
    assert_eq!((rows.len(), field(0, "id"), field(1, "id")), (2, refused, certified.clone()));
    assert_eq!((field(0, "reason").as_str(), field(1, "reason").as_str()), ("zero-bound", ""));
    let record = client.get(&format!("/v1/certifications/{certified}")).json();
    for name in ["rig", "recorded_at", "started_at", "verdict", "counts_digest", "version"] {
        assert_eq!(field(1, name), record[name].as_str().unwrap());
    }
    for name in ["profile_version", "total_rounds", "certified_bits", "bits_per_round"] {
        assert_eq!(field(1, name), record[name].to_string());
    }
    assert_eq!(field(1, "failure"), record["failure"]["total"].to_string());
    let first = client.call("GET", "/v1/certifications?limit=1", &[("accept", "text/csv")], None).expect(200);
    assert!(first.header("link").unwrap().starts_with("</v1/certifications?limit=1&cursor="));
}

#[test]
fn a_witness_is_kept_once_and_found_by_its_digest() {
    let (running, client) = with_rig();
    let first = post(&client, "bench", "a", 1000);
    let second = post(&client, "bench", "b", 1002);
    let refused = post(&client, "bench", "c", 999);
    let of = |id: &str| client.get(&format!("/v1/certifications/{id}/witness")).expect(200).json();
    assert_eq!(of(&first)["certification"], first.as_str());
    assert_eq!(of(&first)["witnesses"], of(&second)["witnesses"]);
    assert_eq!(of(&refused)["witnesses"], serde_json::json!({}));
    let record = client.get(&format!("/v1/certifications/{first}")).json();
    let targets = record["targets"].as_array().unwrap().iter();
    let named: HashSet<&str> =
        targets.flat_map(|target| [&target["witness"], &target["power"]["witness"]]).map(|digest| digest.as_str().unwrap()).collect();
    let found = of(&first);
    assert_eq!(found["witnesses"].as_object().unwrap().keys().map(String::as_str).collect::<HashSet<_>>(), named);
    // The document still has the digest that it goes by.
    for (digest, document) in found["witnesses"].as_object().unwrap() {
        let witness: bitassay::witness::witness::Witness = serde_json::from_value(document.clone()).unwrap();
        assert_eq!(&witness.digest(), digest);
    }
    let rows: std::collections::HashMap<_, _> = running.rows().into_iter().collect();
    assert_eq!((rows["witnesses"], rows["certification_witnesses"]), (2, 4));
}

#[test]
fn what_was_never_issued_is_not_found() {
    let (_running, client) = with_rig();
    let id = post(&client, "bench", "a", 1000);
    for id in ["01900000-0000-7000-8000-000000000000", "x", "1", &id.to_uppercase(), &id.replace('-', "")] {
        client.get(&format!("/v1/certifications/{id}")).expect(404);
        client.get(&format!("/v1/certifications/{id}/witness")).expect(404);
    }
}

#[test]
fn heads_can_be_asked_for_alone() {
    let (_running, client) = with_rig();
    let id = post(&client, "bench", "a", 1000);
    for path in ["/v1/certifications", &format!("/v1/certifications/{id}"), "/v1/rigs/bench", "/v1/rigs", "/v1/rigs/bench/yield", "/livez"]
    {
        let whole = client.get(path).expect(200);
        let head = client.call("HEAD", path, &[], None).expect(200);
        assert_eq!(head.header("content-length"), Some(whole.body.len().to_string().as_str()), "{path}");
        assert!(head.body.is_empty());
    }
}

/// Findings about the data stand in the record beside the certificate, and change none of its figures.
#[test]
fn a_record_says_what_is_odd_about_its_data() {
    let (_running, client) = with_rig();
    let mut declared = profile();
    declared["setting_distribution"] = serde_json::json!([[0.5], [0.5]]);
    client.put_rig("odd", &declared, &[]).expect(201);
    let plain = client.post_batch("odd", "plain", &batch(1000)).expect(201).json();
    assert_eq!(plain["concerns"], serde_json::json!([]));
    // Three times as many rounds of the second preparation, with other outcomes.
    let mut odd = batch(1000);
    odd["counts"] = serde_json::json!([[[1500, 500]], [[5000, 1000]]]);
    let answer = client.post_batch("odd", "odd", &odd).expect(201).json();
    let concerns: Vec<&str> = answer["concerns"].as_array().unwrap().iter().filter_map(|concern| concern["concern"].as_str()).collect();
    assert!(concerns.contains(&"setting-imbalance") && concerns.contains(&"outcome-drift"), "{answer}");
    assert!(answer["concerns"][0]["detail"].as_str().is_some_and(|detail| detail.contains("setting distribution")));
}
