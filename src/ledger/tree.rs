//! The ledger as a Merkle tree (RFC 6962, section 2.1; RFC 9162, section 2.1): one leaf an entry.
//!
//! A leaf is a line of JSON, without spaces and without a line feed, its members in this order:
//!
//! ```json
//! {"version":1,"index":7,"kind":"profile","subject":"bench-3/1","recorded_at":"2026-05-01T05:58:00.000000Z","body":{…}}
//! ```
//!
//! `index` is the place in the tree, from 0. `kind` and `subject` name what was recorded, and `body` holds what was recorded, texts as the
//! SHA-256 of their bytes; [`super::source`] says what each kind has. What is hashed are the bytes of the line as it is kept and handed
//! out. Nobody has to write it again, and anybody can compute from it, with `sha256sum` and a shell:
//!
//! ```text
//! leaf hash = SHA-256(0x00 ‖ line)          node = SHA-256(0x01 ‖ left ‖ right)
//! ```
//!
//! The tree of size n splits at the largest power of two below n. The root of the empty tree is SHA-256 of nothing.

use serde::{Deserialize, Serialize};
use serde_json::{Map, Value};
use sha2::{Digest, Sha256};
use sqlx::SqliteConnection;

use super::{
    LedgerError, proofs,
    source::{Draft, SOURCES, Source},
};
use crate::clock::Stamp;

/// Version of the leaves that are written.
const VERSION: u32 = 1;

/// A SHA-256 digest.
pub type Hash = [u8; 32];

/// One leaf, read from its line or about to be written as one.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Leaf {
    pub version: u32,
    pub index: u64,
    pub kind: String,
    pub subject: String,
    pub recorded_at: Stamp,
    pub body: Map<String, Value>,
}

impl Leaf {
    pub(super) fn new(index: u64, draft: &Draft) -> Self {
        let Draft { kind, subject, recorded_at, body, .. } = draft;
        Self { version: VERSION, index, kind: (*kind).to_owned(), subject: subject.clone(), recorded_at: *recorded_at, body: body.clone() }
    }

    /// The leaf's bytes.
    pub fn line(&self) -> String {
        // Strings and finite numbers only: serialisation cannot fail.
        serde_json::to_string(self).unwrap_or_default()
    }
}

/// Hash of a leaf's bytes.
pub fn leaf_hash(line: &[u8]) -> Hash {
    Sha256::new_with_prefix([0]).chain_update(line).finalize().into()
}

/// Hash of two subtrees, side by side.
pub fn parent_hash(left: &Hash, right: &Hash) -> Hash {
    Sha256::new_with_prefix([1]).chain_update(left).chain_update(right).finalize().into()
}

/// What has to be known of a tree for it to grow: the roots of its complete subtrees, largest first, one for each binary one of its size.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Frontier {
    size: u64,
    peaks: Vec<Hash>,
}

impl Frontier {
    /// Number of leaves.
    pub fn size(&self) -> u64 {
        self.size
    }

    /// Adds a leaf; answers with its hash and the roots of the subtrees that it completes, smallest first.
    pub fn push(&mut self, leaf: Hash) -> Vec<Hash> {
        let mut completed = vec![leaf];
        let mut node = leaf;
        for _ in 0..self.size.trailing_ones() {
            let Some(left) = self.peaks.pop() else { break };
            node = parent_hash(&left, &node);
            completed.push(node);
        }
        self.peaks.push(node);
        self.size += 1;
        completed
    }

    /// The tree's root.
    pub fn root(&self) -> Hash {
        let mut peaks = self.peaks.iter().rev();
        let Some(last) = peaks.next() else { return Sha256::digest(b"").into() };
        peaks.fold(*last, |right, left| parent_hash(left, &right))
    }
}

impl Frontier {
    /// Of the stored tree.
    ///
    /// # Errors
    /// The database's.
    pub(super) async fn read(connection: &mut SqliteConnection) -> Result<Self, LedgerError> {
        let size = proofs::size(&mut *connection).await?;
        let mut frontier = Self { size, peaks: Vec::new() };
        let mut end = 0;
        for level in (0..u64::BITS).rev().filter(|level| size >> level & 1 == 1) {
            end += 1 << level;
            frontier.peaks.push(proofs::root_of(&mut *connection, end - (1 << level), end).await?);
        }
        Ok(frontier)
    }
}

/// Logs a row that was just written, in the same transaction; answers with the leaf's index.
///
/// # Errors
/// The database's, among them a row that is logged already.
pub(super) async fn log(
    connection: &mut SqliteConnection,
    frontier: &mut Frontier,
    source: &Source,
    subject: &str,
) -> Result<u64, LedgerError> {
    let draft = source.draft(connection, subject).await?.ok_or(LedgerError::Unlogged { kind: source.kind })?;
    append(connection, frontier, &draft, INSERT).await
}

