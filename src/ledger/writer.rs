//! Writing the ledger: one task, one transaction for everything that is waiting, one answer each after the commit.

use std::sync::{Arc, LazyLock, Mutex};

use prometheus_client::metrics::histogram::Histogram;
use sqlx::{AssertSqlSafe, Connection, SqliteConnection};
use tokio::{
    sync::{mpsc, oneshot},
    task::JoinHandle,
};

use super::{
    LedgerError,
    history::answered_within,
    rows::{Answered, Entry, KeptRow, word},
    seal::Fault,
    source::{BUDGET, CERTIFICATION, COMMITMENT, PROFILE},
    tree::{self, Frontier},
};
use crate::{
    clock::Stamp,
    committed::Committed,
    metrics::group_sizes,
    profile::{Profile, RigName},
};

/// Most items in one transaction, and most that wait for the next.
const GROUP: usize = 64;

/// What must hold for a profile to be written.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Expectation {
    /// Nothing was stated. Enough to create a profile, not to change one.
    Unstated,
    /// The rig has no profile yet.
    Absent,
    /// The rig has a profile, whatever its version.
    Present,
    /// The newest version is one of these.
    Versions(Vec<u64>),
}

/// What became of a profile.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kept {
    Created,
    Updated,
    /// The newest version says the same already.
    Unchanged,
}

/// Why nothing was written.
#[derive(Debug, Clone, thiserror::Error)]
pub enum WriteError {
    #[error("the profile is at version {current}; a change must say which version it starts from")]
    ExpectationMissing { current: u64 },
    #[error("{}", current.map_or_else(|| "the rig has no profile yet".into(), |version| format!("the profile is at version {version}")))]
    ExpectationFailed { current: Option<u64> },
    #[error("this idempotency key already stands for another batch")]
    KeyReused,
    #[error(transparent)]
    Ledger(#[from] LedgerError),
}

impl From<sqlx::Error> for WriteError {
    fn from(source: sqlx::Error) -> Self {
        Self::Ledger(source.into())
    }
}

/// A submission that is in the ledger.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Settled {
    pub answered: Answered,
    /// Whether another post of the same batch was written first.
    pub replayed: bool,
}

type ProfileAnswer = Result<(Kept, u64), WriteError>;
type EntryAnswer = Result<Settled, WriteError>;
type CommitmentAnswer = Result<(), LedgerError>;
type BudgetAnswer = Result<bool, LedgerError>;
type KeptAnswer = Result<(), LedgerError>;

enum Item {
    Profile { rig: RigName, profile: Box<Profile>, expectation: Expectation, recorded_at: Stamp, answer: oneshot::Sender<ProfileAnswer> },
    Entry { entry: Box<Entry>, answer: oneshot::Sender<EntryAnswer> },
    Commitment { committed: Box<Committed>, witnesses: Vec<(String, String)>, answer: oneshot::Sender<CommitmentAnswer> },
    Budget { digest: String, document: String, recorded_at: Stamp, answer: oneshot::Sender<BudgetAnswer> },
    Kept { added: Vec<KeptRow>, dropped: Vec<String>, answer: oneshot::Sender<KeptAnswer> },
}

/// An item's outcome, kept back until the transaction is committed.
enum Outcome {
    Profile(oneshot::Sender<ProfileAnswer>, ProfileAnswer),
    Entry(oneshot::Sender<EntryAnswer>, EntryAnswer),
    Commitment(oneshot::Sender<CommitmentAnswer>, CommitmentAnswer),
    Budget(oneshot::Sender<BudgetAnswer>, BudgetAnswer),
    Kept(oneshot::Sender<KeptAnswer>, KeptAnswer),
}

impl Outcome {
    /// Tells the caller, unless it has gone.
    fn tell(self) {
        match self {
            Self::Profile(answer, outcome) => drop(answer.send(outcome)),
            Self::Entry(answer, outcome) => drop(answer.send(outcome)),
            Self::Commitment(answer, outcome) => drop(answer.send(outcome)),
            Self::Budget(answer, outcome) => drop(answer.send(outcome)),
            Self::Kept(answer, outcome) => drop(answer.send(outcome)),
        }
    }

