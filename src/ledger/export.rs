//! The whole ledger as one file, and its check without the database.
//!
//! An export is lines of JSON. The first says what it is and holds the last signed checkpoint; then comes each witness, and then each entry
//! with the texts whose digests stand in its body, all of them as strings, byte for byte as they are kept:
//!
//! ```json
//! {"export":"bitassay-ledger","version":1,"checkpoint":"bitassay/…\n42\n…"}
//! {"witness":"sha256:…","document":"{…}"}
//! {"entry":"{\"version\":1,\"index\":0,…}","texts":{"record":"{…}"}}
//! ```

use std::{
    collections::BTreeMap,
    io::{self, BufRead, Write},
};

use serde::{Deserialize, Serialize};
use serde_json::{Map, Value};
use sha2::{Digest, Sha256};
use sqlx::{Connection, SqliteConnection};

use super::{
    LedgerError,
    checkpoint::{Checkpoint, Verifier},
    proofs,
    source::{CERTIFICATION, COMMITMENT, Source},
    tree::{Frontier, Hash, Leaf, leaf_hash},
};
use crate::{
    bundle::{Bundle, Standing, Witnesses},
    commitment::Commitment,
    witness::witness::Witness,
};

const NAME: &str = "bitassay-ledger";
const VERSION: u32 = 1;
/// Rows that are read at a time.
const BATCH: i64 = 256;

/// Why an export was not written.
#[derive(Debug, thiserror::Error)]
pub enum ExportError {
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    #[error("the export cannot be written")]
    Output(#[from] io::Error),
}

impl From<sqlx::Error> for ExportError {
    fn from(source: sqlx::Error) -> Self {
        Self::Ledger(source.into())
    }
}

#[derive(Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct Head {
    export: String,
    version: u32,
    checkpoint: Option<String>,
}

#[derive(Serialize, Deserialize)]
#[serde(untagged, deny_unknown_fields)]
enum Line {
    Witness { witness: String, document: String },
    Entry { entry: String, texts: BTreeMap<String, String> },
}

/// Writes everything that is in the ledger now; answers with the number of entries.
///
/// # Errors
/// The database's, or the output's.
pub async fn export(connection: &mut SqliteConnection, checkpoint: Option<String>, output: &mut impl Write) -> Result<u64, ExportError> {
    write(output, &Head { export: NAME.to_owned(), version: VERSION, checkpoint })?;
    // One transaction, so that all of it is of one moment.
    let mut transaction = connection.begin().await?;
    let mut after = -1;
    loop {
        let sql = "SELECT rowid, digest, document FROM witnesses WHERE rowid > ? ORDER BY rowid LIMIT ?";
        let rows: Vec<(i64, String, String)> = sqlx::query_as(sql).bind(after).bind(BATCH).fetch_all(&mut *transaction).await?;
        let Some((last, ..)) = rows.last() else { break };
        after = *last;
        for (_, witness, document) in rows {
            write(output, &Line::Witness { witness, document })?;
        }
    }
    let mut entries = 0;
    loop {
        let sql = "SELECT kind, subject, entry FROM tree_leaves WHERE leaf >= ? ORDER BY leaf LIMIT ?";
        let from = i64::try_from(entries).map_err(|_| LedgerError::OutOfRange { what: "index" })?;
        let rows: Vec<(String, String, String)> = sqlx::query_as(sql).bind(from).bind(BATCH).fetch_all(&mut *transaction).await?;
        if rows.is_empty() {
            break;
        }
        for (kind, subject, entry) in rows {
            let texts = match Source::of(&kind) {
                Some(source) => source.draft(&mut transaction, &subject).await?.map(|draft| draft.texts).unwrap_or_default(),
                None => vec![],
            };
            write(output, &Line::Entry { entry, texts: texts.into_iter().collect() })?;
            entries += 1;
        }
    }
    transaction.rollback().await?;
    output.flush()?;
    Ok(entries)
}

fn write(output: &mut impl Write, line: &impl Serialize) -> io::Result<()> {
    serde_json::to_writer(&mut *output, line)?;
    output.write_all(b"\n")
}

/// What the check of an export or of a bundle found.
#[derive(Debug, Clone, Default, PartialEq, Serialize)]
pub struct Findings {
    pub entries: u64,
    pub certifications: u64,
    /// Root of the tree of all entries, in hexadecimal.
    pub root: String,
    /// What was signed: origin, number of entries and root.
    pub checkpoint: Option<Signed>,
    pub discrepancies: Vec<String>,
}

/// A checkpoint as it is reported.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Signed {
    pub origin: String,
    pub size: u64,
    pub root: String,
    /// Whether the signature was checked, with a key that came from elsewhere.
    pub signature_checked: bool,
}

