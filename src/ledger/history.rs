//! Reading the ledger, through connections that cannot write.

use std::sync::Arc;

use sqlx::{QueryBuilder, Sqlite, SqliteConnection, SqlitePool};
use uuid::Uuid;

use super::{
    LedgerError,
    rows::{Answered, KeptBudget, KeptRow, NumberedCommitment, ProfileVersion, Read, Recorded, Tally, word},
};
use crate::{certificate::Verdict, clock::Stamp, committed::Committed, profile::RigName, record::Summary, submission::IdempotencyKey};

/// Which records a page of the history is taken from.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Filter {
    pub rig: Option<RigName>,
    /// Only those of these rigs, whatever else is asked for.
    pub within: Option<Vec<RigName>>,
    pub verdict: Option<Verdict>,
    /// Recorded at this time or later.
    pub since: Option<Stamp>,
    /// Recorded before this time.
    pub until: Option<Stamp>,
    /// Entries before this one: where the page before ended.
    pub before: Option<u64>,
}

/// Which of a rig's certifications a yield adds up.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Window {
    /// The newest so many.
    Batches(u32),
    /// Those recorded at this time or later.
    Since(Stamp),
}

/// One page, and whether there is another.
#[derive(Debug, Clone, PartialEq)]
pub struct Page<T> {
    pub items: Vec<T>,
    pub more: bool,
}

impl<T> Page<T> {
    /// A page from one item more than it holds.
    fn of(mut items: Vec<T>, limit: u32) -> Self {
        let limit = limit as usize;
        let more = items.len() > limit;
        items.truncate(limit);
        Self { items, more }
    }
}

/// The readers' end of the ledger.
#[derive(Debug, Clone)]
pub struct History {
    pub(super) pool: SqlitePool,
}

const ANSWERED: &str = "SELECT c.id, s.body_digest, c.record, s.refusal FROM submissions s JOIN certifications c USING (entry) \
                        WHERE s.rig = ? AND s.idempotency_key = ?";

impl History {
    pub(super) fn new(pool: SqlitePool) -> Self {
        Self { pool }
    }

    pub(super) async fn close(&self) {
        self.pool.close().await;
    }

    /// Whether the database answers.
    ///
    /// # Errors
    /// The database's.
    pub async fn check(&self) -> Result<(), LedgerError> {
        sqlx::query("SELECT 1 FROM certifications LIMIT 1").fetch_optional(&self.pool).await?;
        Ok(())
    }

    /// A rig's profile, the newest or a given version.
    ///
    /// # Errors
    /// The database's.
    pub async fn profile(&self, rig: &RigName, version: Option<u64>) -> Result<Option<ProfileVersion>, LedgerError> {
        let mut query = QueryBuilder::new("SELECT rig, version, recorded_at, profile FROM rig_profiles WHERE rig = ");
        query.push_bind(rig.as_str());
        if let Some(version) = version {
            query.push(" AND version = ").push_bind(clamped(version));
        }
        query.push(" ORDER BY version DESC LIMIT 1");
        query.build().fetch_optional(&self.pool).await?.map(|row| ProfileVersion::read(&row)).transpose()
    }

    /// Rigs in order of their names, each with its newest profile, beginning after `after`.
    ///
    /// # Errors
    /// The database's.
    pub async fn rigs(&self, after: Option<&RigName>, limit: u32) -> Result<Page<ProfileVersion>, LedgerError> {
        // MAX with bare columns: SQLite takes them from the row that holds the maximum.
        let sql = "SELECT rig, MAX(version) AS version, recorded_at, profile FROM rig_profiles WHERE rig > ? GROUP BY rig \
                   ORDER BY rig LIMIT ?";
        let after = after.map_or("", RigName::as_str);
        let rows = sqlx::query(sql).bind(after).bind(i64::from(limit) + 1).fetch_all(&self.pool).await?;
        let items = rows.iter().map(ProfileVersion::read).collect::<Result<_, _>>()?;
        Ok(Page::of(items, limit))
    }

    /// The text of a record.
    ///
    /// # Errors
    /// The database's.
    pub async fn record(&self, id: Uuid) -> Result<Option<String>, LedgerError> {
        let sql = "SELECT record FROM certifications WHERE id = ?";
        Ok(sqlx::query_scalar(sql).bind(id.to_string()).fetch_optional(&self.pool).await?)
    }

    /// Whose certification it is.
    ///
    /// # Errors
    /// The database's.
    pub async fn rig_of(&self, id: Uuid) -> Result<Option<RigName>, LedgerError> {
        let sql = "SELECT rig FROM certifications WHERE id = ?";
        let rig: Option<String> = sqlx::query_scalar(sql).bind(id.to_string()).fetch_optional(&self.pool).await?;
        Ok(rig.and_then(|rig| RigName::try_from(rig).ok()))
    }

    /// The head of a record.
    ///
    /// # Errors
    /// The database's, or a record that cannot be read.
    pub async fn summary(&self, id: Uuid) -> Result<Option<Summary>, LedgerError> {
        let unreadable = |source| LedgerError::Unreadable { what: "record", source: Arc::new(source) };
        self.record(id).await?.map(|text| serde_json::from_str(&text).map_err(unreadable)).transpose()
    }