    /// Whether the database, and not the item, is to blame.
    fn broken(&self) -> Option<&LedgerError> {
        match self {
            Self::Profile(_, Err(WriteError::Ledger(error)))
            | Self::Entry(_, Err(WriteError::Ledger(error)))
            | Self::Commitment(_, Err(error))
            | Self::Budget(_, Err(error))
            | Self::Kept(_, Err(error)) => Some(error),
            _ => None,
        }
    }

    fn failed(self, error: &LedgerError) -> Self {
        match self {
            Self::Profile(answer, _) => Self::Profile(answer, Err(error.clone().into())),
            Self::Entry(answer, _) => Self::Entry(answer, Err(error.clone().into())),
            Self::Commitment(answer, _) => Self::Commitment(answer, Err(error.clone())),
            Self::Budget(answer, _) => Self::Budget(answer, Err(error.clone())),
            Self::Kept(answer, _) => Self::Kept(answer, Err(error.clone())),
        }
    }
}

impl Item {
    fn failed(self, error: &LedgerError) -> Outcome {
        match self {
            Self::Profile { answer, .. } => Outcome::Profile(answer, Err(error.clone().into())),
            Self::Entry { answer, .. } => Outcome::Entry(answer, Err(error.clone().into())),
            Self::Commitment { answer, .. } => Outcome::Commitment(answer, Err(error.clone())),
            Self::Budget { answer, .. } => Outcome::Budget(answer, Err(error.clone())),
            Self::Kept { answer, .. } => Outcome::Kept(answer, Err(error.clone())),
        }
    }

    async fn write(self, connection: &mut SqliteConnection, frontier: &mut Frontier) -> Outcome {
        match self {
            Self::Profile { rig, profile, expectation, recorded_at, answer } => {
                let outcome = write_profile(connection, frontier, &rig, &profile, &expectation, recorded_at).await;
                Outcome::Profile(answer, outcome)
            }
            Self::Entry { entry, answer } => Outcome::Entry(answer, write_entry(connection, frontier, *entry).await),
            Self::Commitment { committed, witnesses, answer } => {
                Outcome::Commitment(answer, write_commitment(connection, frontier, &committed, &witnesses).await)
            }
            Self::Budget { digest, document, recorded_at, answer } => {
                Outcome::Budget(answer, write_budget(connection, frontier, &digest, &document, recorded_at).await)
            }
            Self::Kept { added, dropped, answer } => Outcome::Kept(answer, write_kept(connection, &added, &dropped).await),
        }
    }
}

/// The callers' end of the writer.
#[derive(Debug)]
pub struct Writer {
    /// `None` once closed.
    inbox: Mutex<Option<mpsc::Sender<Item>>>,
    task: Mutex<Option<JoinHandle<()>>>,
    /// How many items each transaction had.
    pub(crate) group_sizes: Histogram,
}

impl Writer {
    pub(super) fn start(connection: SqliteConnection, fault: Fault) -> Self {
        let (inbox, items) = mpsc::channel(GROUP);
        let group_sizes = group_sizes();
        let task = tokio::spawn(run(connection, items, fault, group_sizes.clone()));
        Self { inbox: Mutex::new(Some(inbox)), task: Mutex::new(Some(task)), group_sizes }
    }

    /// Whether the writer takes items.
    pub fn is_open(&self) -> bool {
        self.sender().is_ok_and(|inbox| !inbox.is_closed())
    }

    fn sender(&self) -> Result<mpsc::Sender<Item>, LedgerError> {
        // A poisoned lock only means that a caller panicked; the sender within is whole.
        self.inbox.lock().unwrap_or_else(|poisoned| poisoned.into_inner()).clone().ok_or(LedgerError::Closed)
    }

