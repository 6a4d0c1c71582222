//! `/v1/rigs/{rig}/batches`: where rigs post what they counted.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{HeaderName, Response, StatusCode, header},
    response::IntoResponse,
};
use serde::Serialize;
use utoipa::{IntoParams, ToSchema};

use super::{
    intake::LONGEST,
    negotiation::TakesJson,
    problem::{Culprit, PROBLEM_JSON, Problem, ProblemDocument},
    wire::{FromParameters, Key, Media, Parameters, Payload, Query, RigPath, json},
};
use crate::{
    batch::{BatchDocument, BatchFault, CsvOptions, Posted},
    clock::Stamp,
    ledger::writer::Settled,
    record::Record,
    refusal::Refusal,
    request::LostRounds,
    scenario::LeakageDocument,
    service::{Service, SubmitError},
};

const BATCH_LIMIT: usize = LONGEST;

/// What a batch in CSV form says in the query. A batch in JSON form says it in the body, and takes no parameters.
#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct BatchQuery {
    /// CSV only, and needed there: when the first round was played, RFC 3339.
    #[param(value_type = Option<String>, format = DateTime)]
    started_at: Option<Stamp>,
    /// CSV only, and needed there: when the last round was played, RFC 3339.
    #[param(value_type = Option<String>, format = DateTime)]
    ended_at: Option<Stamp>,
    /// CSV only: leakage measured for this batch, written as in JSON.
    #[param(value_type = Option<String>)]
    leakage: Option<LeakageDocument>,
    /// CSV only: lost rounds, written as in JSON.
    #[param(value_type = Option<String>)]
    lost_rounds: Option<LostRounds>,
}

impl FromParameters for BatchQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        Ok(Self {
            started_at: parameters.value("started_at")?,
            ended_at: parameters.value("ended_at")?,
            leakage: parameters.json("leakage")?,
            lost_rounds: parameters.json("lost_rounds")?,
        })
    }
}

impl BatchQuery {
    fn options(self) -> Result<CsvOptions, Problem> {
        let needed =
            |time: Option<Stamp>, name| time.ok_or_else(|| Problem::parameter(name, format!("A batch in CSV needs the parameter {name}.")));
        let started_at = needed(self.started_at, "started_at")?;
        let ended_at = needed(self.ended_at, "ended_at")?;
        Ok(CsvOptions { started_at, ended_at, leakage: self.leakage, lost_rounds: self.lost_rounds })
    }

    fn refuse_all(self) -> Result<(), Problem> {
        let given = [
            ("started_at", self.started_at.is_some()),
            ("ended_at", self.ended_at.is_some()),
            ("leakage", self.leakage.is_some()),
            ("lost_rounds", self.lost_rounds.is_some()),
        ];
        match given.iter().find(|(_, given)| *given) {
            Some((name, _)) => Err(Problem::parameter(name, format!("A batch in JSON says {name} in its body."))),
            None => Ok(()),
        }
    }
}

/// What a 422 says; the `type` tells which.
#[derive(Serialize, ToSchema)]
#[serde(untagged)]
#[expect(dead_code, reason = "describes answers that are written elsewhere")]
enum NotCertified {
    /// Recorded, but no bits may be extracted.
    Refusal(Refusal),
    /// Nothing was recorded.
    Problem(ProblemDocument),
}

/// Certifies one batch, and records what came out before it answers.
///
/// A batch that is sent again under its key is answered with the same bytes as before.
#[utoipa::path(
    post, path = "/v1/rigs/{rig}/batches", tag = "batches", operation_id = "post_batch",
    security(("token" = ["rig"])),
    params(
        ("rig" = String, Path, description = "Name of the rig."),
        ("Idempotency-Key" = String, Header, description = "Name of this batch, 1 to 255 visible ASCII characters; the same each time it is sent."),
        BatchQuery,
    ),
    request_body(
        description = "Counts in JSON, or as CSV with the columns preparation, measurement, outcome and count; combinations that no row names count zero.",
        content((BatchDocument = "application/json"), (String = "text/csv")),
    ),
    responses(
        (status = 201, description = "Certified, or an estimate: the record.", body = Record, headers(("Location" = String), ("Idempotency-Replayed" = Option<String>))),
        (status = 400, description = "The body does not have the shape of a batch. Nothing was recorded.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 404, description = "No such rig.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 413, description = "The body is too large.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 415, description = "The body is neither JSON nor CSV.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "Refused: recorded, but no bits may be extracted. Or, with another `type`, a batch that this rig cannot have produced, or a key that stands for another batch: then nothing was recorded.", body = NotCertified, content_type = "application/problem+json"),
        (status = 503, description = "The queue is full; `Retry-After` says when to send the batch again.", body = ProblemDocument, content_type = "application/problem+json", headers(("Retry-After" = u64))),
    )
)]
pub async fn post(
    RigPath(rig): RigPath,
    Query(query): Query<BatchQuery>,
    TakesJson: TakesJson,
    Key(key): Key,
    State(service): State<Arc<Service>>,
    payload: Payload<BATCH_LIMIT>,
) -> Result<Response<Body>, Problem> {
    let media = payload.media;
    let posted = posted(payload, query)?;
    let settled = service.submit(rig, key, posted).await.map_err(|error| explained(error, media))?;
    Ok(answer(settled))
}

fn posted<const LIMIT: usize>(payload: Payload<LIMIT>, query: BatchQuery) -> Result<Posted, Problem> {
    let bytes = payload.bytes.to_vec();
    match payload.media {
        Media::Json => query.refuse_all().map(|()| Posted::Json(bytes)),
        Media::Csv => query.options().map(|options| Posted::Csv { text: bytes, options }),
    }
}

/// In CSV form, what is wrong with an option is a parameter's fault.
fn explained(error: SubmitError, media: Media) -> Problem {
    match error {
        SubmitError::Batch(BatchFault::Impossible(fault)) if media == Media::Csv => {
            let option = ["started_at", "ended_at", "leakage", "lost_rounds"].iter().find(|name| {
                let rest = fault.pointer.strip_prefix('/').and_then(|pointer| pointer.strip_prefix(**name));
                rest.is_some_and(|rest| rest.is_empty() || rest.starts_with('/'))
            });
            match option {
                Some(name) => {
                    Problem::new(StatusCode::UNPROCESSABLE_ENTITY, fault.to_string()).blaming(Culprit::Parameter((*name).to_owned()))
                }
                None => SubmitError::Batch(BatchFault::Impossible(fault)).into(),
            }
        }
        error => error.into(),
    }
}

/// The stored text, with the status that goes with it.
fn answer(settled: Settled) -> Response<Body> {
    let Settled { answered, replayed } = settled;
    let replayed = replayed.then_some([(HeaderName::from_static("idempotency-replayed"), "true")]);
    let location = [(header::LOCATION, format!("/v1/certifications/{}", answered.id))];
    let answer = match answered.refusal {
        None => json(StatusCode::CREATED, answered.record),
        Some(refusal) => (StatusCode::UNPROCESSABLE_ENTITY, [(header::CONTENT_TYPE, PROBLEM_JSON)], refusal).into_response(),
    };
    (replayed, location, answer).into_response()
}