    /// Digest and document of each witness of a certification; `None` if there is no such certification.
    ///
    /// # Errors
    /// The database's.
    pub async fn witnesses(&self, id: Uuid) -> Result<Option<Vec<(String, String)>>, LedgerError> {
        let sql = "SELECT w.digest, w.document FROM certifications c LEFT JOIN certification_witnesses USING (entry) \
                   LEFT JOIN witnesses w USING (digest) WHERE c.id = ? ORDER BY w.digest";
        let rows: Vec<(Option<String>, Option<String>)> = sqlx::query_as(sql).bind(id.to_string()).fetch_all(&self.pool).await?;
        if rows.is_empty() {
            return Ok(None);
        }
        Ok(Some(rows.into_iter().filter_map(|(digest, document)| digest.zip(document)).collect()))
    }

    /// One commitment.
    ///
    /// # Errors
    /// The database's.
    pub async fn commitment(&self, id: Uuid) -> Result<Option<Committed>, LedgerError> {
        let sql = "SELECT * FROM commitments WHERE id = ?";
        let row = sqlx::query(sql).bind(id.to_string()).fetch_optional(&self.pool).await?;
        row.map(|row| Committed::read(&row)).transpose()
    }

    /// The newest commitment of a rig that was made under a version of its profile.
    ///
    /// # Errors
    /// The database's.
    pub async fn newest_commitment(&self, rig: &RigName, profile_version: u64) -> Result<Option<Committed>, LedgerError> {
        let sql = "SELECT * FROM commitments WHERE rig = ? AND profile_version = ? ORDER BY commitment DESC LIMIT 1";
        let row = sqlx::query(sql).bind(rig.as_str()).bind(clamped(profile_version)).fetch_optional(&self.pool).await?;
        row.map(|row| Committed::read(&row)).transpose()
    }

    /// The newest commitment of a rig that was made under a version of its profile and recorded at a time or before.
    ///
    /// # Errors
    /// The database's.
    pub async fn commitment_at(&self, rig: &RigName, profile_version: u64, time: Stamp) -> Result<Option<Committed>, LedgerError> {
        let sql = "SELECT * FROM commitments WHERE rig = ? AND profile_version = ? AND recorded_at <= ? ORDER BY commitment DESC LIMIT 1";
        let query = sqlx::query(sql).bind(rig.as_str()).bind(clamped(profile_version)).bind(time.microseconds());
        query.fetch_optional(&self.pool).await?.map(|row| Committed::read(&row)).transpose()
    }

    /// Digest and document of each witness of a commitment.
    ///
    /// # Errors
    /// The database's.
    pub async fn commitment_witnesses(&self, id: Uuid) -> Result<Vec<(String, String)>, LedgerError> {
        let sql = "SELECT w.digest, w.document FROM commitments JOIN commitment_witnesses USING (commitment) \
                   JOIN witnesses w ON w.digest = commitment_witnesses.digest WHERE id = ? ORDER BY w.digest";
        Ok(sqlx::query_as(sql).bind(id.to_string()).fetch_all(&self.pool).await?)
    }

    /// A rig's commitments, newest first, those before the number `before`.
    ///
    /// # Errors
    /// The database's.
    pub async fn commitments(&self, rig: &RigName, before: Option<u64>, limit: u32) -> Result<Page<NumberedCommitment>, LedgerError> {
        let sql = "SELECT * FROM commitments WHERE rig = ? AND commitment < ? ORDER BY commitment DESC LIMIT ?";
        let before = clamped(before.unwrap_or(u64::MAX));
        let rows = sqlx::query(sql).bind(rig.as_str()).bind(before).bind(i64::from(limit) + 1).fetch_all(&self.pool).await?;
        let items = rows.iter().map(NumberedCommitment::read).collect::<Result<_, _>>()?;
        Ok(Page::of(items, limit))
    }

    /// The commitment that a certification rests on, and digest and document of each of its witnesses.
    ///
    /// # Errors
    /// The database's.
    pub async fn commitment_of(&self, certification: Uuid) -> Result<Option<(Committed, Vec<(String, String)>)>, LedgerError> {
        let sql = "SELECT m.* FROM certifications c JOIN certification_commitments USING (entry) JOIN commitments m USING (commitment) \
                   WHERE c.id = ?";
        let Some(row) = sqlx::query(sql).bind(certification.to_string()).fetch_optional(&self.pool).await? else { return Ok(None) };
        let NumberedCommitment { number, committed } = NumberedCommitment::read(&row)?;
        let sql = "SELECT w.digest, w.document FROM commitment_witnesses JOIN witnesses w USING (digest) WHERE commitment = ? \
                   ORDER BY w.digest";
        let witnesses = sqlx::query_as(sql).bind(clamped(number)).fetch_all(&self.pool).await?;
        Ok(Some((committed, witnesses)))
    }

