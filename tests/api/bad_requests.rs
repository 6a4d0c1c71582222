//! What is turned away, with what status, and what is blamed for it. None of it leaves a trace.

use serde_json::{Value, json};

use crate::server::{batch, profile, with_rig};

/// What a problem blames.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Blame {
    Pointer(&'static str),
    Parameter(&'static str),
    Header(&'static str),
    Nothing,
}
use Blame::{Header, Nothing, Parameter, Pointer};

struct Case {
    name: &'static str,
    method: &'static str,
    path: String,
    headers: Vec<(&'static str, &'static str)>,
    body: Option<Vec<u8>>,
    status: u16,
    blame: Blame,
}

const JSON: (&str, &str) = ("content-type", "application/json");
const CSV: (&str, &str) = ("content-type", "text/csv");
const KEY: (&str, &str) = ("idempotency-key", "bad");
const TIMES: &str = "started_at=2026-03-01T12:00:00Z&ended_at=2026-03-01T12:05:00Z";

fn put(name: &'static str, body: impl Into<Vec<u8>>, status: u16, blame: Blame) -> Case {
    Case { name, method: "PUT", path: "/v1/rigs/fresh".into(), headers: vec![JSON], body: Some(body.into()), status, blame }
}

/// A profile with one member changed.
fn declare(name: &'static str, at: &str, value: Value, status: u16, blame: Blame) -> Case {
    put(name, changed(profile(), at, value).to_string(), status, blame)
}

fn post(name: &'static str, body: impl Into<Vec<u8>>, status: u16, blame: Blame) -> Case {
    Case { name, method: "POST", path: "/v1/rigs/bench/batches".into(), headers: vec![JSON, KEY], body: Some(body.into()), status, blame }
}

/// A commitment for the rig `vault`, whose rounds have memory, with one member changed.
fn order(name: &'static str, at: &str, value: Value, status: u16, blame: Blame) -> Case {
    let good = json!({"expected_behaviour": [[[0.78, 0.22]], [[0.22, 0.78]]], "setting_distribution": [[0.5], [0.5]], "rounds": 400_000});
    commit(name, changed(good, at, value).to_string(), status, blame)
}

fn commit(name: &'static str, body: impl Into<Vec<u8>>, status: u16, blame: Blame) -> Case {
    post(name, body, status, blame).with(&[JSON]).via("POST", "/v1/rigs/vault/commitments")
}

/// A batch with one member changed.
fn report(name: &'static str, at: &str, value: Value, status: u16, blame: Blame) -> Case {
    post(name, changed(batch(1000), at, value).to_string(), status, blame)
}

fn rows(name: &'static str, query: &str, rows: &str, status: u16, blame: Blame) -> Case {
    let path = format!("/v1/rigs/bench/batches?{query}");
    Case { name, method: "POST", path, headers: vec![CSV, KEY], body: Some(rows.into()), status, blame }
}

fn get(name: &'static str, path: &str, status: u16, blame: Blame) -> Case {
    Case { name, method: "GET", path: path.into(), headers: vec![], body: None, status, blame }
}

impl Case {
    fn via(mut self, method: &'static str, path: &str) -> Self {
        self.method = method;
        self.path = path.into();
        self
    }

    fn with(mut self, headers: &[(&'static str, &'static str)]) -> Self {
        self.headers = headers.to_vec();
        self
    }
}

/// The document with the member at a pointer set, and created if need be.
fn changed(mut document: Value, at: &str, value: Value) -> Value {
    let (parent, member) = at.rsplit_once('/').unwrap();
    match document.pointer_mut(parent).unwrap() {
        Value::Array(items) => items[member.parse::<usize>().unwrap()] = value,
        parent => parent[member] = value,
    }
    document
}

fn without(mut document: Value, member: &str) -> String {
    document.as_object_mut().unwrap().remove(member).unwrap();
    document.to_string()
}

fn profiles() -> Vec<Case> {
    let good = || profile().to_string();
    vec![
        put("no JSON", "nonsense", 400, Pointer("")),
        put("nothing", "", 400, Pointer("")),
        put("JSON that ends early", r#"{"scenario": {"preparations": 2, "meas"#, 400, Pointer("/scenario")),
        put("JSON that goes on", good() + "{}", 400, Pointer("")),
        put("no UTF-8", b"{\"notes\": \"\xff\"}".to_vec(), 400, Pointer("/notes")),
        put(
            "no object",
            r#"[[2, 1, 2, 1, 0.1, "on-average", [[0, 0]]], "independent", [0.1, 0.1], "lean", null, null, null]"#,
            400,
            Pointer(""),
        ),
        put("too deep", format!("{{\"setting_distribution\": {}", "[".repeat(200)), 400, Pointer("/setting_distribution/0/0")),
        put("a member twice", r#"{"rounds": "independent", "rounds": "plug-in"}"#, 400, Pointer("")),
        put("no scenario", without(profile(), "scenario"), 400, Pointer("")),
        put("no rounds", without(profile(), "rounds"), 400, Pointer("")),
        declare("an unknown member", "/colour", json!("red"), 400, Pointer("/colour")),
        declare("an unknown member of the scenario", "/scenario/colour", json!("red"), 400, Pointer("/scenario/colour")),
        declare("negative preparations", "/scenario/preparations", json!(-1), 400, Pointer("/scenario/preparations")),
        declare("half a preparation", "/scenario/preparations", json!(1.5), 400, Pointer("/scenario/preparations")),
        declare("no preparations", "/scenario/preparations", json!(0), 422, Pointer("/scenario/preparations")),
        declare("too many preparations", "/scenario/preparations", json!(33), 422, Pointer("/scenario/preparations")),
        declare("too many measurements", "/scenario/measurements", json!(9), 422, Pointer("/scenario/measurements")),
        declare("a single outcome", "/scenario/outcomes", json!(1), 422, Pointer("/scenario/outcomes")),
        declare("dimension zero", "/scenario/carrier_dimension", json!(0), 422, Pointer("/scenario/carrier_dimension")),
        declare("a leakage in words", "/scenario/leakage", json!("small"), 400, Pointer("/scenario/leakage")),
        declare("a leakage above one", "/scenario/leakage", json!(1.01), 422, Pointer("/scenario/leakage")),
        declare("a negative leakage", "/scenario/leakage", json!([0, -0.1]), 422, Pointer("/scenario/leakage/1")),
        declare("a leakage too many", "/scenario/leakage", json!([0, 0, 0]), 422, Pointer("/scenario/leakage")),
        declare("an unknown reading", "/scenario/leakage_holds", json!("sometimes"), 400, Pointer("/scenario/leakage_holds")),
        declare("no targets", "/scenario/targets", json!([]), 422, Pointer("/scenario/targets")),
        declare("a target elsewhere", "/scenario/targets", json!([[2, 0]]), 422, Pointer("/scenario/targets/0/0")),
        declare("a target twice", "/scenario/targets", json!([[0, 0], [0, 0]]), 422, Pointer("/scenario/targets/1")),
        declare("half a target", "/scenario/targets", json!([[0]]), 400, Pointer("/scenario/targets/0")),
        declare("unknown rounds", "/rounds", json!("guessed"), 400, Pointer("/rounds")),
        declare("a failure of one", "/failure", json!({"estimation": 1, "hashing": 1e-10}), 422, Pointer("/failure/estimation")),
        declare("no failure at all", "/failure", json!({"estimation": 1e-10, "hashing": 0}), 422, Pointer("/failure/hashing")),
        declare("an unknown level", "/level", json!("dull"), 400, Pointer("/level")),
        declare("a distribution of another shape", "/setting_distribution", json!([[0.5, 0.5]]), 422, Pointer("/setting_distribution")),
        declare("a distribution that misses one", "/setting_distribution", json!([[0.5], [0.6]]), 422, Pointer("/setting_distribution")),
        declare("a setting that is never used", "/setting_distribution", json!([[1], [0]]), 422, Pointer("/setting_distribution/1/0")),
        declare("a label too few", "/outcome_labels", json!(["click"]), 422, Pointer("/outcome_labels")),
        declare("a label twice", "/outcome_labels", json!(["click", "click"]), 422, Pointer("/outcome_labels/1")),
        declare("a label that is no text", "/outcome_labels", json!(["click", 0]), 400, Pointer("/outcome_labels/1")),
        declare("endless notes", "/notes", json!("x".repeat(4097)), 422, Pointer("/notes")),
        put(
            "a large scenario",
            {
                let large = changed(profile(), "/scenario/preparations", json!(32));
                let large = changed(changed(large, "/scenario/measurements", json!(8)), "/scenario/outcomes", json!(8));
                changed(large, "/level", json!("sharp")).to_string()
            },
            422,
            Pointer("/level"),
        ),
        put("a large body", " ".repeat(256 * 1024 + 1), 413, Nothing),
        put("a profile as CSV", good(), 415, Header("Content-Type")).with(&[CSV]),
        put("a body of no stated type", good(), 415, Header("Content-Type")).with(&[]),
        put("another character set", good(), 415, Header("Content-Type")).with(&[("content-type", "application/json; charset=latin1")]),
        put("a compressed body", good(), 415, Header("Content-Encoding")).with(&[JSON, ("content-encoding", "gzip")]),
        put("a tag without quotes", good(), 400, Header("If-Match")).with(&[JSON, ("if-match", "1")]),
        put("both conditions", good(), 400, Header("If-None-Match")).with(&[JSON, ("if-match", "\"1\""), ("if-none-match", "*")]),
        put("a change out of nowhere", good(), 412, Nothing).with(&[JSON, ("if-match", "\"1\"")]),
        put("a name in capitals", good(), 400, Parameter("rig")).via("PUT", "/v1/rigs/Bench"),
        put("a name that is no text", good(), 400, Parameter("rig")).via("PUT", "/v1/rigs/%ff"),
        put("a parameter", good(), 400, Parameter("force")).via("PUT", "/v1/rigs/fresh?force=1"),
        put("a change without a condition", changed(profile(), "/notes", json!("x")).to_string(), 428, Header("If-Match"))
            .via("PUT", "/v1/rigs/bench"),
    ]
}

fn batches() -> Vec<Case> {
    let good = || batch(1000).to_string();
    vec![
        post("no JSON", "1,2,3", 400, Pointer("")),
        post("no counts", without(batch(1000), "counts"), 400, Pointer("")),
        post("no start", without(batch(1000), "started_at"), 400, Pointer("")),
        report("an unknown member", "/colour", json!("red"), 400, Pointer("/colour")),
        report("the profile's business", "/level", json!("sharp"), 400, Pointer("/level")),
        report("a negative count", "/counts/0/0/1", json!(-1), 400, Pointer("/counts/0/0/1")),
        report("half a count", "/counts/1/0/0", json!(0.5), 400, Pointer("/counts/1/0/0")),
        report("a count as text", "/counts/1/0/0", json!("10"), 400, Pointer("/counts/1/0/0")),
        report("a count beyond 64 bits", "/counts/1/0/0", json!(1e300), 400, Pointer("/counts/1/0/0")),
        report("counts that are no table", "/counts", json!([1, 2]), 400, Pointer("/counts/0")),
        report("a preparation too few", "/counts", json!([[[1, 1]]]), 422, Pointer("/counts")),
        report("a measurement too many", "/counts/1", json!([[1, 1], [1, 1]]), 422, Pointer("/counts/1")),
        report("an outcome too few", "/counts/0/0", json!([1]), 422, Pointer("/counts/0/0")),
        report("an empty setting", "/counts/1/0", json!([0, 0]), 422, Pointer("/counts/1/0")),
        report("more rounds than are exact", "/counts/1/0/1", json!(9_007_199_254_740_993u64), 422, Pointer("/counts/1/0/1")),
        report("a start that is no time", "/started_at", json!("yesterday"), 400, Pointer("/started_at")),
        report("a time without a zone", "/ended_at", json!("2026-03-01T12:05:00"), 400, Pointer("/ended_at")),
        report("an end before the start", "/ended_at", json!("2026-03-01T11:59:59Z"), 422, Pointer("/ended_at")),
        report("a leakage above one", "/leakage", json!(2), 422, Pointer("/leakage")),
        report("a leakage too few", "/leakage", json!([0.1]), 422, Pointer("/leakage")),
        report("a negative leakage", "/leakage", json!([0.1, -0.1]), 422, Pointer("/leakage/1")),
        report("lost rounds without a treatment", "/lost_rounds", json!({"counts": [[1], [1]]}), 400, Pointer("/lost_rounds")),
        report(
            "lost rounds of another shape",
            "/lost_rounds",
            json!({"counts": [[1]], "treatment": "fair-sampling"}),
            422,
            Pointer("/lost_rounds/counts"),
        ),
        report(
            "lost rounds as an outcome there is not",
            "/lost_rounds",
            json!({"counts": [[1], [1]], "treatment": {"as-outcome": 2}}),
            422,
            Pointer("/lost_rounds/treatment/as-outcome"),
        ),
        post("no key", good(), 400, Header("Idempotency-Key")).with(&[JSON]),
        post("an empty key", good(), 400, Header("Idempotency-Key")).with(&[JSON, ("idempotency-key", "")]),
        post("a key with a space", good(), 400, Header("Idempotency-Key")).with(&[JSON, ("idempotency-key", "a b")]),
        post("two keys", good(), 400, Header("Idempotency-Key")).with(&[JSON, KEY, ("idempotency-key", "b")]),
        post("a key of another batch", good(), 422, Header("Idempotency-Key")).with(&[JSON, ("idempotency-key", "taken")]),
        post("a large body", " ".repeat(1024 * 1024 + 1), 413, Nothing),
        post("plain text", good(), 415, Header("Content-Type")).with(&[("content-type", "text/plain"), KEY]),
        post("an answer in another form", good(), 406, Header("Accept")).with(&[JSON, KEY, ("accept", "text/html")]),
        post("options in the query", good(), 400, Parameter("leakage")).via("POST", "/v1/rigs/bench/batches?leakage=0.1"),
        post("a rig that nobody declared", good(), 404, Nothing).via("POST", "/v1/rigs/fresh/batches"),
        rows("rows without times", "", "preparation,measurement,outcome,count\n", 400, Parameter("started_at")),
        rows("rows without an end", "started_at=2026-03-01T12:00:00Z", "", 400, Parameter("ended_at")),
        rows("a start twice", "started_at=2026-03-01T12:00:00Z&started_at=2026-03-01T12:00:00Z", "", 400, Parameter("started_at")),
        rows("an unknown option", &format!("{TIMES}&colour=red"), "", 400, Parameter("colour")),
        rows("a leakage that is no number", &format!("{TIMES}&leakage=small"), "", 400, Parameter("leakage")),
        rows("no rows", TIMES, "", 400, Pointer("/lines/1")),
        rows("other columns", TIMES, "x,y,b,n\n", 400, Pointer("/lines/1")),
        rows("a field too few", TIMES, "preparation,measurement,outcome,count\n0,0,0\n", 400, Pointer("/lines/2")),
        rows("a negative count", TIMES, "preparation,measurement,outcome,count\n0,0,0,1\n0,0,1,-1\n", 400, Pointer("/lines/3/count")),
        rows("a signed count", TIMES, "preparation,measurement,outcome,count\n0,0,0,+1\n", 400, Pointer("/lines/2/count")),
        rows("a preparation there is not", TIMES, "preparation,measurement,outcome,count\n2,0,0,1\n", 422, Pointer("/lines/2/preparation")),
        rows("a combination twice", TIMES, "preparation,measurement,outcome,count\n0,0,0,1\n0,0,0,1\n", 422, Pointer("/lines/3")),
        rows("an empty setting", TIMES, "preparation,measurement,outcome,count\n0,0,0,1\n", 422, Pointer("")),
        rows(
            "a leakage above one",
            &format!("{TIMES}&leakage=2"),
            "preparation,measurement,outcome,count\n0,0,0,1\n1,0,0,1\n",
            422,
            Parameter("leakage"),
        ),
        rows(
            "an end before the start",
            "started_at=2026-03-01T12:00:00Z&ended_at=2026-03-01T11:00:00Z",
            "preparation,measurement,outcome,count\n0,0,0,1\n1,0,0,1\n",
            422,
            Parameter("ended_at"),
        ),
    ]
}

fn commitments() -> Vec<Case> {
    let good =
        || json!({"expected_behaviour": [[[0.78, 0.22]], [[0.22, 0.78]]], "setting_distribution": [[0.5], [0.5]], "rounds": 400_000});
    let unknown = json!("01900000-0000-7000-8000-000000000000");
    vec![
        commit("no JSON", "certainly", 400, Pointer("")),
        commit("no object", "[]", 400, Pointer("")),
        commit("no rounds", without(good(), "rounds"), 400, Pointer("")),
        commit("nothing expected", without(good(), "expected_behaviour"), 422, Pointer("/expected_behaviour")),
        commit("no distribution anywhere", without(good(), "setting_distribution"), 422, Pointer("/setting_distribution")),
        order("an unknown member", "/colour", json!("red"), 400, Pointer("/colour")),
        order("the profile's business", "/scenario", json!({}), 400, Pointer("/scenario")),
        order("half a round", "/rounds", json!(0.5), 400, Pointer("/rounds")),
        order("no rounds at all", "/rounds", json!(0), 422, Pointer("/rounds")),
        order("endless rounds", "/rounds", json!(u64::MAX), 422, Pointer("/rounds")),
        order("too few rounds for a bit", "/rounds", json!(10), 422, Nothing),
        order("an outcome too few", "/expected_behaviour/1/0", json!([1.0]), 422, Pointer("/expected_behaviour/1/0")),
        order("a preparation too few", "/expected_behaviour", json!([[[0.5, 0.5]]]), 422, Pointer("/expected_behaviour")),
        order("a probability above one", "/expected_behaviour/0/0/1", json!(1.5), 422, Pointer("/expected_behaviour/0/0/1")),
        order("probabilities that miss one", "/expected_behaviour/0/0/1", json!(0.5), 422, Pointer("/expected_behaviour/0/0")),
        order("a probability as text", "/expected_behaviour/0/0/1", json!("0.22"), 400, Pointer("/expected_behaviour/0/0/1")),
        order("a distribution that misses one", "/setting_distribution", json!([[0.5], [0.4999]]), 422, Pointer("/setting_distribution")),
        order("a setting that is never used", "/setting_distribution", json!([[1], [0]]), 422, Pointer("/setting_distribution/1/0")),
        order("a failure of one", "/failure", json!({"estimation": 1, "hashing": 1e-10}), 422, Pointer("/failure/estimation")),
        order("an unknown level", "/level", json!("dull"), 400, Pointer("/level")),
        order("expected twice", "/certification", unknown.clone(), 422, Pointer("/certification")),
        order("a certification that is none", "/certification", json!("yesterday's"), 400, Pointer("/certification")),
        commit(
            "a certification that is not",
            json!({"certification": unknown, "setting_distribution": [[0.5], [0.5]], "rounds": 400_000}).to_string(),
            422,
            Pointer("/certification"),
        ),
        commit("a commitment as CSV", good().to_string(), 415, Header("Content-Type")).with(&[CSV]),
        commit("a large commitment", " ".repeat(256 * 1024 + 1), 413, Nothing),
        commit("a parameter", good().to_string(), 400, Parameter("force")).via("POST", "/v1/rigs/vault/commitments?force=1"),
        commit("a rig whose rounds have no memory", good().to_string(), 422, Nothing).via("POST", "/v1/rigs/bench/commitments"),
        commit("a rig that nobody declared", good().to_string(), 404, Nothing).via("POST", "/v1/rigs/fresh/commitments"),
        post("a batch that nothing was committed for", batch(1000).to_string(), 422, Nothing).via("POST", "/v1/rigs/vault/batches"),
    ]
}

fn questions() -> Vec<Case> {
    vec![
        get("commitments of nobody", "/v1/rigs/fresh/commitments", 404, Nothing),
        get("a commitment that is not", "/v1/commitments/01900000-0000-7000-8000-000000000000", 404, Nothing),
        get("a commitment that cannot be", "/v1/commitments/x", 404, Nothing),
        get("a page of no commitments", "/v1/rigs/vault/commitments?limit=0", 400, Parameter("limit")),
        get("a cursor of other commitments", "/v1/rigs/vault/commitments?cursor=MTIz", 400, Parameter("cursor")),
        get("nothing there", "/v1/nothing", 404, Nothing),
        get("nothing at the root", "/", 404, Nothing),
        get("a slash too many", "/v1/rigs/", 404, Nothing),
        get("a rig that nobody declared", "/v1/rigs/fresh", 404, Nothing),
        get("a rig that cannot be", "/v1/rigs/-", 400, Parameter("rig")),
        get("a version that is no number", "/v1/rigs/bench?version=x", 400, Parameter("version")),
        get("a yield of nobody", "/v1/rigs/fresh/yield", 404, Nothing),
        get("a yield of nothing", "/v1/rigs/bench/yield?batches=0", 400, Parameter("batches")),
        get("a yield of two windows", "/v1/rigs/bench/yield?batches=1&since=2026-01-01T00:00:00Z", 400, Parameter("since")),
        get("a certification that is not", "/v1/certifications/01900000-0000-7000-8000-000000000000", 404, Nothing),
        get("a verdict there is not", "/v1/certifications?verdict=good", 400, Parameter("verdict")),
        get("a limit of zero", "/v1/certifications?limit=0", 400, Parameter("limit")),
        get("a limit too high", "/v1/certifications?limit=201", 400, Parameter("limit")),
        get("a limit in words", "/v1/certifications?limit=many", 400, Parameter("limit")),
        get("a limit twice", "/v1/certifications?limit=1&limit=1", 400, Parameter("limit")),
        get("a time that is none", "/v1/certifications?since=now", 400, Parameter("since")),
        get("a plus that is a space", "/v1/certifications?until=2026-01-01T00:00:00+01:00", 400, Parameter("until")),
        get("a made-up cursor", "/v1/certifications?cursor=MTIz", 400, Parameter("cursor")),
        get("a cursor that is no text", "/v1/certifications?cursor=%ff", 400, Parameter("cursor")),
        get("a cursor of another collection", "/v1/certifications?cursor=cmlnczphYmM", 400, Parameter("cursor")),
        get("an unknown parameter", "/v1/certifications?order=up", 400, Parameter("order")),
        get("a table as XML", "/v1/certifications", 406, Header("Accept")).with(&[("accept", "application/xml")]),
        get("a record as CSV", "/v1/rigs/bench", 406, Header("Accept")).with(&[("accept", "text/csv")]),
        get("posting to the history", "/v1/certifications", 405, Nothing).via("POST", "/v1/certifications"),
        get("removing a rig", "/v1/rigs/bench", 405, Nothing).via("DELETE", "/v1/rigs/bench"),
        get("getting batches", "/v1/rigs/bench/batches", 405, Nothing),
        get("an invented method", "/v1/rigs", 405, Nothing).via("FROB", "/v1/rigs"),
    ]
}

#[test]
fn bad_requests_are_turned_away_with_a_reason_and_without_a_trace() {
    let (running, client) = with_rig();
    client.post_batch("bench", "taken", &batch(3000)).expect(201);
    client.put_rig("vault", &changed(profile(), "/rounds", json!("memory")), &[]).expect(201);
    let before = running.rows();
    assert!(before.iter().any(|(table, rows)| table == "certifications" && *rows == 1));

    let cases: Vec<Case> = [profiles(), batches(), commitments(), questions()].into_iter().flatten().collect();
    assert!(cases.len() >= 40);
    let mut faults = vec![];
    for case in cases {
        let Case { name, method, path, headers, body, status, blame } = case;
        let reply = client.call(method, &path, &headers, body.as_deref());
        let problem: Value = serde_json::from_slice(&reply.body).unwrap_or_default();
        let error = &problem["errors"][0];
        let blamed =
            [("pointer", error["pointer"].as_str()), ("parameter", error["parameter"].as_str()), ("header", error["header"].as_str())]
                .into_iter()
                .find_map(|(kind, value)| value.map(|value| (kind, value)));
        let wanted = match blame {
            Pointer(pointer) => Some(("pointer", pointer)),
            Parameter(name) => Some(("parameter", name)),
            Header(name) => Some(("header", name)),
            Nothing => None,
        };
        let shaped = reply.header("content-type") == Some("application/problem+json")
            && problem["status"] == status
            && problem["title"].is_string()
            && problem["detail"].as_str().is_some_and(|detail| !detail.is_empty())
            && problem["pointer"].as_str() == wanted.and_then(|(kind, value)| (kind == "pointer").then_some(value));
        if reply.status != status || blamed != wanted || !shaped {
            faults.push(format!("{name}: {method} {path}: wanted {status} {wanted:?}, got {} {}", reply.status, reply.text()));
        }
        let after = running.rows();
        if after != before {
            faults.push(format!("{name}: {method} {path}: left a trace: {after:?}"));
            break;
        }
    }
    assert!(faults.is_empty(), "{}", faults.join("\n"));
}

#[test]
fn a_method_that_is_not_there_names_those_that_are() {
    let (_running, client) = with_rig();
    let reply = client.call("DELETE", "/v1/rigs/bench", &[], None).expect(405);
    assert_eq!(reply.header("allow"), Some("GET,HEAD,PUT"));
}
