//! `api/examples/`: each request is sent, in order, to one server with the real core, and the answer is compared.
//!
//! What differs from run to run is left out of the comparison: identifiers, times of recording, timings. Figures may differ in
//! their last digits from one kind of processor to another. After a change, write the answers anew with
//! `BITASSAY_WRITE_EXAMPLES=1 cargo test --test api examples` and look at the difference.

use std::{
    fs,
    path::{Path, PathBuf},
    sync::Arc,
};

use bitassay::certify::certify;
use serde_json::Value;

use crate::{
    client::Reply,
    server::{Running, Solving},
};

/// An HTTP message in a file: a first line, headers, an empty line, a body.
#[derive(Debug, Clone)]
struct Message {
    first: String,
    headers: Vec<(String, String)>,
    body: String,
}

impl Message {
    fn read(text: &str) -> Self {
        let (head, body) = text.split_once("\n\n").unwrap_or((text, ""));
        let mut lines = head.lines();
        let first = lines.next().unwrap().to_owned();
        let headers = lines.map(|line| line.split_once(": ").unwrap()).map(|(name, value)| (name.to_owned(), value.to_owned())).collect();
        Self { first, headers, body: body.to_owned() }
    }

    /// An answer as it would stand in a file, JSON indented.
    fn of(reply: &Reply) -> Self {
        let reason = ureq::http::StatusCode::from_u16(reply.status).unwrap().canonical_reason().unwrap();
        let shown = ["content-type", "etag", "location", "link", "idempotency-replayed"];
        let headers = shown.iter().filter_map(|name| reply.header(name).map(|value| ((*name).to_owned(), value.to_owned()))).collect();
        let json = reply.header("content-type").is_some_and(|media| media.ends_with("json"));
        let body = if json { serde_json::to_string_pretty(&reply.json()).unwrap() + "\n" } else { reply.text().replace("\r\n", "\n") };
        Self { first: format!("HTTP/1.1 {} {reason}", reply.status), headers, body }
    }

    fn text(&self) -> String {
        let headers: String = self.headers.iter().map(|(name, value)| format!("{name}: {value}\n")).collect();
        format!("{}\n{headers}\n{}", self.first, self.body)
    }
}

/// Identifiers in a text, in the order of their first appearance.
fn identifiers(text: &str) -> Vec<String> {
    let mut found: Vec<String> = vec![];
    for word in text.split(|c: char| !(c.is_ascii_hexdigit() || c == '-')) {
        if uuid::Uuid::try_parse(word).is_ok_and(|id| id.to_string() == word) && !found.iter().any(|known| known == word) {
            found.push(word.to_owned());
        }
    }
    found
}

/// Whether two JSON values say the same, as far as runs can agree.
fn agree(kept: &Value, got: &Value, at: &str, differences: &mut Vec<String>) {
    let member = at.rsplit('/').next().unwrap_or("");
    let changing = ["id", "recorded_at", "updated_at", "queued_seconds", "solved_seconds", "next", "instance", "leaf", "root", "proof"];
    if changing.contains(&member) && kept.is_null() == got.is_null() {
        return;
    }
    match (kept, got) {
        (Value::Object(kept), Value::Object(got)) if at.ends_with("/witnesses") => {
            // Digests stand or fall with the last digit of a figure.
            if kept.len() != got.len() {
                differences.push(format!("{at}: {} witnesses in place of {}", got.len(), kept.len()));
            }
        }
        (Value::Object(kept), Value::Object(got)) => {
            if !kept.keys().eq(got.keys()) {
                differences.push(format!("{at}: members {:?} in place of {:?}", got.keys(), kept.keys()));
            }
            for (name, kept) in kept {
                agree(kept, got.get(name).unwrap_or(&Value::Null), &format!("{at}/{name}"), differences);
            }
        }
        (Value::Array(kept), Value::Array(got)) if kept.len() == got.len() && at.ends_with("/witnesses") => {}
        (Value::Array(kept), Value::Array(got)) if kept.len() == got.len() => {
            kept.iter().zip(got).enumerate().for_each(|(i, (kept, got))| agree(kept, got, &format!("{at}/{i}"), differences));
        }
        (Value::Number(kept), Value::Number(got)) => {
            let (a, b) = (kept.as_f64().unwrap(), got.as_f64().unwrap());
            // What a rounding costs is noise itself, and whole bits are rounded down from what agrees.
            let whole = if member.ends_with("bits") && a.fract() == 0.0 && b.fract() == 0.0 { 1.0 } else { 0.0 };
            if (a - b).abs() > 1e-5 * a.abs() + 1e-9 + whole && !["rounding_cost", "loss", "worst_loss"].contains(&member) {
                differences.push(format!("{at}: {b} in place of {a}"));
            }
        }
        (Value::String(kept), Value::String(got)) => {
            if mask(kept, member) != mask(got, member) {
                differences.push(format!("{at}: {got:?} in place of {kept:?}"));
            }
        }
        (kept, got) if kept == got => {}
        (kept, got) => differences.push(format!("{at}: {got} in place of {kept}")),
    }
}

