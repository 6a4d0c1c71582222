//! `/v1/leakage`: what leaves the carrier, from what was measured.

use axum::{
    body::Body,
    http::{Response, StatusCode},
};

use super::{
    negotiation::TakesJson,
    problem::{Problem, ProblemDocument},
    wire::{Payload, Query, json},
};
use crate::leakage::budget::{Budget, BudgetDocument};

const BUDGET_LIMIT: usize = 64 * 1024;

/// Computes a leakage budget: contributions from stated values or counts, and their sum. Nothing is kept.
#[utoipa::path(
    post, path = "/v1/leakage", tag = "leakage", operation_id = "post_leakage",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    request_body(
        description = "`carrier_dimension` and `contributions`, each with a `source`: coherent, thermal, g2, coincidence, heralded, vacuum, overlap or \
                       side-mode, and what was measured of it.",
        content = Object, content_type = "application/json",
        example = json!({"carrier_dimension": 2, "contributions": [{"source": "coherent", "mean_photon_number": 0.01}]})
    ),
    responses(
        (status = 200, description = "The sum, rounded up, each contribution's share and what it rests on.", body = Object),
        (status = 400, description = "The body does not have the shape of a budget.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "A value that cannot be, or carriers that do not multiply to the stated dimension.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn post(Query(()): Query<()>, TakesJson: TakesJson, payload: Payload<BUDGET_LIMIT>) -> Result<Response<Body>, Problem> {
    let document: BudgetDocument = payload.object("A budget")?;
    let budget = Budget::try_from(document).map_err(|fault| Problem::body(StatusCode::UNPROCESSABLE_ENTITY, fault))?;
    let text = serde_json::to_string(&budget.report()).map_err(|error| Problem::internal(&error))?;
    Ok(json(StatusCode::OK, text))
}