impl Signed {
    fn of(checkpoint: &Checkpoint, signature_checked: bool) -> Self {
        Self { origin: checkpoint.origin.clone(), size: checkpoint.size, root: hex::encode(checkpoint.root), signature_checked }
    }
}

/// What a note says; signed by the key, if there is one.
fn read_note(note: &str, key: Option<&Verifier>) -> Result<Checkpoint, String> {
    key.map_or_else(|| Checkpoint::read(note), |key| key.confirm(note)).map_err(|error| format!("/checkpoint: {error}"))
}

/// Whether a first line is that of an export.
pub fn is_export(line: &[u8]) -> bool {
    serde_json::from_slice::<Head>(line).is_ok_and(|head| head.export == NAME)
}

/// Checks an export: each entry's texts against its digests, each record against its witnesses, the tree against the checkpoint.
///
/// # Errors
/// The input's. What is wrong with the export stands in the findings.
pub fn verify(first: &[u8], rest: impl BufRead, key: Option<&Verifier>) -> io::Result<Findings> {
    let head: Head = serde_json::from_slice(first)?;
    let mut check = Check::default();
    if head.version != VERSION {
        check.complain(format!("version {} is not known", head.version));
        return Ok(check.findings);
    }
    match head.checkpoint.as_deref().map(|note| read_note(note, key)) {
        None if key.is_some() => check.complain("there is no checkpoint that the key could have signed".into()),
        None => {}
        Some(Ok(checkpoint)) => {
            check.findings.checkpoint = Some(Signed::of(&checkpoint, key.is_some()));
            check.ahead = Some(checkpoint);
        }
        Some(Err(detail)) => check.complain(detail),
    }
    check.meet();
    for (number, line) in rest.lines().enumerate() {
        match serde_json::from_str(&line?) {
            Ok(Line::Witness { witness, document }) => check.witness(witness, &document),
            Ok(Line::Entry { entry, texts }) => check.entry(&entry, &texts),
            Err(error) => check.complain(format!("line {}: {error}", number + 2)),
        }
    }
    if let Some(ahead) = check.ahead.take() {
        check.complain(format!("the checkpoint is of {} entries, the export has {}", ahead.size, check.frontier.size()));
    }
    check.findings.entries = check.frontier.size();
    check.findings.root = hex::encode(check.frontier.root());
    Ok(check.findings)
}

#[derive(Default)]
struct Check {
    frontier: Frontier,
    ahead: Option<Checkpoint>,
    witnesses: Witnesses,
    /// Each commitment with the digests of its witnesses.
    commitments: BTreeMap<String, (Commitment, Vec<String>)>,
    findings: Findings,
}

impl Check {
    fn complain(&mut self, detail: String) {
        self.findings.discrepancies.push(detail);
    }

    fn meet(&mut self) {
        if let Some(signed) = self.ahead.take_if(|signed| signed.size == self.frontier.size()) {
            let root: Hash = self.frontier.root();
            if signed.root != root {
                self.complain(format!(
                    "entries before {}: their root is {}, signed was {}",
                    signed.size,
                    hex::encode(root),
                    hex::encode(signed.root)
                ));
            }
        }
    }

    fn witness(&mut self, digest: String, document: &str) {
        match serde_json::from_str::<Witness>(document) {
            Ok(witness) => drop(self.witnesses.insert(digest, witness)),
            Err(error) => self.complain(format!("witness {digest}: {error}")),
        }
    }

    fn entry(&mut self, line: &str, texts: &BTreeMap<String, String>) {
        let index = self.frontier.size();
        self.frontier.push(leaf_hash(line.as_bytes()));
        self.meet();
        let leaf: Leaf = match serde_json::from_str(line) {
            Ok(leaf) => leaf,
            Err(error) => return self.complain(format!("entry {index}: {error}")),
        };
        let at = format!("entry {index} ({} {})", leaf.kind, leaf.subject);
        if leaf.index != index {
            self.complain(format!("{at}: it says that it is entry {}", leaf.index));
        }
        for detail in compare(&leaf.body, texts) {
            self.complain(format!("{at}: {detail}"));
        }
        let outcome = match leaf.kind.as_str() {
            kind if kind == COMMITMENT.kind => self.commitment(&leaf, texts),
            kind if kind == CERTIFICATION.kind => self.certification(&leaf, texts),
            _ => Ok(()),
        };
        for detail in outcome.err().unwrap_or_default() {
            self.complain(format!("{at}: {detail}"));
        }
    }

    fn commitment(&mut self, leaf: &Leaf, texts: &BTreeMap<String, String>) -> Result<(), Vec<String>> {
        let document = texts.get("document").map_or("", String::as_str);
        let commitment = serde_json::from_str(document).map_err(|error| vec![format!("the commitment cannot be read: {error}")])?;
        self.commitments.insert(leaf.subject.clone(), (commitment, list(&leaf.body)));
        Ok(())
    }

