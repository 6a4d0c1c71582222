//! `/v1/leakage`: what leaves the carrier, from what was measured.

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
    cursor,
    negotiation::TakesJson,
    problem::{Problem, ProblemDocument},
    wire::{BudgetPath, FromParameters, Parameters, Payload, Query, json, link_next, page},
};
use crate::{
    clock::Stamp,
    leakage::budget::{Budget, BudgetAccount, BudgetDocument},
    ledger::rows::KeptBudget,
    service::Service,
};

const BUDGET_LIMIT: usize = 64 * 1024;
const CURSOR: &str = "leakage:";

/// Computes a leakage budget, contributions from stated values or counts and their sum, and keeps it under the digest of its
/// canonical bytes.
///
/// A profile's or a batch's `leakage` may name the budget by that digest. Keeping the same budget again changes nothing.
#[utoipa::path(
    post, path = "/v1/leakage", tag = "leakage", operation_id = "post_leakage",
    security(("token" = ["rig"]), ("token" = ["operator"])),
    request_body(
        description = "`carrier_dimension` and `contributions`, each with a `source`: coherent, thermal, g2, coincidence, heralded, vacuum, overlap or \
                       side-mode, and what was measured of it.",
        content = Object, content_type = "application/json",
        example = json!({"carrier_dimension": 2, "contributions": [{"source": "coherent", "mean_photon_number": 0.01}]})
    ),
    responses(
        (status = 200, description = "As for 201; the same budget was kept before.", body = Object, headers(("Location" = String))),
        (status = 201, description = "Kept: the sum, rounded up, each contribution's share, what it rests on, and the digest.", body = Object, headers(("Location" = String))),
        (status = 400, description = "The body does not have the shape of a budget.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "A value that cannot be, or carriers that do not multiply to the stated dimension.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn post(
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
    payload: Payload<BUDGET_LIMIT>,
) -> Result<Response<Body>, Problem> {
    let document: BudgetDocument = payload.object("A budget")?;
    let budget = Budget::try_from(document).map_err(|fault| Problem::body(StatusCode::UNPROCESSABLE_ENTITY, fault))?;
    let report = budget.report();
    let text = serde_json::to_string(&report).map_err(|error| Problem::internal(&error))?;
    let status = if service.keep_budget(&budget).await? { StatusCode::CREATED } else { StatusCode::OK };
    let location = [(header::LOCATION, format!("/v1/leakage/{}", report.digest))];
    Ok((location, json(status, text)).into_response())
}

/// One budget, byte for byte as its digest is of it: what was measured, without the figures that follow from it.
#[utoipa::path(
    get, path = "/v1/leakage/{digest}", tag = "leakage", operation_id = "get_leakage",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    params(("digest" = String, Path, description = "`sha256:` digest of the budget.")),
    responses(
        (status = 200, description = "The budget document; posted again, it is answered with its figures.", body = Object),
        (status = 404, description = "No such budget.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn get(
    BudgetPath(digest): BudgetPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let document = service.budget(&digest).await?.ok_or_else(|| Problem::not_found("There is no budget of this digest."))?;
    Ok(json(StatusCode::OK, document))
}

/// One budget of the list.
#[derive(Serialize, ToSchema)]
pub struct BudgetItem {
    #[schema(value_type = String, format = DateTime)]
    recorded_at: Stamp,
    carrier_dimension: u32,
    budget: BudgetAccount,
}

/// Budgets, newest first.
#[derive(Serialize, ToSchema)]
pub struct BudgetPage {
    items: Vec<BudgetItem>,
    /// Where the next page begins; `null` at the end.
    next: Option<String>,
}

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct BudgetsQuery {
    /// Where the page begins: the `next` of the page before.
    #[param(value_type = Option<String>)]
    cursor: Option<u64>,
    /// Items on the page.
    #[param(minimum = 1, maximum = 200, default = 50, value_type = Option<u32>)]
    limit: u32,
}

impl FromParameters for BudgetsQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        Ok(Self { cursor: parameters.cursor(CURSOR)?, limit: parameters.limit()? })
    }
}

/// Budgets that are kept, newest first, with their figures.
#[utoipa::path(
    get, path = "/v1/leakage", tag = "leakage", operation_id = "list_leakage", params(BudgetsQuery),
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    responses((status = 200, description = "One page.", body = BudgetPage, headers(("Link" = String))))
)]
pub async fn list(
    Query(query): Query<BudgetsQuery>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let BudgetsQuery { cursor: before, limit } = query;
    let found = service.budgets(before, limit).await?;
    let next = found.items.last().filter(|_| found.more).map(|last| cursor::write(CURSOR, last.number));
    let link = next.as_deref().map(|next| link_next(&format!("/v1/leakage?limit={limit}&cursor={next}")));
    let items: Vec<String> = found.items.iter().map(item).collect::<Result<_, _>>()?;
    Ok((link, json(StatusCode::OK, page(items.into_iter(), next.as_deref()))).into_response())
}

fn item(kept: &KeptBudget) -> Result<String, Problem> {
    let budget = Budget::try_from(kept.budget()?).map_err(|fault| Problem::internal(&fault))?;
    let carrier_dimension = budget.document().carrier_dimension;
    let item = BudgetItem { recorded_at: kept.recorded_at, carrier_dimension, budget: budget.account() };
    serde_json::to_string(&item).map_err(|error| Problem::internal(&error))
}