/// A text without identifiers, and without the digests of witnesses and of what rests on them.
fn mask(text: &str, member: &str) -> String {
    let text = identifiers(text).iter().fold(text.to_owned(), |text, id| text.replace(id, "…"));
    let digest = text.strip_prefix("sha256:").is_some_and(|hex| hex.len() == 64);
    if digest && (member.ends_with("witness") || ["commitment", "digest"].contains(&member)) { "sha256:…".into() } else { text }
}

/// The part of a header that runs agree on.
fn masked_header(name: &str, value: &str) -> String {
    let value = mask(value, name);
    value
        .split_once("cursor=")
        .map_or(value.clone(), |(before, after)| format!("{before}cursor=…{}", &after[after.find('>').unwrap_or(0)..]))
}

/// Columns of a history whose values runs cannot agree on.
fn masked_rows(text: &str) -> Vec<Vec<String>> {
    let mut reader = csv::Reader::from_reader(text.as_bytes());
    let columns = reader.headers().unwrap().clone();
    let masked = |name: &str, value: &str| {
        if ["id", "recorded_at", "bits_per_round", "bits_per_target_round", "certified_bits", "loss"].contains(&name) {
            "…".into()
        } else {
            value.to_owned()
        }
    };
    let rows = reader.records().map(|row| columns.iter().zip(row.unwrap().iter()).map(|(name, value)| masked(name, value)).collect());
    std::iter::once(columns.iter().map(str::to_owned).collect()).chain(rows).collect()
}

fn compare(name: &str, kept: &Message, got: &Message) -> Vec<String> {
    let mut differences = vec![];
    if kept.first != got.first {
        differences.push(format!("{} in place of {}", got.first, kept.first));
    }
    let headers = |message: &Message| -> Vec<String> {
        message.headers.iter().map(|(name, value)| format!("{name}: {}", masked_header(name, value))).collect()
    };
    if headers(kept) != headers(got) {
        differences.push(format!("headers {:?} in place of {:?}", headers(got), headers(kept)));
    }
    match (serde_json::from_str(&kept.body), serde_json::from_str(&got.body)) {
        (Ok(kept), Ok(got)) => agree(&kept, &got, "", &mut differences),
        _ if masked_rows(&kept.body) == masked_rows(&got.body) => {}
        _ => differences.push(format!("{} in place of {}", got.body, kept.body)),
    }
    differences.into_iter().map(|difference| format!("{name}: {difference}")).collect()
}

fn examples() -> Vec<PathBuf> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("api/examples");
    let mut requests: Vec<PathBuf> = fs::read_dir(folder).unwrap().map(|entry| entry.unwrap().path()).collect();
    requests.retain(|path| path.to_str().unwrap().ends_with(".request.http"));
    requests.sort();
    requests
}

#[test]
fn the_examples_are_what_happens() {
    let running = Running::solving(Solving { certifier: Arc::new(certify), ..Solving::default() });
    let client = running.client();
    let write = std::env::var_os("BITASSAY_WRITE_EXAMPLES").is_some();
    // Identifiers of the examples, and those of this run in their places.
    let mut names: Vec<(String, String)> = vec![];
    let mut differences = vec![];
    let examples = examples();
    assert!(examples.len() >= 10, "{examples:?}");
    for path in examples {
        let name = path.file_name().unwrap().to_str().unwrap().to_owned();
        let mut text = fs::read_to_string(&path).unwrap();
        for (kept, live) in &names {
            text = text.replace(kept.as_str(), live);
        }
        let request = Message::read(&text);
        let mut first = request.first.split(' ');
        let (method, target) = (first.next().unwrap(), first.next().unwrap());
        let headers: Vec<(&str, &str)> = request.headers.iter().map(|(name, value)| (name.as_str(), value.as_str())).collect();
        let body = (!request.body.is_empty()).then_some(request.body.as_bytes());
        let mut got = Message::of(&client.call(method, target, &headers, body));

        let answer = PathBuf::from(path.to_str().unwrap().replace(".request.http", ".answer.http"));
        let kept = fs::read_to_string(&answer).unwrap_or_default();
        for pair in identifiers(&kept).into_iter().zip(identifiers(&got.text())) {
            if !names.contains(&pair) {
                names.push(pair);
            }
        }
        if write {
            // Requests further on name the certifications of the examples: they keep their names.
            for (kept, live) in &names {
                got = Message::read(&got.text().replace(live.as_str(), kept));
            }
            fs::write(answer, got.text()).unwrap();
        } else {
            differences.extend(compare(&name, &Message::read(&kept), &got));
        }
    }
    assert!(differences.is_empty(), "{}", differences.join("\n"));
}
