//! Every operation of the OpenAPI document × every kind of caller.
//!
//! The table below says who may do what, in words of its own; the document and the server have to agree with it. An operation that is in the
//! document and not in the table fails the test, and so does one that says nothing of access.

use std::collections::BTreeMap;

use bitassay::{
    clock::{Clock, Stamp, SystemClock},
    http::openapi::document,
    ledger::tokens::Tokens,
    profile::RigName,
    token::{Change, Role, Secret, Token},
};
use serde_json::{Value, json};
use uuid::Uuid;

use crate::{
    client::{Client, Reply},
    server::{Running, batch, profile},
};

/// Operation, and the roles that may use it, from the service's description; `public` needs no token.
const TABLE: &[(&str, &str)] = &[
    ("get_bundle", "rig operator auditor"),
    ("get_certification", "rig operator auditor"),
    ("get_checkpoint", "operator auditor"),
    ("get_commitment", "operator auditor"),
    ("get_commitment_witness", "operator auditor"),
    ("get_consistency_proof", "operator auditor"),
    ("get_inclusion_proof", "operator auditor"),
    ("get_leakage", "rig operator auditor"),
    ("get_ledger_entry", "operator auditor"),
    ("get_ledger_key", "operator auditor"),
    ("get_openapi", "public"),
    ("get_rig", "rig operator auditor"),
    ("get_witness", "rig operator auditor"),
    ("get_yield", "rig operator auditor"),
    ("list_certifications", "rig operator auditor"),
    ("list_commitments", "rig operator auditor"),
    ("list_leakage", "operator auditor"),
    ("list_rigs", "operator auditor"),
    ("livez", "public"),
    ("metrics", "public"),
    ("post_batch", "rig"),
    ("post_commitment", "operator"),
    ("post_forecast", "rig operator auditor"),
    ("post_leakage", "rig operator"),
    ("put_rig", "operator"),
    ("readyz", "public"),
];

fn roles_of(operation: &str) -> &'static str {
    let row = TABLE.iter().find(|(name, _)| *name == operation);
    row.unwrap_or_else(|| panic!("{operation} is not in the table: say there who may use it")).1
}

/// Creates a token beside the running server.
pub fn create(running: &Running, role: Role, rigs: &[&str], expires_at: Option<Stamp>) -> (Uuid, String) {
    let secret = Secret::generate().unwrap();
    let rigs = rigs.iter().map(|rig| RigName::try_from((*rig).to_owned()).unwrap()).collect();
    let now = SystemClock.now();
    let token = Uuid::now_v7();
    let created = Token { token, fingerprint: secret.fingerprint(), role, rigs, label: None, expires_at, recorded_at: now };
    change(running, Change::Created(created));
    (token, secret.reveal().to_owned())
}

pub fn revoke(running: &Running, token: Uuid) {
    change(running, Change::Revoked { token, recorded_at: SystemClock.now() });
}

fn change(running: &Running, change: Change) {
    let runtime = tokio::runtime::Runtime::new().unwrap();
    runtime.block_on(async {
        let mut tokens = Tokens::open(&running.database).await.unwrap();
        tokens.keep(&change).await.unwrap();
        tokens.close().await.unwrap();
    });
}

/// One operation of the document.
struct Operation {
    name: String,
    method: String,
    path: String,
    security: Value,
    parameters: Vec<Value>,
}

fn operations() -> Vec<Operation> {
    let document: Value = serde_json::from_str(&document().unwrap()).unwrap();
    let mut found = vec![];
    for (path, item) in document["paths"].as_object().unwrap() {
        for (method, operation) in item.as_object().unwrap() {
            found.push(Operation {
                name: operation["operationId"].as_str().unwrap().to_owned(),
                method: method.to_uppercase(),
                path: path.clone(),
                security: operation["security"].clone(),
                parameters: operation["parameters"].as_array().cloned().unwrap_or_default(),
            });
        }
    }
    assert!(found.len() >= TABLE.len());
    found
}

/// What stands at a place: the rig whose things are asked for, with a certification of it.
struct Subject {
    rig: &'static str,
    certification: String,
}

