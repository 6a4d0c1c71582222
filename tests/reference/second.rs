//! The program against its second implementation, `tests/reference/checker`, which is written in another language and from the theory: on
//! records of every kind, and on single mutations of them.
//!
//! A mutation that is accepted has to be harmless: it claims no more than the record it was made from. There are two kinds. Both sides accept
//! what is still a theorem, such as a level that was merely asked for, or a leakage that is declared smaller while the bound stays. The second
//! implementation alone accepts what is still proved but not what `certify` writes, such as a claim in which the last digit was rounded the
//! other way, or counts moved by less than the widening of the intervals; `verify` makes the record again and turns it away.

use std::{collections::BTreeMap, fmt, path::Path, process::Command};

use bitassay::{
    bundle::Bundle,
    certificate::Certificate,
    certify::{certify, certify_block},
    commitment::{Commitment, CommitmentDocument, Plan, commit},
    counts::Table,
    relaxation::level::LevelChoice,
    request::{Failure, Request, RequestDocument},
    scenario::Scenario,
    witness::witness::Witness,
};
use serde_json::{Value, json};

use crate::codes::code;

const CHECKER: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/reference/checker");

/// What may change in a witness and leave a theorem that is as good: a monomial stands for its adjoint; with one group both readings of the
/// leakage are one; and where chords have room below the entropy, they lie below that of the next power, and of cells cut a step aside, as
/// well. Both implementations confirm each of these exactly, and none may claim more.
const HARMLESS_IN_A_WITNESS: [&str; 4] =
    ["witnesses/bases/monomials", "witnesses/leakage_holds", "witnesses/claim/power", "witnesses/claim/cuts"];

fn bundle(certificate: &Certificate, commitment: Option<&Commitment>, witnesses: Vec<Witness>) -> Value {
    let witnesses: BTreeMap<String, Witness> = witnesses.into_iter().map(|witness| (witness.digest(), witness)).collect();
    let mut bundle = json!({ "record": certificate, "witnesses": witnesses });
    if let Some(commitment) = commitment {
        bundle["commitment"] = json!(commitment);
    }
    bundle
}

fn scenario_of(size: [usize; 3], dimension: u32, leakage: Value, reading: &str, targets: Value) -> Value {
    json!({ "preparations": size[0], "measurements": size[1], "outcomes": size[2], "carrier_dimension": dimension,
            "leakage": leakage, "leakage_holds": reading, "targets": targets })
}

/// Counts with the frequencies of a behaviour, as far as integers allow.
fn counts(behaviour: &Table<f64>, rounds: f64) -> Value {
    json!(
        behaviour
            .iter()
            .map(|t| t.iter().map(|row| row.iter().map(|p| (p * rounds).round() as u64).collect()).collect())
            .collect::<Table<u64>>()
    )
}

fn two_states(success: f64) -> Table<f64> {
    vec![vec![vec![success, 1.0 - success]], vec![vec![1.0 - success, success]]]
}

/// Unambiguous discrimination of two states of overlap 0.9, with white noise.
fn unambiguous() -> Table<f64> {
    let noise = 0.01 / 3.0;
    let (right, none) = (0.099 + noise, 0.891 + noise);
    vec![vec![vec![right, noise, none]], vec![vec![noise, right, none]]]
}

/// A qubit trine with two measurements of three outcomes: mixed towards noise, so that it is well within a qubit.
fn trine() -> Table<f64> {
    let angle = |step: usize| step as f64 * std::f64::consts::TAU / 3.0;
    let at = |x: usize, y: usize, b: usize| (1.0 + 0.9 * (angle(x) - angle(b) - y as f64 * 0.5).cos()) / 3.0;
    (0..3).map(|x| (0..2).map(|y| (0..3).map(|b| at(x, y, b)).collect()).collect()).collect()
}

fn committed(scenario: Value, expected: &Table<f64>, rounds: u64) -> (Commitment, Vec<Witness>) {
    let scenario: Scenario = serde_json::from_value(scenario).unwrap();
    let settings = (scenario.geometry().preparations * scenario.geometry().measurements) as f64;
    let setting_distribution = expected.iter().map(|t| vec![1.0 / settings; t.len()]).collect();
    let document = CommitmentDocument {
        scenario: scenario.into(),
        expected_behaviour: expected.clone(),
        setting_distribution,
        rounds,
        failure: Failure::default(),
        level: LevelChoice::Lean,
    };
    commit(&Plan::try_from(document).unwrap()).unwrap()
}