    fn certification(&mut self, leaf: &Leaf, texts: &BTreeMap<String, String>) -> Result<(), Vec<String>> {
        self.findings.certifications += 1;
        let text = texts.get("record").map_or("", String::as_str);
        let record: Map<String, Value> = serde_json::from_str(text).map_err(|error| vec![format!("the record cannot be read: {error}")])?;
        let mut details = mismatches(leaf, &record);
        let mut digests = list(&leaf.body);
        let mut commitment = None;
        if let Some(Value::String(id)) = leaf.body.get("commitment") {
            match self.commitments.get(id) {
                Some((document, of_commitment)) => {
                    digests.extend(of_commitment.iter().cloned());
                    commitment = Some(document.clone());
                }
                None => details.push(format!("no commitment {id} came before it")),
            }
        }
        let witnesses = digests.into_iter().filter_map(|digest| self.witnesses.get_key_value(&digest).map(|(d, w)| (d.clone(), w.clone())));
        let bundle = Bundle { record, commitment, witnesses: witnesses.collect(), ledger: None };
        details.extend(bundle.verify().err().unwrap_or_default().iter().map(ToString::to_string));
        if details.is_empty() { Ok(()) } else { Err(details) }
    }
}

/// Where the entry of a certification and its record say different things.
fn mismatches(leaf: &Leaf, record: &Map<String, Value>) -> Vec<String> {
    let said = |name: &str| record.get(name).cloned().unwrap_or(Value::Null);
    let mut details: Vec<String> = ["rig", "profile_version", "verdict", "reason", "certified_bits", "commitment"]
        .into_iter()
        .filter(|name| leaf.body.get(*name).cloned().unwrap_or(Value::Null) != said(name))
        .map(|name| format!("{name} is not that of the record"))
        .collect();
    if said("id") != leaf.subject.as_str() || said("recorded_at") != leaf.recorded_at.to_string().as_str() {
        details.push("it is the entry of another record".into());
    }
    details
}

fn list(body: &Map<String, Value>) -> Vec<String> {
    let list = body.get("witnesses_list").and_then(Value::as_array);
    list.into_iter().flatten().filter_map(|digest| digest.as_str().map(str::to_owned)).collect()
}

/// What is wrong with the texts of an entry.
fn compare(body: &Map<String, Value>, texts: &BTreeMap<String, String>) -> Vec<String> {
    let digests = body.iter().filter_map(|(name, value)| name.strip_suffix("_sha256").zip(value.as_str()));
    digests
        .filter_map(|(name, digest)| match texts.get(name) {
            None => Some(format!("its {name} is missing")),
            Some(text) if hex::encode(Sha256::digest(text)) != digest => Some(format!("its {name} is not the one that was recorded")),
            Some(_) => None,
        })
        .collect()
}

/// Checks where a bundle's record stands: that it is the one of the entry, and the entry in the tree of the checkpoint.
pub fn verify_standing(record: &Map<String, Value>, standing: &Standing, key: Option<&Verifier>) -> Findings {
    let mut findings = Findings { certifications: 1, ..Findings::default() };
    let outcome = (|| {
        let checkpoint = read_note(&standing.checkpoint, key)?;
        findings.checkpoint = Some(Signed::of(&checkpoint, key.is_some()));
        let leaf: Leaf = serde_json::from_str(&standing.entry).map_err(|error| format!("/ledger/entry: {error}"))?;
        let hash = |text: &String| hex::decode(text).ok().and_then(|bytes| Hash::try_from(bytes).ok());
        let hashes: Option<Vec<Hash>> = standing.proof.iter().map(hash).collect();
        let hashes = hashes.ok_or("/ledger/proof: hashes have 64 hexadecimal digits")?;
        if !proofs::includes(checkpoint.size, &checkpoint.root, leaf.index, &standing.entry, &hashes) {
            return Err("/ledger/proof: the entry is not in the tree of the checkpoint".to_owned());
        }
        if leaf.kind != CERTIFICATION.kind {
            return Err("/ledger/entry: it is of another kind".to_owned());
        }
        // Records are written without spaces; a bundle may have been indented since.
        let text = serde_json::to_string(record).map_err(|error| error.to_string())?;
        findings.discrepancies.extend(mismatches(&leaf, record).into_iter().map(|detail| format!("/ledger/entry: {detail}")));
        if leaf.body.get("record_sha256").and_then(Value::as_str) != Some(hex::encode(Sha256::digest(text)).as_str()) {
            return Err("/record: it is not the one that was recorded".to_owned());
        }
        Ok(())
    })();
    findings.discrepancies.extend(outcome.err());
    findings
}