    /// Keeps a profile as the rig's next version, if the expectation holds; answers with the version that now stands.
    ///
    /// # Errors
    /// An expectation that does not hold, or the database's. A profile that is there already is no error, whatever was
    /// expected: whoever sends a change twice gets the same answer twice.
    pub async fn keep_profile(&self, rig: RigName, profile: Profile, expectation: Expectation, recorded_at: Stamp) -> ProfileAnswer {
        let (answer, outcome) = oneshot::channel();
        let item = Item::Profile { rig, profile: Box::new(profile), expectation, recorded_at, answer };
        self.sender()?.send(item).await.map_err(|_| LedgerError::Closed)?;
        outcome.await.map_err(|_| LedgerError::Closed)?
    }

    /// Keeps a certification with its witnesses and its submission; durable when answered. If the key already stands for the
    /// same batch, nothing is written and the earlier answer is given.
    ///
    /// # Errors
    /// A key that stands for another batch, or the database's.
    pub async fn keep_entry(&self, entry: Entry) -> EntryAnswer {
        let (answer, outcome) = oneshot::channel();
        self.sender()?.send(Item::Entry { entry: Box::new(entry), answer }).await.map_err(|_| LedgerError::Closed)?;
        outcome.await.map_err(|_| LedgerError::Closed)?
    }

    /// Keeps a commitment with its witnesses; durable when answered.
    ///
    /// # Errors
    /// The database's.
    pub async fn keep_commitment(&self, committed: Committed, witnesses: Vec<(String, String)>) -> CommitmentAnswer {
        let (answer, outcome) = oneshot::channel();
        let item = Item::Commitment { committed: Box::new(committed), witnesses, answer };
        self.sender()?.send(item).await.map_err(|_| LedgerError::Closed)?;
        outcome.await.map_err(|_| LedgerError::Closed)?
    }

    /// Keeps a leakage budget under its digest; durable when answered. The answer says whether it was not there before.
    ///
    /// # Errors
    /// The database's.
    pub async fn keep_budget(&self, digest: String, document: String, recorded_at: Stamp) -> BudgetAnswer {
        let (answer, outcome) = oneshot::channel();
        self.sender()?.send(Item::Budget { digest, document, recorded_at, answer }).await.map_err(|_| LedgerError::Closed)?;
        outcome.await.map_err(|_| LedgerError::Closed)?
    }

    /// Writes down which witnesses are kept from now on, and which no longer; their documents stay.
    ///
    /// # Errors
    /// The database's.
    pub async fn keep_witnesses(&self, added: Vec<KeptRow>, dropped: Vec<String>) -> KeptAnswer {
        let (answer, outcome) = oneshot::channel();
        self.sender()?.send(Item::Kept { added, dropped, answer }).await.map_err(|_| LedgerError::Closed)?;
        outcome.await.map_err(|_| LedgerError::Closed)?
    }

    /// Takes no more items, writes those that were taken, and closes the connection.
    pub(super) async fn close(&self) {
        drop(self.inbox.lock().unwrap_or_else(|poisoned| poisoned.into_inner()).take());
        let task = self.task.lock().unwrap_or_else(|poisoned| poisoned.into_inner()).take();
        if let Some(task) = task
            && let Err(error) = task.await
        {
            tracing::error!(%error, "the writer did not end well");
        }
    }
}

/// Keeps what an item wrote, and opens a savepoint for the next one.
const NEXT: &str = "RELEASE item; SAVEPOINT item";

async fn run(mut connection: SqliteConnection, mut items: mpsc::Receiver<Item>, fault: Fault, group_sizes: Histogram) {
    let mut group = Vec::with_capacity(GROUP);
    let mut frontier = Frontier::default();
    while items.recv_many(&mut group, GROUP).await > 0 {
        group_sizes.observe(group.len() as f64);
        if let Some(detail) = fault.get() {
            let error = LedgerError::Fault { detail: detail.to_owned() };
            group.drain(..).for_each(|item| item.failed(&error).tell());
            continue;
        }
        for outcome in commit(&mut connection, &mut frontier, group.drain(..)).await {
            outcome.tell();
        }
    }
    if let Err(error) = connection.close().await {
        tracing::error!(%error, "the database did not close well");
    }
}

