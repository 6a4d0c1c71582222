//! Re-checks a certificate and its witnesses without a solver.
//!
//! Everything in a certificate follows from the request and the witnesses, so the certificate is made again from them, each
//! witness passing the exact check first, and compared with the recorded one value by value.

use std::collections::BTreeMap;

use serde_json::Value;

use crate::{
    certificate::{Certificate, OutsideModel, Reason},
    certify::{Draft, Evidence, Grounds, certify_counted, evidence},
    commitment::{Commitment, CommitmentFault},
    fault::Fault,
    request::{Failure, Request, RequestDocument, RoundModel},
    witness::{
        check::{CheckError, CheckedWitness, check, proves_contradiction},
        witness::{Claim, Witness},
    },
};

/// One reason not to believe a certificate, with the JSON pointer of the value in question.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum Discrepancy {
    #[error("{0}")]
    Request(#[from] Fault),
    #[error("/targets: the scenario has {declared} targets, the record {recorded}")]
    Targets { declared: usize, recorded: usize },
    #[error("a record of rounds with memory is checked against its commitment, which is missing")]
    MissingCommitment,
    #[error("the commitment is not believed: {0}")]
    Commitment(#[from] CommitmentFault),
    #[error("{pointer}: the witness {digest} is missing")]
    MissingWitness { pointer: String, digest: String },
    #[error("{pointer}: the witness {digest} is not accepted: {error}")]
    Witness { pointer: String, digest: String, error: CheckError },
    #[error("{pointer}: the witness {digest} does not prove what is claimed: {detail}")]
    Claim { pointer: String, digest: String, detail: &'static str },
    #[error("{pointer}: recorded {recorded}, recomputed {recomputed}")]
    Value { pointer: String, recorded: Box<Value>, recomputed: Box<Value> },
}

/// Re-checks a certificate; one of rounds with memory needs its commitment. Witnesses are found by the digests of their canonical bytes; those that are not named are ignored.
///
/// # Errors
/// Every discrepancy that was found; those of the request and the witnesses first, which leave nothing to compare.
pub fn verify(certificate: &Certificate, commitment: Option<&Commitment>, witnesses: &[Witness]) -> Result<(), Vec<Discrepancy>> {
    let by_digest: BTreeMap<String, &Witness> = witnesses.iter().map(|witness| (witness.digest(), witness)).collect();
    let recomputed = match certificate.rounds {
        RoundModel::Memory => recompute_block(certificate, commitment, witnesses),
        RoundModel::PlugIn | RoundModel::Independent => recompute(certificate, &by_digest),
    };
    let mut recomputed = recomputed.map_err(|discrepancy| vec![discrepancy])?;
    // A refusal takes nothing that was not there: it is believed, with the bounds that it shows.
    if let Some(objection) = certificate.reason.and_then(Reason::objection) {
        recomputed.refuse(objection);
    }
    let mut differences = Vec::new();
    let (recorded, recomputed) = (serde_json::to_value(certificate), serde_json::to_value(&recomputed));
    compare(&recorded.unwrap_or_default(), &recomputed.unwrap_or_default(), String::new(), &mut differences);
    if differences.is_empty() { Ok(()) } else { Err(differences) }
}

/// The request that a certificate answers. Lost rounds that were counted as an outcome are in the recorded counts already.
fn request(certificate: &Certificate) -> Result<Request, Fault> {
    let document = RequestDocument {
        scenario: certificate.scenario.clone().into(),
        counts: certificate.counts.clone(),
        behaviour: certificate.behaviour.clone(),
        scores: certificate.scores.clone(),
        rounds: certificate.rounds,
        failure: certificate.failure.map_or_else(Failure::default, |f| Failure { estimation: f.estimation, hashing: f.hashing }),
        level: certificate.level,
        entropy: certificate.entropy,
        lost_rounds: None,
        bracket: false,
    };
    let mut request = Request::try_from(document)?;
    request.lost_rounds = certificate.lost_rounds.clone();
    Ok(request)
}

fn recompute(certificate: &Certificate, witnesses: &BTreeMap<String, &Witness>) -> Result<Certificate, Discrepancy> {
    let request = request(certificate)?;
    let evidence = evidence(&request);
    let mut draft = Draft::new(&request, Some(&evidence));
    let mut recomputed = if let Some(outside) = &certificate.outside_model {
        recompute_outside(draft, &request, &evidence, outside, witnesses)?
    } else {
        let declared = request.scenario().targets();
        if declared.len() != certificate.targets.len() {
            return Err(Discrepancy::Targets { declared: declared.len(), recorded: certificate.targets.len() });
        }
        for (target, recorded) in declared.iter().zip(&certificate.targets) {
            let Some((level, digest)) = recorded.level.zip(recorded.witness.as_ref()) else {
                draft.add_unverified(&request, *target);
                continue;
            };
            let pointer = format!("/targets/{}/witness", draft.targets());
            let witness = find(witnesses, digest, &pointer)?;
            let claim = |detail| Discrepancy::Claim { pointer: pointer.clone(), digest: digest.clone(), detail };
            if witness.witness().claim != (Claim::Guess { target: *target }) {
                return Err(claim("it bounds something else"));
            }
            if witness.witness().geometry != request.scenario().geometry() {
                return Err(claim("it is for another geometry"));
            }
            if !witness.witness().is_of_level(level) {
                return Err(claim("it is not of the recorded level"));
            }
            let bound = witness.bound(evidence.place(), request.scenario().leakage(), request.scenario().leakage_holds());
            let bound = bound.map_err(|error| Discrepancy::Witness { pointer: pointer.clone(), digest: digest.clone(), error })?;
            if proves_contradiction(&witness, &bound, evidence.place()) {
                return Err(claim("the numbers contradict the declaration, so there is no entropy to speak of"));
            }
            draft.add(&request, *target, &Grounds { level, witness: &witness, bound: &bound, origin: recorded.origin });
            if let Some(bracket) = recorded.bracket
                && !draft.add_bracket(&request, &evidence, &witness, bracket.attack, bracket.residual)
            {
                return Err(claim("the attack exceeds it"));
            }
            if let Some(recorded) = &recorded.power {
                let pointer = format!("/targets/{}/power/witness", draft.targets() - 1);
                let power = find(witnesses, &recorded.witness, &pointer)?;
                let claim = |detail| Discrepancy::Claim { pointer: pointer.clone(), digest: recorded.witness.clone(), detail };
                let of_target =
                    matches!(&power.witness().claim, Claim::Power { target: of, power, .. } if of == target && *power >= recorded.power);
                if !of_target || power.witness().geometry != request.scenario().geometry() || !power.witness().is_of_level(recorded.level) {
                    return Err(claim("it bounds something else"));
                }
                let bound = power.bound(evidence.place(), request.scenario().leakage(), request.scenario().leakage_holds());
                let bound =
                    bound.map_err(|error| Discrepancy::Witness { pointer: pointer.clone(), digest: recorded.witness.clone(), error })?;
                let grounds = Grounds { level: recorded.level, witness: &power, bound: &bound, origin: recorded.origin };
                draft.add_power(&request, *target, &evidence, &grounds);
            }
        }
        draft.conclude().certificate
    };
    // Which software made a record is not something that can be recomputed.
    recomputed.version.clone_from(&certificate.version);
    Ok(recomputed)
}

fn recompute_block(certificate: &Certificate, commitment: Option<&Commitment>, witnesses: &[Witness]) -> Result<Certificate, Discrepancy> {
    let commitment = commitment.ok_or(Discrepancy::MissingCommitment)?;
    commitment.confirm(&witnesses.iter().collect::<Vec<_>>())?;
    let counts = certificate.counts.clone().unwrap_or_default();
    // Lost rounds that were counted as an outcome are in the recorded counts already.
    let in_time = certificate.reason != Some(Reason::Uncommitted);
    let mut recomputed = certify_counted(commitment, certificate.level, counts, certificate.lost_rounds.clone(), in_time)?;
    recomputed.version.clone_from(&certificate.version);
    Ok(recomputed)
}

fn recompute_outside(
    draft: Draft,
    request: &Request,
    evidence: &Evidence,
    outside: &OutsideModel,
    witnesses: &BTreeMap<String, &Witness>,
) -> Result<Certificate, Discrepancy> {
    let scenario = request.scenario();
    let pointer = "/outside_model/witness";
    let witness = find(witnesses, &outside.witness, pointer)?;
    let not_accepted = |digest: &str, error| Discrepancy::Witness { pointer: pointer.to_owned(), digest: digest.to_owned(), error };
    let claim = |detail| Discrepancy::Claim { pointer: pointer.to_owned(), digest: outside.witness.clone(), detail };
    if witness.witness().geometry != scenario.geometry() {
        return Err(claim("it is for another geometry"));
    }
    let bound = witness
        .bound(evidence.place(), scenario.leakage(), scenario.leakage_holds())
        .map_err(|error| not_accepted(&outside.witness, error))?;
    if !proves_contradiction(&witness, &bound, evidence.place()) {
        return Err(claim("there is no contradiction"));
    }
    let Some(digest) = &outside.smallest_uniform_leakage_witness else {
        return Ok(draft.outside(&witness, None).certificate);
    };
    let of_leakage = find(witnesses, digest, "/outside_model/smallest_uniform_leakage_witness")?;
    if of_leakage.witness().geometry != scenario.geometry() {
        return Err(claim("the witness of the smallest leakage is for another geometry"));
    }
    let least = of_leakage.least_uniform_leakage(evidence.place()).map_err(|error| not_accepted(digest, error))?;
    let least = least.ok_or_else(|| claim("no leakage explains the numbers"))?;
    Ok(draft.outside(&witness, Some((&least, &of_leakage))).certificate)
}

fn find(witnesses: &BTreeMap<String, &Witness>, digest: &str, pointer: &str) -> Result<CheckedWitness, Discrepancy> {
    let (pointer, digest) = (pointer.to_owned(), digest.to_owned());
    let Some(witness) = witnesses.get(&digest) else {
        return Err(Discrepancy::MissingWitness { pointer, digest });
    };
    check(witness).map_err(|error| Discrepancy::Witness { pointer, digest, error })
}

fn compare(recorded: &Value, recomputed: &Value, pointer: String, differences: &mut Vec<Discrepancy>) {
    match (recorded, recomputed) {
        (Value::Object(left), Value::Object(right)) => {
            for key in left.keys().chain(right.keys().filter(|key| !left.contains_key(*key))) {
                let (l, r) = (left.get(key).unwrap_or(&Value::Null), right.get(key).unwrap_or(&Value::Null));
                compare(l, r, format!("{pointer}/{key}"), differences);
            }
        }
        (Value::Array(left), Value::Array(right)) if left.len() == right.len() => {
            for (i, (l, r)) in left.iter().zip(right).enumerate() {
                compare(l, r, format!("{pointer}/{i}"), differences);
            }
        }
        _ if recorded == recomputed => {}
        _ => differences.push(Discrepancy::Value { pointer, recorded: recorded.clone().into(), recomputed: recomputed.clone().into() }),
    }
}