impl Operation {
    /// Sends the operation with everything filled in that the document asks for, about one rig and its certification.
    fn send(&self, client: &Client, subject: &Subject, round: usize) -> Reply {
        let mut path = self.path.replace("{rig}", subject.rig).replace("{id}", &subject.certification);
        // Whatever else a path asks for stands for something that is not there.
        while let Some(begin) = path.find('{') {
            let end = path.find('}').unwrap();
            path.replace_range(begin..=end, "0");
        }
        let key = format!("{}-{round}", self.name);
        let headers = match self.name.as_str() {
            "post_batch" => vec![("content-type", "application/json"), ("idempotency-key", key.as_str())],
            _ => vec![("content-type", "application/json")],
        };
        let body = match self.name.as_str() {
            "put_rig" => profile(),
            "post_batch" => batch(1000),
            _ => json!({}),
        };
        let body = (self.method != "GET").then(|| body.to_string().into_bytes());
        client.call(&self.method, &path, &headers, body.as_deref())
    }

    fn is_of_one_rig(&self) -> bool {
        self.path.contains("{rig}")
    }
}

/// A server with two rigs, a certification of each, and tokens.
struct Scene {
    _running: Running,
    callers: Vec<(&'static str, Client)>,
    own: Subject,
    other: Subject,
}

fn scene() -> Scene {
    let running = Running::new();
    let open = running.client();
    let subject = |rig: &'static str| {
        open.put_rig(rig, &profile(), &[]).expect(201);
        let record = open.post_batch(rig, "first", &batch(1000)).expect(201).json();
        Subject { rig, certification: record["id"].as_str().unwrap().to_owned() }
    };
    let (own, other) = (subject("own"), subject("other"));
    let past = "2026-01-01T00:00:00Z".parse().unwrap();
    let (revoked, revoked_text) = create(&running, Role::Operator, &[], None);
    revoke(&running, revoked);
    let new = |role, rigs: &[&str], end| open.presenting(&create(&running, role, rigs, end).1);
    let callers = vec![
        ("nobody", open.clone()),
        ("stranger", open.presenting(&format!("bitassay_{}", "0".repeat(64)))),
        ("expired", new(Role::Operator, &[], Some(past))),
        ("revoked", open.presenting(&revoked_text)),
        ("rig", new(Role::Rig, &["own"], None)),
        ("operator", new(Role::Operator, &[], None)),
        ("auditor", new(Role::Auditor, &[], None)),
    ];
    Scene { _running: running, callers, own, other }
}

/// What a status says about access.
fn access(status: u16) -> &'static str {
    match status {
        401 => "401",
        403 => "403",
        _ => "let in",
    }
}

#[test]
fn every_operation_lets_in_whom_it_should_and_nobody_else() {
    let scene = scene();
    let mut round = 0;
    println!("{:<22} {}", "operation", scene.callers.iter().map(|(name, _)| format!("{name:<10}")).collect::<String>() + "rig, of another");
    for operation in operations() {
        let roles = roles_of(&operation.name);
        let stated: Vec<String> = operation
            .security
            .as_array()
            .unwrap_or_else(|| panic!("{}: no security", operation.name))
            .iter()
            .map(|one| one.as_object().unwrap().get("token").map_or("public".to_owned(), |roles| roles[0].as_str().unwrap().to_owned()))
            .collect();
        assert_eq!(stated.join(" "), roles, "{}: the document says otherwise than the table", operation.name);
        let mut row = format!("{:<22} ", operation.name);
        let mut tell = |caller: &str, client: &Client, subject: &Subject, wanted: &str| {
            round += 1;
            let reply = operation.send(client, subject, round);
            let found = access(reply.status);
            assert_eq!(found, wanted, "{} as {caller}: {} {}", operation.name, reply.status, reply.text());
            if found != "let in" {
                let challenge = reply.header("www-authenticate").unwrap_or_default();
                assert!(challenge.starts_with("Bearer realm=\"bitassay\""), "{challenge}");
                assert_eq!(challenge.contains("insufficient_scope"), found == "403", "{challenge}");
                assert_eq!(reply.header("content-type"), Some("application/problem+json"));
                assert_eq!(reply.json()["status"], reply.status);
            }
            row.push_str(&format!("{found:<10}"));
        };
        for (caller, client) in &scene.callers {
            let wanted = match *caller {
                _ if roles == "public" => "let in",
                "rig" | "operator" | "auditor" if roles.split(' ').any(|role| role == *caller) => "let in",
                "rig" | "operator" | "auditor" => "403",
                _ => "401",
            };
            tell(caller, client, &scene.own, wanted);
        }
        // A rig's token at something of another rig.
        let wanted = match roles {
            "public" => "let in",
            roles if !roles.split(' ').any(|role| role == "rig") => "403",
            _ if operation.is_of_one_rig() => "403",
            _ => "let in",
        };
        let rig = &scene.callers[4].1;
        tell("rig, of another", rig, &scene.other, wanted);
        println!("{row}");
    }
}