/// A block of rounds with memory whose counts are those expected.
fn block(scenario: Value, expected: &Table<f64>, in_time: bool) -> Value {
    let counts: Table<u64> = serde_json::from_value(counts(expected, 1e6)).unwrap();
    let (commitment, witnesses) = committed(scenario, expected, counts.iter().flatten().flatten().sum());
    let certificate = certify_block(&commitment, LevelChoice::Lean, counts, None, in_time).unwrap();
    bundle(&certificate, Some(&commitment), witnesses)
}

fn corpus() -> Vec<(&'static str, Value)> {
    let average = "on-average";
    let code_of = |leakage: Value, reading: &str, targets: Value| scenario_of([4, 2, 2], 2, leakage, reading, targets);
    let two_of = |leakage: Value, reading: &str| scenario_of([2, 1, 2], 1, leakage, reading, json!([[0, 0]]));
    let noisy = counts(&code(2, 0.99), 1e6);
    let requests = [
        (
            "lean",
            json!({ "scenario": code_of(json!(0.001), average, json!([[0, 0]])), "counts": noisy, "rounds": "independent", "level": "lean" }),
        ),
        (
            "standard",
            json!({ "scenario": code_of(json!(0.001), "every-emission", json!([[0, 0]])), "counts": noisy, "rounds": "independent",
                             "level": "standard" }),
        ),
        (
            "sharp",
            json!({ "scenario": code_of(json!(0), average, json!([[3, 1]])), "counts": noisy, "rounds": "independent", "level": "sharp" }),
        ),
        (
            "several-targets",
            json!({ "scenario": code_of(json!([0.001, 0, 0.002, 0.0005]), average, json!([[0, 0], [1, 1], [2, 0]])),
                                    "counts": noisy, "rounds": "independent", "level": "lean", "failure": { "estimation": 1e-6, "hashing": 1e-8 } }),
        ),
        (
            "power",
            json!({ "scenario": two_of(json!(0.1), average), "counts": counts(&two_states(0.79), 1e5), "rounds": "independent",
                          "level": "lean", "entropy": "power" }),
        ),
        (
            "power-every-emission",
            json!({ "scenario": two_of(json!(0.1), "every-emission"), "counts": counts(&two_states(0.79), 1e9),
                                         "rounds": "independent", "level": "standard", "entropy": "power" }),
        ),
        ("plug-in", json!({ "scenario": two_of(json!([0.01, 0.02]), average), "counts": [[[70, 41]], [[45, 67]]], "rounds": "plug-in" })),
        (
            "stated",
            json!({ "scenario": code_of(json!(0.01), "every-emission", json!([[0, 1]])), "behaviour": code(2, 0.99), "rounds": "plug-in",
                           "level": "lean" }),
        ),
        (
            "score",
            json!({ "scenario": code_of(json!(0), average, json!([[0, 0]])), "rounds": "plug-in", "level": "lean",
                          "scores": [{ "coefficients": [[[1, 0], [1, 0]], [[0, 1], [1, 0]], [[1, 0], [0, 1]], [[0, 1], [0, 1]]], "at_least": 6.8 }] }),
        ),
        (
            "outside",
            json!({ "scenario": code_of(json!(0), average, json!([[0, 0]])), "counts": counts(&code(2, 1.2), 1e5), "rounds": "independent",
                            "level": "lean" }),
        ),
        (
            "outside-leaking",
            json!({ "scenario": two_of(json!(0.01), average), "counts": counts(&two_states(0.75), 1e4), "rounds": "independent" }),
        ),
        (
            "zero-bound",
            json!({ "scenario": two_of(json!(0.3), average), "counts": counts(&two_states(0.6), 200.0), "rounds": "independent" }),
        ),
        (
            "few-rounds",
            json!({ "scenario": two_of(json!(0.1), average), "counts": [[[3, 1]], [[0, 5]]], "rounds": "independent",
                               "failure": { "estimation": 0.01, "hashing": 0.01 } }),
        ),
        (
            "three-outcomes",
            json!({ "scenario": scenario_of([2, 1, 3], 1, json!(0.05), "every-emission", json!([[0, 0], [1, 0]])),
                                   "counts": counts(&unambiguous(), 1e7), "rounds": "independent", "level": "sharp" }),
        ),
        (
            "three-outcomes-power",
            json!({ "scenario": scenario_of([2, 1, 3], 1, json!(0.05), "every-emission", json!([[0, 0]])),
                                         "counts": counts(&unambiguous(), 1e7), "rounds": "independent", "level": "lean", "entropy": "power" }),
        ),
        (
            "three-outcomes-no-leakage",
            json!({ "scenario": scenario_of([3, 2, 3], 2, json!(0), average, json!([[1, 1]])),
                                              "counts": counts(&trine(), 1e8), "rounds": "independent", "level": "lean" }),
        ),
        (
            "lost",
            json!({ "scenario": two_of(json!(0.1), average), "counts": counts(&two_states(0.79), 1e5), "rounds": "independent",
                         "lost_rounds": { "counts": [[30], [20]], "treatment": { "as-outcome": 1 } } }),
        ),
    ];
    let certified = requests.into_iter().map(|(name, document)| {
        let document: RequestDocument = serde_json::from_value(document).unwrap();
        let found = certify(&Request::try_from(document).unwrap());
        (name, bundle(&found.certificate, None, found.witnesses))
    });
    let mut all: Vec<(&str, Value)> = certified.collect();
    all.push(("memory", block(two_of(json!(0.1), average), &two_states(0.79), true)));
    all.push((
        "memory-targets",
        block(scenario_of([2, 1, 2], 1, json!(0.1), "every-emission", json!([[0, 0], [1, 0]])), &two_states(0.79), true),
    ));
    let three = scenario_of([2, 1, 3], 1, json!(0.05), "every-emission", json!([[0, 0]]));
    all.push(("memory-three-outcomes", block(three, &unambiguous(), true)));
    all.push(("memory-late", block(two_of(json!(0.1), average), &two_states(0.79), false)));
    all
}