/// Writes a group of items in one transaction. An item that fails is undone alone; if the transaction fails, all of them have.
///
/// `frontier` is that of the tree as the last group left it. Others append to the tree too, between transactions.
async fn commit(connection: &mut SqliteConnection, frontier: &mut Frontier, items: impl Iterator<Item = Item>) -> Vec<Outcome> {
    let mut outcomes = Vec::new();
    let mut broken = begin(connection, frontier).await.err();
    for item in items {
        let outcome = match &broken {
            Some(error) => item.failed(error),
            None => write_undoable(connection, frontier, item, &mut broken).await,
        };
        outcomes.push(outcome);
    }
    if broken.is_none() {
        broken = execute(connection, "COMMIT").await.err();
    }
    let Some(error) = broken else { return outcomes };
    *frontier = Frontier::default();
    // The transaction may be gone already, as it is when the disk is full; then this fails and nothing is lost.
    let _ = execute(connection, "ROLLBACK").await;
    tracing::error!(error = &error as &dyn std::error::Error, "a group of writes failed");
    outcomes.into_iter().map(|outcome| outcome.failed(&error)).collect()
}

async fn begin(connection: &mut SqliteConnection, frontier: &mut Frontier) -> Result<(), LedgerError> {
    let sql = "BEGIN IMMEDIATE; SAVEPOINT item; SELECT COALESCE(MAX(leaf), -1) + 1 FROM tree_leaves";
    let size: i64 = sqlx::query_scalar(sql).fetch_one(&mut *connection).await?;
    if u64::try_from(size) != Ok(frontier.size()) {
        *frontier = Frontier::read(connection).await?;
    }
    Ok(())
}

/// Writes one item inside the savepoint that is open, and opens it anew. `broken` is set if the transaction itself can no longer be trusted.
async fn write_undoable(
    connection: &mut SqliteConnection,
    frontier: &mut Frontier,
    item: Item,
    broken: &mut Option<LedgerError>,
) -> Outcome {
    let outcome = item.write(connection, frontier).await;
    *broken = match &outcome {
        // Undone, the savepoint stays open for the next item.
        outcome if outcome.broken().is_some() => execute(connection, "ROLLBACK TO item").await.err(),
        // It opened the next savepoint with its last word, or wrote nothing.
        Outcome::Entry(..) => None,
        _ => execute(connection, NEXT).await.err(),
    };
    outcome
}

async fn execute(connection: &mut SqliteConnection, sql: &'static str) -> Result<(), LedgerError> {
    sqlx::query(sql).execute(connection).await?;
    Ok(())
}

async fn write_profile(
    connection: &mut SqliteConnection,
    frontier: &mut Frontier,
    rig: &RigName,
    profile: &Profile,
    expectation: &Expectation,
    recorded_at: Stamp,
) -> ProfileAnswer {
    let text = serde_json::to_string(profile)
        .map_err(|source| LedgerError::Unreadable { what: "profile", source: std::sync::Arc::new(source) })?;
    let sql = "SELECT version, profile FROM rig_profiles WHERE rig = ? ORDER BY version DESC LIMIT 1";
    let newest: Option<(i64, String)> = sqlx::query_as(sql).bind(rig.as_str()).fetch_optional(&mut *connection).await?;
    let (current, same) = match &newest {
        Some((version, stored)) => (u64::try_from(*version).ok(), *stored == text),
        None => (None, false),
    };
    if let (Some(current), true, true) = (current, same, *expectation != Expectation::Absent) {
        return Ok((Kept::Unchanged, current));
    }
    let holds = match (expectation, current) {
        (Expectation::Unstated, Some(current)) => return Err(WriteError::ExpectationMissing { current }),
        (Expectation::Unstated | Expectation::Absent, None) => true,
        (Expectation::Present, current) => current.is_some(),
        (Expectation::Versions(versions), Some(current)) => versions.contains(&current),
        (Expectation::Absent, Some(_)) | (Expectation::Versions(_), None) => false,
    };
    if !holds {
        return Err(WriteError::ExpectationFailed { current });
    }
    let version = newest.map_or(1, |(version, _)| version + 1);
    sqlx::query("INSERT INTO rig_profiles (rig, version, recorded_at, profile) VALUES (?, ?, ?, ?)")
        .bind(rig.as_str())
        .bind(version)
        .bind(recorded_at.microseconds())
        .bind(text)
        .execute(&mut *connection)
        .await?;
    tree::log(connection, frontier, &PROFILE, &format!("{rig}/{version}")).await?;
    let kept = if version == 1 { Kept::Created } else { Kept::Updated };
    Ok((kept, u64::try_from(version).map_err(|_| LedgerError::OutOfRange { what: "version" })?))
}

