//! `/v1/rigs/{rig}/yield`: what a rig really yields.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{Response, StatusCode},
};
use utoipa::IntoParams;

use super::{
    negotiation::TakesJson,
    problem::{Problem, ProblemDocument},
    wire::{FromParameters, Parameters, Query, RigPath, json, no_rig},
};
use crate::{clock::Stamp, ledger::history::Window, rig_yield::RigYield, service::Service};

/// How many batches are added up unless asked for otherwise, and at most.
const BATCHES: u32 = 100;
const MOST_BATCHES: u32 = 100_000;

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct YieldQuery {
    /// The newest so many batches.
    #[param(minimum = 1, maximum = 100_000, default = 100)]
    batches: Option<u32>,
    /// In place of `batches`: those recorded at this time or later, RFC 3339.
    #[param(value_type = Option<String>, format = DateTime)]
    since: Option<Stamp>,
}

impl FromParameters for YieldQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        let query = Self { batches: parameters.count("batches", MOST_BATCHES)?, since: parameters.value("since")? };
        if query.batches.is_some() && query.since.is_some() {
            return Err(Problem::parameter("since", "Give batches or since, not both."));
        }
        Ok(query)
    }
}

/// What a rig's batches add up to.
#[utoipa::path(
    get, path = "/v1/rigs/{rig}/yield", tag = "rigs", operation_id = "get_yield",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    params(("rig" = String, Path, description = "Name of the rig."), YieldQuery),
    responses(
        (status = 200, description = "The sums.", body = RigYield),
        (status = 404, description = "No such rig.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn get(
    RigPath(rig): RigPath,
    Query(query): Query<YieldQuery>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let window = match (query.batches, query.since) {
        (_, Some(since)) => Window::Since(since),
        (batches, None) => Window::Batches(batches.unwrap_or(BATCHES)),
    };
    let sums = service.rig_yield(&rig, window).await?.ok_or_else(no_rig)?;
    let text = serde_json::to_string(&sums).map_err(|error| Problem::internal(&error))?;
    Ok(json(StatusCode::OK, text))
}
