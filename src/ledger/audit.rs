//! Going through the ledger: every entry against its leaf, every leaf against the tree, the tree against what was signed.

use sha2::{Digest, Sha256};
use sqlx::SqliteConnection;

use super::{
    LedgerError,
    checkpoint::Checkpoint,
    proofs,
    source::{SOURCES, Source},
    tree::{Frontier, Hash, Leaf, leaf_hash},
};

/// Rows that are read at a time.
const BATCH: i64 = 256;

/// Why a ledger is not believed, or cannot be read at present.
#[derive(Debug, Clone, thiserror::Error)]
pub enum AuditError {
    /// Something in it was changed, or it is not what was signed.
    #[error("{0}")]
    Fault(String),
    #[error(transparent)]
    Ledger(LedgerError),
}

impl From<LedgerError> for AuditError {
    fn from(error: LedgerError) -> Self {
        // What cannot be read because of what it holds is a fault. Everything else may pass.
        match &error {
            LedgerError::Database { source } if error.is_damage() => Self::Fault(format!("the database cannot be read: {source}")),
            LedgerError::Database { source } if matches!(**source, sqlx::Error::ColumnDecode { .. } | sqlx::Error::Decode(_)) => {
                Self::Fault(format!("the database cannot be read: {source}"))
            }
            LedgerError::Unreadable { .. } | LedgerError::OutOfRange { .. } => Self::Fault(error.to_string()),
            _ => Self::Ledger(error),
        }
    }
}

impl From<sqlx::Error> for AuditError {
    fn from(source: sqlx::Error) -> Self {
        LedgerError::from(source).into()
    }
}

/// How far the ledger was gone through, from its first entry.
#[derive(Debug, Clone)]
pub struct Audit {
    frontier: Frontier,
    /// Row of the last witness that was looked at.
    witness: i64,
    /// What was signed last, until it is met.
    ahead: Option<Checkpoint>,
}

impl Audit {
    /// An audit from the beginning, of a ledger of which `signed` was signed.
    pub fn new(signed: &Checkpoint) -> Self {
        Self { frontier: Frontier::default(), witness: 0, ahead: Some(signed.clone()) }
    }

    /// Entries that were found in order.
    pub fn size(&self) -> u64 {
        self.frontier.size()
    }

    /// The root of the tree of these entries, computed from them alone.
    pub fn root(&self) -> Hash {
        self.frontier.root()
    }

    /// What holds of the database as a whole: SQLite's own checks.
    ///
    /// # Errors
    /// What SQLite finds.
    pub async fn pages(connection: &mut SqliteConnection) -> Result<(), AuditError> {
        let found: String = sqlx::query_scalar("PRAGMA quick_check(1)").fetch_one(connection).await?;
        if found == "ok" { Ok(()) } else { Err(AuditError::Fault(format!("the database is damaged: {found}"))) }
    }

    /// Goes through the next entries; answers whether there may be more.
    ///
    /// # Errors
    /// The first entry that is not in order, or the database's.
    pub async fn advance(&mut self, connection: &mut SqliteConnection) -> Result<bool, AuditError> {
        self.meet()?;
        let sql = "SELECT leaf, kind, subject, entry, nodes FROM tree_leaves WHERE leaf >= ? ORDER BY leaf LIMIT ?";
        let from = i64::try_from(self.size()).map_err(|_| LedgerError::OutOfRange { what: "index" })?;
        let leaves: Vec<(i64, String, String, String, Vec<u8>)> =
            sqlx::query_as(sql).bind(from).bind(BATCH).fetch_all(&mut *connection).await.map_err(|error| self.locate(error))?;
        for (place, kind, subject, line, nodes) in &leaves {
            let index = self.size();
            let at = |detail: String| AuditError::Fault(format!("entry {index} ({kind} {subject}): {detail}"));
            if u64::try_from(*place) != Ok(index) {
                return Err(AuditError::Fault(format!("entry {index}: the ledger has no such entry, though it has entry {place}")));
            }
            let leaf: Leaf = serde_json::from_str(line).map_err(|error| at(format!("its leaf cannot be read: {error}")))?;
            if (leaf.version, leaf.index, &leaf.kind, &leaf.subject) != (1, index, kind, subject) {
                return Err(at("its leaf is of another entry".into()));
            }
            if self.frontier.push(leaf_hash(line.as_bytes())).concat() != *nodes {
                return Err(at("its leaf is not the one that was hashed into the tree".into()));
            }
            if let Some(source) = Source::of(kind) {
                let draft = source.draft(connection, subject).await.map_err(|error| match AuditError::from(error) {
                    AuditError::Fault(detail) => at(detail),
                    error => error,
                })?;
                let draft = draft.ok_or_else(|| at("what it records is gone".into()))?;
                if draft.recorded_at != leaf.recorded_at {
                    return Err(at("recorded_at is not what was recorded".into()));
                }
                if draft.body != leaf.body {
                    let changed: Vec<&str> = leaf
                        .body
                        .keys()
                        .chain(draft.body.keys().filter(|name| !leaf.body.contains_key(*name)))
                        .filter(|name| leaf.body.get(*name) != draft.body.get(*name))
                        .map(String::as_str)
                        .collect();
                    return Err(at(format!("{} is not what was recorded", changed.join(", "))));
                }
            }
            self.meet()?;
        }
        let more = leaves.len() as i64 == BATCH;
        let more_witnesses = self.witnesses(connection).await?;
        Ok(more || more_witnesses)
    }

