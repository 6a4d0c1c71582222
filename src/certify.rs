//! The pure pipeline: a request in, a certificate and its witnesses out.

use crate::{
    certificate::{Certificate, Reason, Verdict},
    request::{Data, Request},
    witness::witness::Witness,
};

/// A certificate with the witnesses that it names by digest.
#[derive(Debug, Clone)]
pub struct Certification {
    pub certificate: Certificate,
    pub witnesses: Vec<Witness>,
}

/// Certifies one request. Never fails: what cannot be certified is refused, with the reason in the certificate.
pub fn certify(request: &Request) -> Certification {
    let counts = match request.data() {
        Data::Counts(counts) => Some(counts),
        Data::Behaviour(_) => None,
    };
    Certification {
        certificate: Certificate {
            verdict: Verdict::Refused,
            reason: Some(Reason::Unverified),
            scenario: request.scenario.clone(),
            counts: counts.map(|c| c.table().clone()),
            counts_digest: counts.map(|c| c.digest()),
            behaviour: None,
            lost_rounds: request.lost_rounds.clone(),
            rounds: request.rounds,
            total_rounds: counts.map(|c| c.total()),
            failure: None,
            level: request.level,
            region: None,
            targets: vec![],
            certified_bits: 0,
            bits_per_round: 0.0,
            outside_model: None,
            assumptions: vec![],
            warnings: vec![],
            version: concat!("bitassay ", env!("CARGO_PKG_VERSION")).into(),
        },
        witnesses: vec![],
    }
}
