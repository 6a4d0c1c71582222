//! A batch as a rig posts it, and the request that it makes together with the rig's profile.

pub mod rows;

use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

use crate::{
    certificate::Certificate,
    certify::certify_block,
    clock::Stamp,
    committed::Committed,
    counts::Table,
    fault::{Fault, parse_object},
    profile::Profile,
    request::{LostRounds, Request, RequestDocument, Starts},
    scenario::{Geometry, LeakageDocument, Scenario, ScenarioDocument},
};

/// What is wrong with a posted batch.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum BatchFault {
    /// It does not have the shape of a batch.
    #[error("malformed: {0}")]
    Malformed(Fault),
    /// It has the shape of a batch, but no rig with this profile can have produced it.
    #[error("impossible: {0}")]
    Impossible(Fault),
}

/// A batch as it is posted in JSON.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, utoipa::ToSchema)]
#[serde(deny_unknown_fields)]
#[schema(as = Batch, description = "What a rig counted.")]
pub struct BatchDocument {
    /// How often each outcome was seen, `[x][y][b]`.
    #[schema(value_type = Vec<Vec<Vec<u64>>>)]
    pub counts: Table<u64>,
    /// When the first round was played, RFC 3339.
    #[schema(value_type = String, format = DateTime)]
    pub started_at: Stamp,
    /// When the last round was played, RFC 3339; not before `started_at`.
    #[schema(value_type = String, format = DateTime)]
    pub ended_at: Stamp,
    /// Leakage measured for this batch; without it, the profile's leakage holds.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub leakage: Option<LeakageDocument>,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub lost_rounds: Option<LostRounds>,
}

/// What a batch in CSV form leaves to the query.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct CsvOptions {
    pub started_at: Stamp,
    pub ended_at: Stamp,
    pub leakage: Option<LeakageDocument>,
    pub lost_rounds: Option<LostRounds>,
}

/// A batch as it came in, not read yet.
#[derive(Debug, Clone, PartialEq)]
pub enum Posted {
    Json(Vec<u8>),
    Csv { text: Vec<u8>, options: CsvOptions },
}

/// Where the leakage came from that a batch is certified with.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, utoipa::ToSchema)]
#[serde(rename_all = "kebab-case")]
pub enum LeakageSource {
    Profile,
    Batch,
}

/// What is left to do for a batch that was read.
#[derive(Debug, Clone, PartialEq)]
pub enum Task {
    /// To be solved.
    Solve(Box<Request>),
    /// Rounds with memory: bits follow from the counts and the committed factors, so there is nothing left to do.
    Done(Box<Certificate>),
}

/// A batch that was read, under the profile that it was read with.
#[derive(Debug, Clone, PartialEq)]
pub struct Batch {
    pub started_at: Stamp,
    pub ended_at: Stamp,
    pub leakage_source: LeakageSource,
    pub task: Task,
}

impl Posted {
    /// `sha256:` and the digest, in lower-case hexadecimal, of everything that was posted: what an idempotency key stands for.
    pub fn digest(&self) -> String {
        let mut hasher = Sha256::new();
        match self {
            Self::Json(text) => {
                hasher.update(b"bitassay batch json 1\n");
                hasher.update(text);
            }
            Self::Csv { text, options } => {
                hasher.update(b"bitassay batch csv 1\n");
                // One line, so that options and text cannot run into each other. Plain data: serialisation cannot fail.
                hasher.update(serde_json::to_string(options).unwrap_or_default());
                hasher.update(b"\n");
                hasher.update(text);
            }
        }
        format!("sha256:{}", hex::encode(hasher.finalize()))
    }

    /// Reads what was posted. Rows of a CSV form are put into a table of the rig's geometry.
    ///
    /// # Errors
    /// A body of the wrong shape. Pointers are into the posted document; in CSV form `/lines/7/count` is a field of the seventh line, and
    /// an option is a pointer of its name, such as `/leakage`.
    pub fn read(self, geometry: Geometry) -> Result<Legible, BatchFault> {
        match self {
            Self::Json(text) => Ok(Legible { document: parse_object(&text).map_err(BatchFault::Malformed)?, rows: None }),
            Self::Csv { text, options } => {
                let rows = rows::Rows::read(&text).map_err(BatchFault::Malformed)?;
                let CsvOptions { started_at, ended_at, leakage, lost_rounds } = options;
                let counts = rows.table(geometry).map_err(BatchFault::Impossible)?;
                Ok(Legible { document: BatchDocument { counts, started_at, ended_at, leakage, lost_rounds }, rows: Some(rows) })
            }
        }
    }
}

/// A batch that has the shape of one, not held against the rig's profile yet.
#[derive(Debug)]
pub struct Legible {
    document: BatchDocument,
    /// The rows that it came in.
    rows: Option<rows::Rows>,
}

impl Legible {
    pub fn started_at(&self) -> Stamp {
        self.document.started_at
    }

    /// The batch's own leakage, so that a stored budget can be put in the place of its digest.
    pub fn leakage(&mut self) -> Option<&mut LeakageDocument> {
        self.document.leakage.as_mut()
    }

    /// The batch under a profile, which supplies what the batch leaves out, and for rounds with memory under a commitment.
    ///
    /// # Errors
    /// A batch that contradicts the profile or itself; pointers as for [`Posted::read`].
    pub fn under(self, profile: &Profile, committed: Option<&Committed>) -> Result<Batch, BatchFault> {
        let Self { document, rows } = self;
        let blamed = |fault| match &rows {
            Some(rows) => rows.blame(fault),
            None => fault,
        };
        document.under(profile, committed).map_err(|fault| BatchFault::Impossible(blamed(fault)))
    }
}

