//! `/v1/rigs` and `/v1/rigs/{rig}`: what operators declare.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{Response, StatusCode, header},
    response::IntoResponse,
};
use serde::Serialize;
use utoipa::{IntoParams, ToSchema};

use super::{
    condition::{Expects, Holds, entity_tag},
    cursor,
    negotiation::TakesJson,
    problem::{Problem, ProblemDocument},
    wire::{FromParameters, Parameters, Payload, Query, RigPath, json, link_next, no_rig, page},
};
use crate::{
    clock::Stamp,
    ledger::{rows::ProfileVersion, writer::Kept},
    profile::{Profile, ProfileDocument, RigName},
    service::Service,
};

const PROFILE_LIMIT: usize = 256 * 1024;
const CURSOR: &str = "rigs:";

/// Declares a rig, or changes what was declared.
///
/// A leakage budget that is named by its digest is answered, and recorded, with the budget itself in its place.
#[utoipa::path(
    put, path = "/v1/rigs/{rig}", tag = "rigs", operation_id = "put_rig",
    security(("token" = ["operator"])),
    params(
        ("rig" = String, Path, description = "Name of the rig: `[a-z0-9][a-z0-9-]{0,62}`."),
        ("If-Match" = Option<String>, Header, pattern = r#"^(\*|"[0-9]{1,18}"(, ?"[0-9]{1,18}")*)$"#, description = "Entity tag of the version that a change starts from; needed for a change."),
        ("If-None-Match" = Option<String>, Header, pattern = r"^\*$", description = "`*`: create only."),
    ),
    request_body(content = ProfileDocument, content_type = "application/json"),
    responses(
        (status = 200, description = "The profile is now, or was already, the newest version.", body = ProfileDocument, headers(("ETag" = String))),
        (status = 201, description = "The rig is new.", body = ProfileDocument, headers(("ETag" = String), ("Location" = String))),
        (status = 400, description = "The body does not have the shape of a profile.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 412, description = "The profile is not at the version that the change starts from.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "The profile contradicts itself or exceeds a limit.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 428, description = "A change needs `If-Match`.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn put(
    RigPath(rig): RigPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    Expects(expectation): Expects,
    State(service): State<Arc<Service>>,
    payload: Payload<PROFILE_LIMIT>,
) -> Result<Response<Body>, Problem> {
    let document: ProfileDocument = payload.object("A profile")?;
    let profile = service.read_profile(document).await?;
    let location = format!("/v1/rigs/{rig}");
    let text = serde_json::to_string(&profile).map_err(|error| Problem::internal(&error))?;
    let (kept, version) = service.keep_profile(rig, profile, expectation).await?;
    let tag = [(header::ETAG, entity_tag(version))];
    Ok(match kept {
        Kept::Created => (tag, [(header::LOCATION, location)], json(StatusCode::CREATED, text)).into_response(),
        Kept::Updated | Kept::Unchanged => (tag, json(StatusCode::OK, text)).into_response(),
    })
}

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct VersionQuery {
    /// An earlier version; without it, the newest.
    version: Option<u64>,
}

impl FromParameters for VersionQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        Ok(Self { version: parameters.value("version")? })
    }
}

/// What is declared about a rig.
#[utoipa::path(
    get, path = "/v1/rigs/{rig}", tag = "rigs", operation_id = "get_rig",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    params(("rig" = String, Path, description = "Name of the rig."), VersionQuery),
    responses(
        (status = 200, description = "The profile.", body = ProfileDocument, headers(("ETag" = String))),
        (status = 304, description = "The version named by `If-None-Match` is the newest."),
        (status = 404, description = "No such rig, or no such version.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn get(
    RigPath(rig): RigPath,
    Query(query): Query<VersionQuery>,
    TakesJson: TakesJson,
    holds: Holds,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let found = service.profile(&rig, query.version).await?.ok_or_else(no_rig)?;
    let tag = [(header::ETAG, entity_tag(found.version))];
    if holds.version(found.version) {
        return Ok((StatusCode::NOT_MODIFIED, tag).into_response());
    }
    let text = serde_json::to_string(&found.profile).map_err(|error| Problem::internal(&error))?;
    Ok((tag, json(StatusCode::OK, text)).into_response())
}

/// One rig in the list.
#[derive(Serialize, ToSchema)]
pub struct RigItem {
    #[schema(value_type = String)]
    rig: RigName,
    /// Newest version of the profile.
    version: u64,
    /// When that version was put.
    #[schema(value_type = String, format = DateTime)]
    updated_at: Stamp,
    #[schema(value_type = ProfileDocument)]
    profile: Profile,
}

impl From<ProfileVersion> for RigItem {
    fn from(found: ProfileVersion) -> Self {
        Self { rig: found.rig, version: found.version, updated_at: found.recorded_at, profile: found.profile }
    }
}

/// Rigs in order of their names.
#[derive(Serialize, ToSchema)]
pub struct RigPage {
    items: Vec<RigItem>,
    /// Where the next page begins; `null` at the end.
    next: Option<String>,
}

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct RigsQuery {
    /// Where the page begins: the `next` of the page before.
    #[param(value_type = Option<String>)]
    cursor: Option<RigName>,
    /// Items on the page.
    #[param(minimum = 1, maximum = 200, default = 50, value_type = Option<u32>)]
    limit: u32,
}

impl FromParameters for RigsQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        Ok(Self { cursor: parameters.cursor(CURSOR)?, limit: parameters.limit()? })
    }
}

/// All rigs.
#[utoipa::path(
    get, path = "/v1/rigs", tag = "rigs", operation_id = "list_rigs", params(RigsQuery),
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    responses((status = 200, description = "Rigs in order of their names.", body = RigPage, headers(("Link" = String))))
)]
pub async fn list(
    Query(query): Query<RigsQuery>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let RigsQuery { cursor: after, limit } = query;
    let found = service.rigs(after.as_ref(), limit).await?;
    let next = found.items.last().filter(|_| found.more).map(|last| cursor::write(CURSOR, &last.rig));
    let link = next.as_deref().map(|next| link_next(&format!("/v1/rigs?limit={limit}&cursor={next}")));
    let items: Result<Vec<String>, _> = found.items.into_iter().map(|item| serde_json::to_string(&RigItem::from(item))).collect();
    let text = page(items.map_err(|error| Problem::internal(&error))?.into_iter(), next.as_deref());
    Ok((link, json(StatusCode::OK, text)).into_response())
}