fn python(arguments: &[&str], files: &[String]) -> String {
    let run = Command::new("python3").arg("-B").arg(CHECKER).args(arguments).args(files).output();
    let run = run.expect("python3 (3.11 or newer), in which the second implementation is written, cannot be run: install it");
    assert!(run.status.code() == Some(0) || run.status.code() == Some(3), "{}", String::from_utf8_lossy(&run.stderr));
    String::from_utf8(run.stdout).unwrap()
}

/// Writes the corpus into a folder; the files and their bundles.
fn written(folder: &Path) -> Vec<(String, Value)> {
    let write = |(name, bundle): (&str, Value)| {
        let file = folder.join(format!("{name}.json"));
        std::fs::write(&file, bundle.to_string()).unwrap();
        (file.display().to_string(), bundle)
    };
    corpus().into_iter().map(write).collect()
}

fn place<'a>(document: &'a mut Value, path: &[Value]) -> &'a mut Value {
    path.iter().fold(document, |here, step| match step {
        Value::String(name) => &mut here[name.as_str()],
        index => &mut here[index.as_u64().unwrap() as usize],
    })
}

/// Does to a bundle what a line of the second implementation says was done to it.
fn mutate(bundle: &Value, steps: &Value) -> Value {
    let mut mutated = bundle.clone();
    for step in steps.as_array().unwrap() {
        if let Some(name) = step["rename"].as_str() {
            let witnesses = mutated["witnesses"].as_object_mut().unwrap();
            let witness = witnesses.remove(name).unwrap();
            witnesses.insert(step["to"].as_str().unwrap().to_owned(), witness);
        } else {
            *place(&mut mutated, step["path"].as_array().unwrap()) = step["value"].clone();
        }
    }
    mutated
}

/// Everything that a record claims, larger being more.
fn claims(record: &Value) -> Vec<f64> {
    let number = |value: &Value| value.as_f64().unwrap_or(0.0);
    let mut claims = vec![number(&record["certified_bits"]), number(&record["bits_per_round"])];
    for target in record["targets"].as_array().into_iter().flatten() {
        claims.extend(["certified_bits", "min_entropy", "min_entropy_per_round"].map(|name| number(&target[name])));
        claims.push(-target["guessing_probability_bound"].as_f64().unwrap_or(1.0));
        claims.push(number(&target["power"]["min_entropy"]));
    }
    claims.extend(["certified_bits", "min_entropy"].map(|name| number(&record["block"][name])));
    claims.push(number(&record["outside_model"]["smallest_uniform_leakage"]));
    claims
}

