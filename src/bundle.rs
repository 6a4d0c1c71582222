//! A record together with the witnesses it names: all that is needed to check it elsewhere.

use std::collections::BTreeMap;

use serde::{Deserialize, Serialize};
use serde_json::{Map, Value};

use crate::{
    certificate::{Certificate, Verdict},
    commitment::Commitment,
    fault::{Fault, parse},
    statistics::quality::Objection,
    verify::{Discrepancy, verify},
    witness::witness::Witness,
};

/// What a service adds to a certificate when it records it. Nothing of this can be recomputed.
const ENVELOPE: [&str; 11] = [
    "id",
    "rig",
    "profile_version",
    "recorded_at",
    "started_at",
    "ended_at",
    "leakage_source",
    "commitment",
    "concerns",
    "refuse_on",
    "timings",
];

/// What a record's envelope says about its data.
#[derive(Debug, Default, Deserialize)]
#[serde(default)]
struct Quality {
    concerns: Vec<Named>,
    refuse_on: Vec<Objection>,
}

/// A concern by its name.
#[derive(Debug, Deserialize)]
struct Named {
    concern: Objection,
}

/// Witness documents by the digests of their canonical bytes.
pub type Witnesses = BTreeMap<String, Witness>;

/// The document that `certify --bundle` prints and `verify` reads.
#[derive(Debug, Clone, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Bundle {
    pub record: Map<String, Value>,
    /// The commitment of a block of rounds with memory.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub commitment: Option<Commitment>,
    pub witnesses: Witnesses,
    /// Where the record stands in a ledger.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub ledger: Option<Standing>,
}

/// Where an entry stands: its leaf, and the proof that it is in the tree of a checkpoint.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[cfg_attr(feature = "service", derive(utoipa::ToSchema))]
#[serde(deny_unknown_fields)]
pub struct Standing {
    /// The entry as a line of JSON, the bytes that are hashed; `index` is its place in the tree.
    pub entry: String,
    /// Hashes beside the way from the leaf to the root, in hexadecimal.
    pub proof: Vec<String>,
    /// A signed note.
    pub checkpoint: String,
}

/// The witnesses of a certification as the service hands them out.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
struct HandedOut {
    #[serde(rename = "certification")]
    _certification: String,
    #[serde(default)]
    commitment: Option<Commitment>,
    witnesses: Witnesses,
}

impl Bundle {
    /// Reads a bundle.
    ///
    /// # Errors
    /// The first deviation from the shape.
    pub fn read(text: &[u8]) -> Result<Self, Fault> {
        parse(text)
    }

    /// Puts a bundle together from a record and the witnesses that the service hands out for it.
    ///
    /// # Errors
    /// The first deviation from the shape of either.
    pub fn join(record: &[u8], witnesses: &[u8]) -> Result<Self, Fault> {
        let handed_out: HandedOut = parse(witnesses)?;
        Ok(Self { record: parse(record)?, commitment: handed_out.commitment, witnesses: handed_out.witnesses, ledger: None })
    }

    /// The certificate within the record.
    ///
    /// # Errors
    /// The first deviation from the shape, with a pointer into the record.
    pub fn certificate(&self) -> Result<Certificate, Fault> {
        let body: Map<String, Value> =
            self.record.iter().filter(|(key, _)| !ENVELOPE.contains(&key.as_str())).map(|(k, v)| (k.clone(), v.clone())).collect();
        parse(Value::Object(body).to_string().as_bytes())
    }

    /// Re-checks the record against the witnesses, without a solver.
    ///
    /// # Errors
    /// Every discrepancy; see [`verify`]. A witness that is filed under a digest not its own is one as well.
    pub fn verify(&self) -> Result<(), Vec<Discrepancy>> {
        let certificate = self.certificate().map_err(|fault| vec![Discrepancy::Request(fault)])?;
        for (digest, witness) in &self.witnesses {
            let actual = witness.digest();
            if actual != *digest {
                let pointer = format!("/witnesses/{digest}");
                return Err(vec![Discrepancy::Value {
                    pointer,
                    recorded: Value::from(digest.clone()).into(),
                    recomputed: Value::from(actual).into(),
                }]);
            }
        }
        self.check_objections(&certificate).map_err(|discrepancy| vec![discrepancy])?;
        let witnesses: Vec<Witness> = self.witnesses.values().cloned().collect();
        verify(&certificate, self.commitment.as_ref(), &witnesses)
    }

    /// A record in which something stands that the profile objects to is no certified one. What the record does not show, it cannot be asked
    /// about: comparisons with the declared distribution and with earlier batches rest on what the service wrote down.
    fn check_objections(&self, certificate: &Certificate) -> Result<(), Discrepancy> {
        let Quality { concerns, refuse_on } = parse(Value::Object(self.record.clone()).to_string().as_bytes())?;
        let shown = certificate.objections();
        let found = |objection: &&Objection| shown.contains(objection) || concerns.iter().any(|named| named.concern == **objection);
        match refuse_on.iter().find(found) {
            Some(_) if certificate.verdict != Verdict::Refused => Err(Discrepancy::Value {
                pointer: "/verdict".to_owned(),
                recorded: serde_json::to_value(certificate.verdict).unwrap_or_default().into(),
                recomputed: serde_json::to_value(Verdict::Refused).unwrap_or_default().into(),
            }),
            _ => Ok(()),
        }
    }
}