    /// The leakage budget of a digest.
    ///
    /// # Errors
    /// The database's.
    pub async fn budget(&self, digest: &str) -> Result<Option<KeptBudget>, LedgerError> {
        let sql = "SELECT budget, recorded_at, document FROM leakage_budgets WHERE digest = ?";
        let row = sqlx::query(sql).bind(digest).fetch_optional(&self.pool).await?;
        row.map(|row| KeptBudget::read(&row)).transpose()
    }

    /// Leakage budgets, newest first, those before the number `before`.
    ///
    /// # Errors
    /// The database's.
    pub async fn budgets(&self, before: Option<u64>, limit: u32) -> Result<Page<KeptBudget>, LedgerError> {
        let sql = "SELECT budget, recorded_at, document FROM leakage_budgets WHERE budget < ? ORDER BY budget DESC LIMIT ?";
        let before = clamped(before.unwrap_or(u64::MAX));
        let rows = sqlx::query(sql).bind(before).bind(i64::from(limit) + 1).fetch_all(&self.pool).await?;
        let items = rows.iter().map(KeptBudget::read).collect::<Result<_, _>>()?;
        Ok(Page::of(items, limit))
    }

    /// All witnesses that are kept for later batches, in the order in which they came.
    ///
    /// # Errors
    /// The database's.
    pub async fn kept_witnesses(&self) -> Result<Vec<KeptRow>, LedgerError> {
        let sql = "SELECT k.digest, w.document, k.made_for FROM kept_witnesses k JOIN witnesses w USING (digest) ORDER BY k.rowid";
        let rows: Vec<(String, String, String)> = sqlx::query_as(sql).fetch_all(&self.pool).await?;
        Ok(rows.into_iter().map(|(digest, document, made_for)| KeptRow { digest, document, made_for }).collect())
    }

    /// The answer that a submission was given.
    ///
    /// # Errors
    /// The database's.
    pub async fn answered(&self, rig: &RigName, key: &IdempotencyKey) -> Result<Option<Answered>, LedgerError> {
        let row = sqlx::query(ANSWERED).bind(rig.as_str()).bind(key.as_str()).fetch_optional(&self.pool).await?;
        row.map(|row| Answered::read(&row)).transpose()
    }

    /// One page of the history, newest first.
    ///
    /// # Errors
    /// The database's.
    pub async fn page(&self, filter: &Filter, limit: u32) -> Result<Page<Recorded>, LedgerError> {
        let mut query = QueryBuilder::<Sqlite>::new("SELECT entry, record FROM certifications WHERE TRUE");
        if let Some(rig) = &filter.rig {
            query.push(" AND rig = ").push_bind(rig.as_str());
        }
        if let Some(rigs) = &filter.within {
            query.push(" AND rig IN (");
            let mut list = query.separated(", ");
            for rig in rigs {
                list.push_bind(rig.as_str());
            }
            query.push(")");
        }
        if let Some(verdict) = filter.verdict {
            query.push(" AND verdict = ").push_bind(word(verdict));
        }
        if let Some(since) = filter.since {
            query.push(" AND recorded_at >= ").push_bind(since.microseconds());
        }
        if let Some(until) = filter.until {
            query.push(" AND recorded_at < ").push_bind(until.microseconds());
        }
        if let Some(before) = filter.before {
            query.push(" AND entry < ").push_bind(clamped(before));
        }
        query.push(" ORDER BY entry DESC LIMIT ").push_bind(i64::from(limit) + 1);
        let rows = query.build().fetch_all(&self.pool).await?;
        let items = rows.iter().map(Recorded::read).collect::<Result<_, _>>()?;
        Ok(Page::of(items, limit))
    }

    /// What a rig's yield adds up, newest first.
    ///
    /// # Errors
    /// The database's.
    pub async fn tallies(&self, rig: &RigName, window: Window) -> Result<Vec<Tally>, LedgerError> {
        let mut query =
            QueryBuilder::new("SELECT id, recorded_at, verdict, certified_bits, rounds, failure FROM certifications WHERE rig = ");
        query.push_bind(rig.as_str());
        match window {
            Window::Batches(batches) => query.push(" ORDER BY entry DESC LIMIT ").push_bind(i64::from(batches)),
            Window::Since(since) => query.push(" AND recorded_at >= ").push_bind(since.microseconds()).push(" ORDER BY entry DESC"),
        };
        let rows = query.build().fetch_all(&self.pool).await?;
        rows.iter().map(Tally::read).collect()
    }
}

/// As [`History::answered`], inside a transaction of the writer.
pub(super) async fn answered_within(
    connection: &mut SqliteConnection,
    rig: &RigName,
    key: &IdempotencyKey,
) -> Result<Option<Answered>, LedgerError> {
    let row = sqlx::query(ANSWERED).bind(rig.as_str()).bind(key.as_str()).fetch_optional(connection).await?;
    row.map(|row| Answered::read(&row)).transpose()
}

/// SQLite's integers are signed; nothing in the ledger is numbered beyond them.
fn clamped(number: u64) -> i64 {
    i64::try_from(number).unwrap_or(i64::MAX)
}