async fn write_entry(connection: &mut SqliteConnection, frontier: &mut Frontier, entry: Entry) -> EntryAnswer {
    if let Err(error) = insert_entry(connection, frontier, &entry).await {
        // The key may stand for a batch already. To ask first would cost every batch a question, and hardly any has been sent before.
        execute(connection, "ROLLBACK TO item").await?;
        let Some(answered) = answered_within(connection, &entry.rig, &entry.submission.key).await? else { return Err(error.into()) };
        let same = answered.body_digest == entry.submission.body_digest;
        return if same { Ok(Settled { answered, replayed: true }) } else { Err(WriteError::KeyReused) };
    }
    let Entry { id, record, refusal, submission, .. } = entry;
    Ok(Settled { answered: Answered { id, body_digest: submission.body_digest, record, refusal }, replayed: false })
}

/// A certification with all that belongs to it, and the row that is logged about it. One text, so that the database is asked once.
///
/// A commitment that is not there makes its column NULL, which the column refuses.
static ENTRY: LazyLock<Arc<str>> = LazyLock::new(|| {
    let inserts = "\
        INSERT INTO certifications (entry, id, rig, profile_version, verdict, reason, recorded_at, certified_bits, rounds, failure, record) \
            VALUES ((SELECT COALESCE(MAX(entry), -1) + 1 FROM certifications), $1, $2, $3, $4, $5, $6, $7, $8, $9, $10); \
        INSERT INTO certification_witnesses (entry, digest) \
            SELECT c.entry, w.value FROM certifications c, json_each($11) w WHERE c.id = $1; \
        INSERT INTO certification_commitments (entry, commitment) \
            SELECT entry, (SELECT commitment FROM commitments WHERE id = $12) FROM certifications WHERE id = $1 AND $12 IS NOT NULL; \
        INSERT INTO submissions (rig, idempotency_key, body_digest, entry, refusal) \
            SELECT $2, $13, $14, entry, $15 FROM certifications WHERE id = $1; ";
    format!("{inserts}{}", CERTIFICATION.row).into()
});

/// The leaf of a certification, with which the item ends: one question less to the database.
static LEAF: LazyLock<String> = LazyLock::new(|| format!("{}; {NEXT}", tree::INSERT));

/// Adds the certification as the next entry, with its witnesses and its submission, and logs it.
async fn insert_entry(connection: &mut SqliteConnection, frontier: &mut Frontier, entry: &Entry) -> Result<(), LedgerError> {
    for (digest, document) in &entry.witnesses {
        insert_witness(connection, digest, document).await?;
    }
    let digests: Vec<&String> = entry.witnesses.iter().map(|(digest, _)| digest).chain(&entry.kept).collect();
    let row = sqlx::query(AssertSqlSafe(Arc::clone(&ENTRY)))
        .bind(entry.id.to_string())
        .bind(entry.rig.as_str())
        .bind(signed(entry.profile_version, "version")?)
        .bind(word(entry.verdict))
        .bind(entry.reason.map(word))
        .bind(entry.recorded_at.microseconds())
        .bind(signed(entry.certified_bits, "number of bits")?)
        .bind(signed(entry.rounds, "number of rounds")?)
        .bind(entry.failure)
        .bind(&entry.record)
        // Strings only: serialisation cannot fail.
        .bind(serde_json::to_string(&digests).unwrap_or_default())
        .bind(entry.commitment.map(|id| id.to_string()))
        .bind(entry.submission.key.as_str())
        .bind(&entry.submission.body_digest)
        .bind(&entry.refusal)
        .fetch_one(&mut *connection)
        .await?;
    tree::append(connection, frontier, &CERTIFICATION.read(&row)?, &LEAF).await?;
    Ok(())
}

