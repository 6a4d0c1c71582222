//! `/v1/rigs/{rig}/commitments` and `/v1/commitments/{id}`: what is fixed ahead of the data of rounds with memory.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{Response, StatusCode, header},
    response::IntoResponse,
};
use serde::Serialize;
use utoipa::{IntoParams, ToSchema};
use uuid::Uuid;

use super::{
    cursor,
    negotiation::TakesJson,
    problem::{Problem, ProblemDocument},
    wire::{CommitmentPath, FromParameters, Parameters, Payload, Query, RigPath, by_digest, json, link_next, no_commitment, no_rig, page},
};
use crate::{
    clock::Stamp,
    commitment::Commitment,
    committed::{CommitmentOrder, Committed},
    relaxation::level::LevelChoice,
    service::{Evidence, Listed, Service},
    witness::witness::Witness,
};

const ORDER_LIMIT: usize = 256 * 1024;
const CURSOR: &str = "commitments:";

/// Everything about a commitment but its document.
#[derive(Serialize, ToSchema)]
#[schema(as = CommitmentHead)]
struct Head<'a> {
    id: Uuid,
    rig: &'a str,
    /// Version of the rig's profile that it was made under; it stands for batches under that version only.
    profile_version: u64,
    /// A batch is certified under the newest commitment that had been recorded when it began, and refused if there was none.
    #[schema(value_type = String, format = DateTime)]
    recorded_at: Stamp,
    /// The level that was asked for.
    level: LevelChoice,
    /// `sha256:` digest of the commitment's canonical text, which is the one that is answered.
    digest: &'a str,
    /// In lists only: whether batches that begin now are certified under it.
    #[serde(skip_serializing_if = "Option::is_none")]
    current: Option<bool>,
}

/// A commitment that was recorded.
#[derive(Serialize, ToSchema)]
#[schema(as = RecordedCommitment)]
struct Answer<'a> {
    #[serde(flatten)]
    head: Head<'a>,
    commitment: Commitment,
}

/// A rig's commitments, newest first.
#[derive(Serialize, ToSchema)]
struct CommitmentPage<'a> {
    items: Vec<Answer<'a>>,
    /// Where the next page begins; `null` at the end.
    next: Option<String>,
}

/// The document goes in as the text that it was kept as, so that its digest still holds.
fn text(committed: &Committed, current: Option<bool>) -> Result<String, Problem> {
    let Committed { id, rig, profile_version, recorded_at, level, digest, document, .. } = committed;
    let head =
        Head { id: *id, rig: rig.as_str(), profile_version: *profile_version, recorded_at: *recorded_at, level: *level, digest, current };
    let head = serde_json::to_string(&head).map_err(|error| Problem::internal(&error))?;
    let open = head.strip_suffix('}').unwrap_or(&head);
    Ok(format!("{open},\"commitment\":{document}}}"))
}

/// Fixes ahead of the data what batches of rounds with memory are certified by.
///
/// Witnesses, a power and factors are worked out once, for the behaviour that is expected; batches that begin afterwards are
/// certified by them without a solve. A batch is certified under the newest commitment that had been recorded when it began; older ones stay as
/// they are.
#[utoipa::path(
    post, path = "/v1/rigs/{rig}/commitments", tag = "commitments", operation_id = "post_commitment",
    security(("token" = ["operator"])),
    params(("rig" = String, Path, description = "Name of the rig.")),
    request_body(content = CommitmentOrder, content_type = "application/json"),
    responses(
        (status = 201, description = "Committed and recorded.", body = Answer, headers(("Location" = String))),
        (status = 400, description = "The body does not have the shape of a commitment.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 404, description = "No such rig.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "The body contradicts the profile or itself, the profile's rounds have no memory, or nothing would be certified. Nothing was recorded.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 503, description = "The queue is full; `Retry-After` says when to try again.", body = ProblemDocument, content_type = "application/problem+json", headers(("Retry-After" = u64))),
    )
)]
pub async fn post(
    RigPath(rig): RigPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
    payload: Payload<ORDER_LIMIT>,
) -> Result<Response<Body>, Problem> {
    let order: CommitmentOrder = payload.object("A commitment")?;
    let committed = service.commit(rig, order).await?;
    let location = [(header::LOCATION, committed.path())];
    Ok((location, json(StatusCode::CREATED, text(&committed, None)?)).into_response())
}

