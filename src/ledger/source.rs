//! What is logged about the rows of each table: one source a kind of entry.
//!
//! A source is a query for one row by its subject. Its columns are the members of the entry's body, in their order:
//!
//! - `subject` and `recorded_at` go into the envelope instead;
//! - a column `…_sha256` holds a text, which goes into the body as the SHA-256 of its bytes, in lower-case hexadecimal;
//! - a column `…_list` holds a JSON array, which goes in as it is;
//! - any other column goes in as a string, a number or null.
//!
//! The same query serves when the row is logged, when the ledger is checked against its tree, and when it is exported.

use std::sync::Arc;

use serde_json::{Map, Value};
use sha2::{Digest, Sha256};
use sqlx::{AssertSqlSafe, Column, Row, SqliteConnection, TypeInfo, ValueRef, sqlite::SqliteRow};

use super::LedgerError;
use crate::clock::Stamp;

/// A table that is logged, row by row.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Source {
    /// The kind of its entries.
    pub kind: &'static str,
    /// The row of the subject `?1`.
    pub(super) row: &'static str,
    /// Subject and time of each row, in the order in which they were written.
    rows: &'static str,
}

/// Versions of profiles; the subject is `rig/version`.
pub const PROFILE: Source = Source {
    kind: "profile",
    row: "SELECT rig || '/' || version AS subject, recorded_at, rig, version, profile AS profile_sha256 FROM rig_profiles \
          WHERE rig = substr(?1, 1, instr(?1, '/') - 1) AND version = CAST(substr(?1, instr(?1, '/') + 1) AS INTEGER)",
    rows: "SELECT rig || '/' || version AS subject, recorded_at FROM rig_profiles ORDER BY rowid",
};

/// Commitments; the subject is the identifier.
pub const COMMITMENT: Source = Source {
    kind: "commitment",
    row: "SELECT id AS subject, recorded_at, commitment AS number, rig, profile_version, level, digest, document AS document_sha256, \
          (SELECT json_group_array(digest) FROM (SELECT digest FROM commitment_witnesses w WHERE w.commitment = m.commitment ORDER BY digest)) \
          AS witnesses_list FROM commitments m WHERE id = ?1",
    rows: "SELECT id AS subject, recorded_at FROM commitments ORDER BY commitment",
};

/// Certifications and refusals; the subject is the identifier.
pub const CERTIFICATION: Source = Source {
    kind: "certification",
    row: "SELECT c.id AS subject, c.recorded_at, c.entry AS number, c.rig, c.profile_version, c.verdict, c.reason, c.certified_bits, \
          c.rounds, c.failure, c.record AS record_sha256, s.idempotency_key, s.body_digest, s.refusal AS refusal_sha256, \
          (SELECT m.id FROM certification_commitments JOIN commitments m USING (commitment) WHERE entry = c.entry) AS commitment, \
          (SELECT json_group_array(digest) FROM (SELECT digest FROM certification_witnesses WHERE entry = c.entry ORDER BY digest)) \
          AS witnesses_list FROM certifications c LEFT JOIN submissions s ON s.entry = c.entry WHERE c.id = ?1",
    rows: "SELECT id AS subject, recorded_at FROM certifications ORDER BY entry",
};

/// Leakage budgets; the subject is the digest.
pub const BUDGET: Source = Source {
    kind: "leakage-budget",
    row: "SELECT digest AS subject, recorded_at, budget AS number, digest, document AS document_sha256 FROM leakage_budgets WHERE digest = ?1",
    rows: "SELECT digest AS subject, recorded_at FROM leakage_budgets ORDER BY budget",
};

/// Changes of tokens; the subject is `token/change`.
pub const TOKEN: Source = Source {
    kind: "token",
    row: "SELECT token || '/' || kind AS subject, recorded_at, change AS number, token, kind AS change, document AS document_sha256 \
          FROM token_changes WHERE token = substr(?1, 1, instr(?1, '/') - 1) AND kind = substr(?1, instr(?1, '/') + 1)",
    rows: "SELECT token || '/' || kind AS subject, recorded_at FROM token_changes ORDER BY change",
};