impl BatchDocument {
    /// The batch under a profile, which supplies what the batch leaves out.
    fn under(self, profile: &Profile, committed: Option<&Committed>) -> Result<Batch, Fault> {
        let Self { counts, started_at, ended_at, leakage, lost_rounds } = self;
        if ended_at < started_at {
            return Err(Fault::new("/ended_at", format!("a batch does not end ({ended_at}) before it starts ({started_at})")));
        }
        if let Some(committed) = committed {
            if leakage.is_some() {
                return Err(Fault::new("/leakage", "the commitment fixes the leakage: a batch of rounds with memory has none of its own"));
            }
            let in_time = started_at >= committed.recorded_at;
            let certificate = certify_block(&committed.commitment, committed.level, counts, lost_rounds, in_time)?;
            return Ok(Batch { started_at, ended_at, leakage_source: LeakageSource::Profile, task: Task::Done(Box::new(certificate)) });
        }
        let leakage_source = if leakage.is_some() { LeakageSource::Batch } else { LeakageSource::Profile };
        let (mut scenario, mut starts) = (profile.scenario().clone(), profile.starts());
        if let Some(leakage) = leakage {
            scenario = scenario.with_leakage(leakage)?;
            let leaks = |scenario: &Scenario| scenario.leakage().iter().map(|epsilon| *epsilon > 0.0).collect::<Vec<_>>();
            if leaks(&scenario) != leaks(profile.scenario()) {
                // A leakage that is not exactly zero makes a solve larger, possibly too large.
                starts = Starts::of(profile.level(), &scenario).map_err(|fault| Fault::new("/leakage", fault.detail))?;
            }
        }
        // Scenario, rounds and failure come from a valid profile: what can still be wrong is in the batch, under its own name.
        let document = RequestDocument {
            scenario: ScenarioDocument::from(scenario),
            counts: Some(counts),
            behaviour: None,
            scores: None,
            rounds: profile.rounds(),
            failure: profile.failure(),
            level: profile.level(),
            entropy: profile.entropy(),
            lost_rounds,
            bracket: false,
        };
        let request = Request::read(document, Some(starts))?;
        Ok(Batch { started_at, ended_at, leakage_source, task: Task::Solve(Box::new(request)) })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn profile() -> Profile {
        let text = r#"{"scenario": {"preparations": 2, "measurements": 1, "outcomes": 2, "carrier_dimension": 2, "leakage": 0,
            "targets": [[0, 0]]}, "rounds": "independent"}"#;
        serde_json::from_str(text).unwrap()
    }

    fn options(leakage: Option<LeakageDocument>) -> CsvOptions {
        let time = |text: &str| text.parse().unwrap();
        CsvOptions { started_at: time("2026-03-01T12:00:00Z"), ended_at: time("2026-03-01T12:05:00Z"), leakage, lost_rounds: None }
    }

    fn csv(text: &str) -> Posted {
        Posted::Csv { text: text.into(), options: options(None) }
    }

    fn read(posted: Posted) -> Result<Batch, BatchFault> {
        let profile = profile();
        posted.read(profile.scenario().geometry())?.under(&profile, None)
    }

    #[test]
    fn both_forms_say_the_same() {
        let json = r#"{"counts": [[[7, 3]], [[0, 10]]], "started_at": "2026-03-01T12:00:00Z", "ended_at": "2026-03-01T12:05:00Z"}"#;
        let rows = "preparation,measurement,outcome,count\n1,0,1,10\n0,0,0,7\n0,0,1,3\n";
        assert_eq!(read(Posted::Json(json.into())).unwrap(), read(csv(rows)).unwrap());
    }

    #[test]
    fn a_digest_covers_form_options_and_text() {
        let text = || b"preparation,measurement,outcome,count\n".to_vec();
        let digests = [
            Posted::Json(text()).digest(),
            csv("preparation,measurement,outcome,count\n").digest(),
            csv("preparation,measurement,outcome,count\n0,0,0,1\n").digest(),
            Posted::Csv { text: text(), options: options(Some(LeakageDocument::Uniform(0.1))) }.digest(),
        ];
        for (i, digest) in digests.iter().enumerate() {
            assert!(!digests[..i].contains(digest));
        }
    }

    #[test]
    fn the_batch_is_blamed_where_it_is_wrong() {
        let cases = [
            ("preparation,measurement,outcome\n0,0,0\n", "/lines/1"),
            ("preparation,measurement,outcome,count\n0,0,0,-1\n", "/lines/2/count"),
            ("preparation,measurement,outcome,count\n0,0,0,1\n0,0,1,1.5\n", "/lines/3/count"),
            ("preparation,measurement,outcome,count\n0,0,0,1\n\n2,0,1,1\n", "/lines/4/preparation"),
            ("preparation,measurement,outcome,count\r\n0,0,0,1\r\n\r\n2,0,1,1\r\n", "/lines/4/preparation"),
            ("preparation,measurement,outcome,count\n0,0,0,1\n0,0,0,2\n", "/lines/3"),
            ("preparation,measurement,outcome,count\n0,0,0\n", "/lines/2"),
            ("preparation,measurement,outcome,count\n0,0,0,1\n1,0,0,9007199254740993\n", "/lines/3/count"),
            ("preparation,measurement,outcome,count\n0,0,0,1\n", ""),
        ];
        for (text, pointer) in cases {
            let (BatchFault::Malformed(fault) | BatchFault::Impossible(fault)) = read(csv(text)).unwrap_err();
            assert_eq!(fault.pointer, pointer, "{text}: {fault}");
        }
    }
}