async fn write_commitment(
    connection: &mut SqliteConnection,
    frontier: &mut Frontier,
    committed: &Committed,
    witnesses: &[(String, String)],
) -> CommitmentAnswer {
    let sql = "INSERT INTO commitments (commitment, id, rig, profile_version, recorded_at, level, digest, document) \
               VALUES ((SELECT COALESCE(MAX(commitment), -1) + 1 FROM commitments), ?, ?, ?, ?, ?, ?, ?) RETURNING commitment";
    let number: i64 = sqlx::query_scalar(sql)
        .bind(committed.id.to_string())
        .bind(committed.rig.as_str())
        .bind(signed(committed.profile_version, "version")?)
        .bind(committed.recorded_at.microseconds())
        .bind(word(committed.level))
        .bind(&committed.digest)
        .bind(&committed.document)
        .fetch_one(&mut *connection)
        .await?;
    for (digest, document) in witnesses {
        insert_witness(connection, digest, document).await?;
        let sql = "INSERT INTO commitment_witnesses (commitment, digest) VALUES (?, ?)";
        sqlx::query(sql).bind(number).bind(digest).execute(&mut *connection).await?;
    }
    tree::log(connection, frontier, &COMMITMENT, &committed.id.to_string()).await?;
    Ok(())
}

async fn write_budget(
    connection: &mut SqliteConnection,
    frontier: &mut Frontier,
    digest: &str,
    document: &str,
    recorded_at: Stamp,
) -> BudgetAnswer {
    let sql = "INSERT INTO leakage_budgets (budget, digest, recorded_at, document) \
               SELECT (SELECT COALESCE(MAX(budget), -1) + 1 FROM leakage_budgets), ?1, ?2, ?3 \
               WHERE NOT EXISTS (SELECT 1 FROM leakage_budgets WHERE digest = ?1)";
    let written = sqlx::query(sql).bind(digest).bind(recorded_at.microseconds()).bind(document).execute(&mut *connection).await?;
    let new = written.rows_affected() > 0;
    if new {
        tree::log(connection, frontier, &BUDGET, digest).await?;
    }
    Ok(new)
}

async fn write_kept(connection: &mut SqliteConnection, added: &[KeptRow], dropped: &[String]) -> KeptAnswer {
    for KeptRow { digest, document, made_for } in added {
        insert_witness(connection, digest, document).await?;
        let sql = "INSERT OR REPLACE INTO kept_witnesses (digest, made_for) VALUES (?, ?)";
        sqlx::query(sql).bind(digest).bind(made_for).execute(&mut *connection).await?;
    }
    for digest in dropped {
        sqlx::query("DELETE FROM kept_witnesses WHERE digest = ?").bind(digest).execute(&mut *connection).await?;
    }
    Ok(())
}

fn signed(number: u64, what: &'static str) -> Result<i64, LedgerError> {
    i64::try_from(number).map_err(|_| LedgerError::OutOfRange { what })
}

/// Keeps the witness, unless it is known.
async fn insert_witness(connection: &mut SqliteConnection, digest: &str, document: &str) -> Result<(), LedgerError> {
    sqlx::query("INSERT INTO witnesses (digest, document) SELECT ?1, ?2 WHERE NOT EXISTS (SELECT 1 FROM witnesses WHERE digest = ?1)")
        .bind(digest)
        .bind(document)
        .execute(connection)
        .await?;
    Ok(())
}
