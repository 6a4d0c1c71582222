//! Posted batches, JSON and CSV, under three profiles: both forms say the same, what is accepted keeps the rules, what is certified is confirmed
//! by `verify`, and what is wrong is named.
//!
//! The first byte of an input chooses the profile and the form, the rest is what is posted.
#![no_main]

use std::sync::{Arc, LazyLock};

use bitassay::{
    batch::{Batch, BatchDocument, BatchFault, CsvOptions, Posted, Task, rows::Rows},
    certificate::{Certificate, Verdict},
    certify::{certify, certify_from, keepable},
    commitment::{CommitmentDocument, Plan, commit},
    committed::Committed,
    counts::{MAX_ROUNDS, Table, fits},
    fault::{Fault, parse_object},
    profile::Profile,
    request::{LostRounds, LostTreatment, Request},
    scenario::LeakageDocument,
    verify::verify,
    witness::{
        pool::{Kept, Pool},
        witness::Witness,
    },
};
use serde_json::{Value, json};

mod engine;
mod pointer;

/// A profile, and what certifies its batches without a solve.
struct Rig {
    profile: Profile,
    committed: Option<Committed>,
    pool: Pool,
    witnesses: Vec<Witness>,
}

static RIGS: LazyLock<[Rig; 3]> = LazyLock::new(|| [independent(), plug_in(), memory()]);

fn profile(text: Value) -> Profile {
    serde_json::from_value(text).unwrap()
}

fn two_states(rounds: &str) -> Profile {
    profile(json!({ "scenario": { "preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 1, "leakage": 0.1,
        "targets": [[0, 0], [1, 0]] }, "rounds": rounds, "level": "lean", "setting_distribution": [[0.5], [0.5]] }))
}

/// Kept witnesses are those of one good batch.
fn independent() -> Rig {
    let profile = two_states("independent");
    let posted =
        json!({ "counts": [[[79000, 21000]], [[21000, 79000]]], "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z" });
    let batch = read(Posted::Json(posted.to_string().into()), &profile, None).unwrap();
    let Task::Solve(request) = batch.task else { panic!("nothing to solve") };
    let found = certify(&request);
    assert_eq!(found.certificate.verdict, Verdict::Certified);
    let mut pool = Pool::new(8, 8);
    for (witness, made_for) in keepable(&request, &found) {
        pool.add(Arc::new(Kept::try_new(&witness, made_for).unwrap()));
    }
    Rig { profile, committed: None, pool, witnesses: found.witnesses }
}

fn plug_in() -> Rig {
    let profile = profile(json!({ "scenario": { "preparations": 3, "measurements": 2, "outcomes": 3, "carrier_dimension": 2,
        "leakage": [0.01, 0, 0.02], "leakage_holds": "every-emission", "targets": [[2, 1]] }, "rounds": "plug-in" }));
    Rig { profile, committed: None, pool: Pool::new(1, 1), witnesses: Vec::new() }
}

fn memory() -> Rig {
    let profile = two_states("memory");
    let document = CommitmentDocument {
        scenario: profile.scenario().clone().into(),
        expected_behaviour: vec![vec![vec![0.79, 0.21]], vec![vec![0.21, 0.79]]],
        setting_distribution: vec![vec![0.5], vec![0.5]],
        rounds: 200_000,
        failure: profile.failure(),
        level: profile.level(),
    };
    let (commitment, witnesses) = commit(&Plan::try_from(document).unwrap()).unwrap();
    let committed = Committed {
        id: Default::default(),
        rig: "bench".parse().unwrap(),
        profile_version: 1,
        recorded_at: "2026-01-01T00:00:00Z".parse().unwrap(),
        level: profile.level(),
        digest: String::new(),
        document: String::new(),
        commitment,
    };
    Rig { profile, committed: Some(committed), pool: Pool::new(1, 1), witnesses }
}

engine::target!(run, after RIGS);

fn run(input: &[u8]) {
    let Some((choice, text)) = input.split_first() else { return };
    let rig = &RIGS[usize::from(choice >> 1) % RIGS.len()];
    if choice & 1 == 0 { json(rig, text) } else { csv(rig, text) }
}

fn read(posted: Posted, profile: &Profile, committed: Option<&Committed>) -> Result<Batch, BatchFault> {
    posted.read(profile.scenario().geometry())?.under(profile, committed)
}

impl Rig {
    fn read(&self, posted: Posted) -> Result<Batch, BatchFault> {
        assert_eq!(posted.digest(), posted.clone().digest());
        read(posted, &self.profile, self.committed.as_ref())
    }
}