/// Every table that is logged.
pub const SOURCES: [Source; 5] = [BUDGET, PROFILE, COMMITMENT, CERTIFICATION, TOKEN];

/// What is to be logged about one row.
#[derive(Debug, Clone, PartialEq)]
pub struct Draft {
    pub kind: &'static str,
    pub subject: String,
    pub recorded_at: Stamp,
    pub body: Map<String, Value>,
    /// The texts whose digests the body holds, by the names of their members without `_sha256`.
    pub texts: Vec<(String, String)>,
}

impl Source {
    /// The source of a kind of entry; `None` if entries of that kind stand for themselves.
    pub fn of(kind: &str) -> Option<Self> {
        SOURCES.into_iter().find(|source| source.kind == kind)
    }

    /// What is to be logged about a row as it stands now; `None` if there is no such row.
    pub(super) async fn draft(&self, connection: &mut SqliteConnection, subject: &str) -> Result<Option<Draft>, LedgerError> {
        let row = sqlx::query(self.row).bind(subject).fetch_optional(connection).await?;
        row.map(|row| self.read(&row)).transpose()
    }

    /// What is to be logged about a row that [`Self::row`] gave.
    pub(super) fn read(&self, row: &SqliteRow) -> Result<Draft, LedgerError> {
        read(self.kind, row)
    }

    /// The subject of a row that is not logged.
    pub(super) async fn unlogged(&self, connection: &mut SqliteConnection) -> Result<Option<String>, LedgerError> {
        let sql =
            format!("SELECT subject FROM ({}) WHERE subject NOT IN (SELECT subject FROM tree_leaves WHERE kind = ?) LIMIT 1", self.rows);
        Ok(sqlx::query_scalar(AssertSqlSafe(sql)).bind(self.kind).fetch_optional(connection).await?)
    }

    /// Subjects and times of all rows, in microseconds, in the order in which they were written.
    pub(super) async fn subjects(&self, connection: &mut SqliteConnection) -> Result<Vec<(String, i64)>, LedgerError> {
        Ok(sqlx::query_as(self.rows).fetch_all(connection).await?)
    }
}

fn read(kind: &'static str, row: &SqliteRow) -> Result<Draft, LedgerError> {
    let recorded_at = Stamp::from_microseconds(row.try_get("recorded_at")?).ok_or(LedgerError::OutOfRange { what: "time" })?;
    let mut draft = Draft { kind, subject: row.try_get("subject")?, recorded_at, body: Map::new(), texts: vec![] };
    for column in row.columns() {
        let name = column.name();
        if ["subject", "recorded_at"].contains(&name) {
            continue;
        }
        let value = value(row, column.ordinal())?;
        let value = match (name.strip_suffix("_sha256"), value) {
            (Some(of), Value::String(text)) => {
                let digest = hex::encode(Sha256::digest(&text));
                draft.texts.push((of.to_owned(), text));
                Value::String(digest)
            }
            (None, Value::String(text)) if name.ends_with("_list") => {
                serde_json::from_str(&text).map_err(|source| LedgerError::Unreadable { what: "list", source: Arc::new(source) })?
            }
            (_, value) => value,
        };
        draft.body.insert(name.to_owned(), value);
    }
    Ok(draft)
}

fn value(row: &SqliteRow, at: usize) -> Result<Value, LedgerError> {
    let raw = row.try_get_raw(at)?;
    if raw.is_null() {
        return Ok(Value::Null);
    }
    Ok(match raw.type_info().name() {
        "INTEGER" => Value::from(row.try_get::<i64, _>(at)?),
        "REAL" => Value::from(row.try_get::<f64, _>(at)?),
        _ => Value::String(row.try_get(at)?),
    })
}