#[test]
fn a_rig_sees_nothing_of_others() {
    let scene = scene();
    let rig = &scene.callers[4].1;
    let mut round = 1000;
    for operation in operations().into_iter().filter(|operation| roles_of(&operation.name).split(' ').any(|role| role == "rig")) {
        round += 1;
        let reply = operation.send(rig, &scene.other, round);
        let text = reply.text();
        assert!(!text.contains("\"other\"") && !text.contains("other,"), "{}: {text}", operation.name);
        if operation.path.contains("{id}") {
            let nowhere = Subject { rig: "other", certification: "01900000-0000-7000-8000-000000000000".into() };
            let missing = operation.send(rig, &nowhere, round);
            assert_eq!((reply.status, &reply.body), (404, &missing.body), "{}: it shows that there is something", operation.name);
        }
        // What the query may name is bound as well.
        for parameter in &operation.parameters {
            if (parameter["in"].as_str(), parameter["name"].as_str()) == (Some("query"), Some("rig")) {
                rig.get(&format!("{}?rig=other", operation.path)).expect(403);
                assert_eq!(rig.get(&format!("{}?rig=own", operation.path)).expect(200).json()["items"].as_array().unwrap().len(), 1);
            }
        }
    }
    let seen = rig.get("/v1/certifications").expect(200).json();
    let rigs: Vec<&str> = seen["items"].as_array().unwrap().iter().map(|item| item["rig"].as_str().unwrap()).collect();
    assert_eq!(rigs, ["own"]);
    let table = rig.call("GET", "/v1/certifications", &[("accept", "text/csv")], None).expect(200);
    assert!(table.text().contains(",own,") && !table.text().contains(",other,"), "{}", table.text());
    rig.get("/v1/rigs/%6Fther").expect(403);
}

#[test]
fn heads_and_other_methods_are_guarded_too() {
    let scene = scene();
    let nobody = &scene.callers[0].1;
    nobody.call("HEAD", "/v1/certifications", &[], None).expect(401);
    assert_eq!(nobody.call("DELETE", "/v1/rigs/own", &[], None).expect(405).header("allow"), Some("GET,HEAD,PUT"));
    let auditor = &scene.callers[6].1;
    auditor.call("HEAD", "/v1/certifications", &[], None).expect(200);
}

/// Each status that a guard answers is in the document, with its header.
#[test]
fn the_document_tells_what_guards_answer() {
    let document: Value = serde_json::from_str(&document().unwrap()).unwrap();
    assert_eq!(document["components"]["securitySchemes"]["token"]["scheme"], "bearer");
    let mut told = BTreeMap::new();
    for item in document["paths"].as_object().unwrap().values() {
        for operation in item.as_object().unwrap().values() {
            let name = operation["operationId"].as_str().unwrap();
            let status = |status: &str| operation["responses"].get(status).is_some();
            told.insert(name.to_owned(), ["401", "403", "429"].map(status));
            assert!(status("default"), "{name}");
        }
    }
    for (name, told) in told {
        assert_eq!(told, [roles_of(&name) != "public"; 3], "{name}");
    }
}