/// Adds a leaf. What is written after it in the same text is executed with it.
pub(super) const INSERT: &str = "INSERT INTO tree_leaves (leaf, kind, subject, entry, nodes) VALUES (?1, ?2, ?3, ?4, ?5)";

/// Appends an entry to the stored tree, whose frontier is given, and grows with it; answers with its index. `insert` is [`INSERT`], or begins
/// with it. Use [`log`] for what has a row of its own.
///
/// # Errors
/// The database's, among them a subject that is logged already. The frontier is then as it was.
pub(super) async fn append(
    connection: &mut SqliteConnection,
    frontier: &mut Frontier,
    draft: &Draft,
    insert: &'static str,
) -> Result<u64, LedgerError> {
    let index = frontier.size;
    let line = Leaf::new(index, draft).line();
    let mut grown = frontier.clone();
    let nodes = grown.push(leaf_hash(line.as_bytes())).concat();
    sqlx::query(insert)
        .bind(i64::try_from(index).map_err(|_| LedgerError::OutOfRange { what: "index" })?)
        .bind(draft.kind)
        .bind(&draft.subject)
        .bind(line)
        .bind(nodes)
        .execute(connection)
        .await?;
    *frontier = grown;
    Ok(index)
}

/// The root of the subtree of 2^`level` leaves in the nodes of the leaf that completes it.
pub(super) fn node(nodes: &[u8], level: u32) -> Result<Hash, LedgerError> {
    let nodes = nodes.as_chunks::<32>().0;
    nodes.get(level as usize).copied().ok_or(LedgerError::OutOfRange { what: "subtree" })
}

/// Logs the rows of a ledger that is older than its tree, in the order of their times.
pub(super) async fn log_older_rows(connection: &mut SqliteConnection) -> Result<u64, LedgerError> {
    if sqlx::query("SELECT 1 FROM tree_leaves LIMIT 1").fetch_optional(&mut *connection).await?.is_some() {
        return Ok(0);
    }
    let mut rows = Vec::new();
    for source in SOURCES {
        rows.extend(source.subjects(connection).await?.into_iter().map(|(subject, time)| (time, source, subject)));
    }
    // Stable: rows of one time stay in the order in which they depend on each other.
    rows.sort_by_key(|(time, ..)| *time);
    let mut frontier = Frontier::default();
    for (_, source, subject) in &rows {
        log(connection, &mut frontier, source, subject).await?;
    }
    Ok(rows.len() as u64)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Roots and leaf hashes of the reference tree of RFC 6962 implementations: eight leaves, from nothing to 16 bytes.
    fn leaves() -> Vec<Vec<u8>> {
        ["", "00", "10", "2021", "3031", "40414243", "5051525354555657", "606162636465666768696a6b6c6d6e6f"]
            .map(|leaf| hex::decode(leaf).unwrap())
            .to_vec()
    }

    // Source: known answers of the Certificate Transparency project (merkletree test vectors), from memory; the first two can be had with
    // `sha256sum`: of nothing, and of one zero byte.
    #[test]
    fn roots_are_those_of_the_standard() {
        let expected = [
            "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855",
            "6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d",
            "fac54203e7cc696cf0dfcb42c92a1d9dbaf70ad9e621f4bd8d98662f00e3c125",
            "aeb6bcfe274b70a14fb067a5e5578264db0fa9b51af5e0ba159158f329e06e77",
            "d37ee418976dd95753c1c73862b9398fa2a2cf9b4ff0fdfe8b30cd95209614b7",
            "4e3bbb1f7b478dcfe71fb631631519a3bca12c9aefca1612bfce4c13a86264d4",
            "76e67dadbcdf1e10e1b74ddc608abd2f98dfb16fbce75277b5232a127f2087ef",
            "ddb89be403809e325750d3d263cd78929c2942b7942a34b77e122c9594a74c8c",
            "5dc9da79a70659a9ad559cb701ded9a2ab9d823aad2f4960cfe370eff4604328",
        ];
        let mut frontier = Frontier::default();
        assert_eq!(hex::encode(frontier.root()), expected[0]);
        for (leaf, root) in leaves().iter().zip(&expected[1..]) {
            frontier.push(leaf_hash(leaf));
            assert_eq!(hex::encode(frontier.root()), *root, "{} leaves", frontier.size());
        }
    }

    #[test]
    fn a_leaf_is_read_back() {
        let line = r#"{"version":1,"index":7,"kind":"profile","subject":"bench/1","recorded_at":"2026-05-01T05:58:00.000000Z","body":{"rig":"bench"}}"#;
        let leaf: Leaf = serde_json::from_str(line).unwrap();
        assert_eq!(leaf.line(), line);
    }
}