    /// Compares with what was signed, once as many entries were gone through.
    fn meet(&mut self) -> Result<(), AuditError> {
        let Some(signed) = self.ahead.take_if(|signed| signed.size == self.frontier.size()) else { return Ok(()) };
        if signed.root == self.root() {
            return Ok(());
        }
        Err(another(&self.root(), &signed))
    }

    fn locate(&self, error: sqlx::Error) -> AuditError {
        match AuditError::from(error) {
            AuditError::Fault(detail) => AuditError::Fault(format!("entry {} or one of those after it: {detail}", self.size())),
            error => error,
        }
    }

    async fn witnesses(&mut self, connection: &mut SqliteConnection) -> Result<bool, AuditError> {
        let sql = "SELECT rowid, digest, document FROM witnesses WHERE rowid > ? ORDER BY rowid LIMIT ?";
        let rows: Vec<(i64, String, String)> = sqlx::query_as(sql).bind(self.witness).bind(BATCH).fetch_all(connection).await?;
        for (row, digest, document) in &rows {
            if *digest != format!("sha256:{}", hex::encode(Sha256::digest(document))) {
                return Err(AuditError::Fault(format!("the witness {digest} is not the document of that digest")));
            }
            self.witness = *row;
        }
        Ok(rows.len() as i64 == BATCH)
    }

    /// Whether every row of the ledger is in the tree, and what was signed was met; once all entries were gone through.
    ///
    /// # Errors
    /// A row that was slipped in, entries that were cut off, or the database's.
    pub async fn conclude(&self, connection: &mut SqliteConnection) -> Result<(), AuditError> {
        if let Some(signed) = &self.ahead {
            return Err(shorter(self.size(), signed));
        }
        for source in SOURCES {
            if let Some(subject) = source.unlogged(connection).await? {
                return Err(AuditError::Fault(format!("the {} {subject} is not in the tree: it was slipped in", source.kind)));
            }
        }
        Ok(())
    }

    /// Goes through everything.
    ///
    /// # Errors
    /// See [`Self::advance`] and [`Self::conclude`].
    pub async fn complete(&mut self, connection: &mut SqliteConnection) -> Result<(), AuditError> {
        Self::pages(connection).await?;
        while self.advance(connection).await? {}
        self.conclude(connection).await
    }
}

/// Whether the stored tree extends what was signed. Takes a few rows only, and believes them: that the ledger is what the tree says is for an
/// [`Audit`] to find out.
pub(super) async fn check_signed(connection: &mut SqliteConnection, signed: &Checkpoint) -> Result<(), AuditError> {
    let size = proofs::size(connection).await?;
    if size < signed.size {
        return Err(shorter(size, signed));
    }
    if signed.size > 0 {
        let root = proofs::root_of(connection, 0, signed.size).await?;
        if root != signed.root {
            return Err(another(&root, signed));
        }
    }
    Ok(())
}

fn shorter(size: u64, signed: &Checkpoint) -> AuditError {
    AuditError::Fault(format!(
        "the ledger has {size} entries, but a tree of {} entries was signed for {}: it was restored from a backup, or cut off. {NEW_KEY}",
        signed.size, signed.origin
    ))
}

fn another(root: &Hash, signed: &Checkpoint) -> AuditError {
    AuditError::Fault(format!(
        "entries 0 to {}: their tree has the root {}, but {} was signed for {}. {NEW_KEY}",
        signed.size.saturating_sub(1),
        hex::encode(root),
        hex::encode(signed.root),
        signed.origin
    ))
}

/// What an operator does about a ledger that is not an extension of what was signed.
const NEW_KEY: &str = "Nothing is signed and nothing is recorded until the database that was signed is back. To go on with this one, move the key and the \
                       .checkpoint file beside it away: the ledger then continues under a new key, and says so to everyone who knows the old one";