fn json(rig: &Rig, text: &[u8]) {
    let batch = match rig.read(Posted::Json(text.to_vec())) {
        Ok(batch) => batch,
        Err(BatchFault::Malformed(fault)) => return pointer::assert_points_into(text, &fault),
        Err(BatchFault::Impossible(fault)) => {
            assert!(parse_object::<BatchDocument>(text).is_ok(), "{fault} is of a batch that has no shape");
            return pointer::assert_points_into(text, &fault);
        }
    };
    let document: BatchDocument = parse_object(text).unwrap();
    accepted(rig, &document, &batch);
    // The same in its own words, and as rows.
    let again = serde_json::to_vec(&document).unwrap();
    assert_eq!(rig.read(Posted::Json(again)).as_ref(), Ok(&batch));
    let mut rows = String::from("preparation,measurement,outcome,count\n");
    for (x, table) in document.counts.iter().enumerate() {
        for (y, counts) in table.iter().enumerate() {
            rows.extend(counts.iter().enumerate().map(|(b, n)| format!("{x},{y},{b},{n}\n")));
        }
    }
    let BatchDocument { started_at, ended_at, leakage, lost_rounds, .. } = document;
    let options = CsvOptions { started_at, ended_at, leakage, lost_rounds };
    assert_eq!(rig.read(Posted::Csv { text: rows.into(), options }), Ok(batch));
}

fn csv(rig: &Rig, text: &[u8]) {
    let time = |text: &str| text.parse().unwrap();
    let leakage = rig.committed.is_none().then_some(LeakageDocument::Uniform(0.05));
    let options =
        CsvOptions { started_at: time("2026-03-01T12:00:00Z"), ended_at: time("2026-03-01T12:05:00Z"), leakage, lost_rounds: None };
    let posted = Posted::Csv { text: text.to_vec(), options: options.clone() };
    let batch = match rig.read(posted) {
        Ok(batch) => batch,
        Err(BatchFault::Malformed(fault) | BatchFault::Impossible(fault)) => return names_a_line(text, &fault),
    };
    let counts = Rows::read(text).unwrap().table(rig.profile.scenario().geometry()).unwrap();
    let CsvOptions { started_at, ended_at, leakage, lost_rounds } = options;
    let document = BatchDocument { counts, started_at, ended_at, leakage, lost_rounds };
    accepted(rig, &document, &batch);
    assert_eq!(rig.read(Posted::Json(serde_json::to_vec(&document).unwrap())), Ok(batch));
}

/// `/lines/7`, `/lines/7/count`, or the whole.
fn names_a_line(text: &[u8], fault: &Fault) {
    assert!(!fault.detail.is_empty());
    if fault.pointer.is_empty() {
        return;
    }
    let mut steps = fault.pointer.split('/').skip(1);
    assert_eq!(steps.next(), Some("lines"), "{fault:?}");
    let line: usize = steps.next().and_then(|line| line.parse().ok()).unwrap_or_else(|| panic!("{fault:?}"));
    let lines = text.split(|byte| *byte == b'\n').count();
    assert!((1..=lines).contains(&line), "{fault:?} in {lines} lines");
    assert!(steps.next().is_none_or(|column| ["preparation", "measurement", "outcome", "count"].contains(&column)), "{fault:?}");
    assert_eq!(steps.next(), None);
}

/// The rules for what is accepted, and for what is certified from it.
fn accepted(rig: &Rig, document: &BatchDocument, batch: &Batch) {
    let geometry = rig.profile.scenario().geometry();
    assert!(batch.started_at <= batch.ended_at);
    assert!(fits(&document.counts, geometry));
    let counts = folded(&document.counts, document.lost_rounds.as_ref());
    let total: u128 = counts.iter().flatten().flatten().map(|n| u128::from(*n)).sum();
    assert!(total <= u128::from(MAX_ROUNDS), "{total} rounds");
    assert!(counts.iter().flatten().all(|n| n.iter().any(|n| *n > 0)), "a setting without rounds");
    match &batch.task {
        Task::Solve(request) => from_kept(rig, request),
        Task::Done(certificate) => {
            assert_eq!(verify(certificate, rig.committed.as_ref().map(|c| &c.commitment), &rig.witnesses), Ok(()));
            at_most_the_outcomes(certificate, &counts);
        }
    }
}

fn folded(counts: &Table<u64>, lost: Option<&LostRounds>) -> Table<u64> {
    let mut counts = counts.clone();
    if let Some(LostRounds { counts: lost, treatment: LostTreatment::AsOutcome(b) }) = lost {
        for (cells, n) in counts.iter_mut().flatten().zip(lost.iter().flatten()) {
            cells[*b] = cells[*b].saturating_add(*n);
        }
    }
    counts
}

/// What kept witnesses certify, which is confirmed without a solver.
fn from_kept(rig: &Rig, request: &Request) {
    let Some(found) = certify_from(&rig.pool, request, f64::INFINITY) else { return };
    assert_eq!(verify(&found.certificate, None, &rig.witnesses), Ok(()));
    at_most_the_outcomes(&found.certificate, found.certificate.counts.as_ref().unwrap());
}

/// No more bits than the outcomes of the targets have.
fn at_most_the_outcomes(certificate: &Certificate, counts: &Table<u64>) {
    let targets = certificate.scenario.targets();
    let rounds: u64 = targets.iter().map(|target| counts[target.x][target.y].iter().sum::<u64>()).sum();
    let outcomes = certificate.scenario.geometry().outcomes as f64;
    assert!(certificate.certified_bits as f64 <= rounds as f64 * outcomes.log2());
    assert_eq!(certificate.verdict == Verdict::Certified, certificate.certified_bits > 0);
}