/// What both implementations made of the corpus and of mutations of it.
pub struct Agreement {
    pub records: usize,
    pub mutations: usize,
    /// Mutations that both turn away.
    pub rejected: usize,
    /// Mutations that both accept, by what was changed.
    theorems: BTreeMap<String, usize>,
    /// Mutations that the second implementation alone accepts.
    weaker: BTreeMap<String, usize>,
    /// What must not happen.
    pub violations: Vec<String>,
}

/// Has both implementations look at the corpus and at so many mutations of it; the seed chooses which.
pub fn agreement(mutations: usize, seed: u64) -> Agreement {
    let folder = tempfile::tempdir().unwrap();
    let corpus = written(folder.path());
    let files: Vec<String> = corpus.iter().map(|(file, _)| file.clone()).collect();
    let mut violations = Vec::new();
    for (file, bundle) in &corpus {
        if let Err(error) = Bundle::read(bundle.to_string().as_bytes()).unwrap().verify() {
            violations.push(format!("the program does not believe its own {file}: {error:?}"));
        }
    }
    let said = python(&["--eliminate"], &files);
    assert_eq!(said.lines().count(), corpus.len());
    violations.extend(said.lines().filter(|line| !line.ends_with(": believed")).map(str::to_owned));

    let said = python(&["--mutate", &mutations.to_string(), "--seed", &seed.to_string()], &files);
    assert_eq!(said.lines().count(), mutations);
    let (mut rejected, mut theorems, mut weaker) = (0, BTreeMap::new(), BTreeMap::new());
    for line in said.lines() {
        let line: Value = serde_json::from_str(line).unwrap();
        let original = &corpus.iter().find(|(file, _)| line["file"] == file.as_str()).unwrap().1;
        let mutated = mutate(original, &line["steps"]);
        let verified = Bundle::read(mutated.to_string().as_bytes()).is_ok_and(|bundle| bundle.verify().is_ok());
        let believed = line["problem"].is_null();
        let brief = |line: &Value| format!("{} {} {}", line["file"], line["steps"][0], line["problem"]);
        if !believed {
            rejected += usize::from(!verified);
            violations.extend(verified.then(|| format!("only the program believes {}", brief(&line))));
            continue;
        }
        let what = line["what"].as_str().unwrap();
        let integers = what.starts_with("witnesses/") && !HARMLESS_IN_A_WITNESS.contains(&what);
        violations.extend(integers.then(|| format!("a changed witness is believed: {}", brief(&line))));
        let more = claims(&mutated["record"]).into_iter().zip(claims(&original["record"])).any(|(new, old)| new > old + 1e-12 * old.abs());
        violations.extend(more.then(|| format!("a mutation claims more and is believed: {}", brief(&line))));
        *if verified { &mut theorems } else { &mut weaker }.entry(what.to_owned()).or_insert(0) += 1;
    }
    // Fewer do not get round to every section of the records.
    if mutations >= 1000 && rejected * 5 <= 4 * mutations {
        violations.push(format!("{} of {mutations} mutations are harmless, so the mutations are bad ones", mutations - rejected));
    }
    Agreement { records: corpus.len(), mutations, rejected, theorems, weaker, violations }
}

impl fmt::Display for Agreement {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        let Self { records, mutations, rejected, theorems, weaker, .. } = self;
        let count = |kinds: &BTreeMap<String, usize>| kinds.values().sum::<usize>();
        writeln!(formatter, "{records} records, {mutations} mutations: {rejected} rejected by both")?;
        writeln!(formatter, "{} are still theorems: {theorems:?}", count(theorems))?;
        writeln!(formatter, "{} claim no more than is proved, but are not what certify writes: {weaker:?}", count(weaker))
    }
}

#[test]
fn both_implementations_agree_on_records_and_on_mutations() {
    let agreement = agreement(200, 1);
    print!("{agreement}");
    assert_eq!(agreement.violations, Vec::<String>::new());
}