/// One commitment, as it was first answered.
#[utoipa::path(
    get, path = "/v1/commitments/{id}", tag = "commitments", operation_id = "get_commitment",
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    params(("id" = String, Path, description = "Identifier of the commitment.")),
    responses(
        (status = 200, description = "The commitment.", body = Answer),
        (status = 404, description = "No such commitment.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn get(
    CommitmentPath(id): CommitmentPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let committed = service.commitment(id).await?.ok_or_else(no_commitment)?;
    Ok(json(StatusCode::OK, text(&committed, None)?))
}

/// What a commitment rests on.
#[derive(Serialize, ToSchema)]
pub struct CommitmentWitnesses {
    /// Identifier of the commitment.
    id: Uuid,
    commitment: Commitment,
    /// Each witness under its `sha256:` digest; exact integers, enough to derive the factors offline.
    #[schema(value_type = std::collections::BTreeMap<String, Object>)]
    witnesses: std::collections::BTreeMap<String, Witness>,
}

/// A commitment and its witnesses, enough to check it offline, before there is any data.
#[utoipa::path(
    get, path = "/v1/commitments/{id}/witness", tag = "commitments", operation_id = "get_commitment_witness",
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    params(("id" = String, Path, description = "Identifier of the commitment.")),
    responses(
        (status = 200, description = "The commitment, and its witnesses by digest.", body = CommitmentWitnesses),
        (status = 404, description = "No such commitment.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn witness(
    CommitmentPath(id): CommitmentPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let Evidence { commitment, witnesses } = service.evidence_of_commitment(id).await?.ok_or_else(no_commitment)?;
    let commitment = commitment.unwrap_or_else(|| "null".into());
    Ok(json(StatusCode::OK, format!("{{\"id\":\"{id}\",\"commitment\":{commitment},\"witnesses\":{}}}", by_digest(witnesses))))
}

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct CommitmentsQuery {
    /// Where the page begins: the `next` of the page before.
    #[param(value_type = Option<String>)]
    cursor: Option<u64>,
    /// Items on the page.
    #[param(minimum = 1, maximum = 200, default = 50, value_type = Option<u32>)]
    limit: u32,
}

impl FromParameters for CommitmentsQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        Ok(Self { cursor: parameters.cursor(CURSOR)?, limit: parameters.limit()? })
    }
}

/// A rig's commitments, newest first; `current` marks the one for batches that begin now.
#[utoipa::path(
    get, path = "/v1/rigs/{rig}/commitments", tag = "commitments", operation_id = "list_commitments",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    params(("rig" = String, Path, description = "Name of the rig."), CommitmentsQuery),
    responses(
        (status = 200, description = "One page.", body = CommitmentPage, headers(("Link" = String))),
        (status = 404, description = "No such rig.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn list(
    RigPath(rig): RigPath,
    Query(query): Query<CommitmentsQuery>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let CommitmentsQuery { cursor: before, limit } = query;
    let Listed { page: found, current } = service.commitments(&rig, before, limit).await?.ok_or_else(no_rig)?;
    let next = found.items.last().filter(|_| found.more).map(|last| cursor::write(CURSOR, last.number));
    let link = next.as_deref().map(|next| link_next(&format!("/v1/rigs/{rig}/commitments?limit={limit}&cursor={next}")));
    let items = found.items.iter().map(|item| text(&item.committed, Some(current == Some(item.committed.id))));
    let items: Vec<String> = items.collect::<Result<_, _>>()?;
    Ok((link, json(StatusCode::OK, page(items.into_iter(), next.as_deref()))).into_response())
}
