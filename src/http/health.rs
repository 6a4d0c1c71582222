//! `/livez` and `/readyz`: for whoever watches over the process.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{Response, StatusCode},
};
use serde::Serialize;
use utoipa::ToSchema;

use super::{
    problem::{Problem, ProblemDocument},
    wire::json,
};
use crate::service::Service;

/// Alive.
#[derive(Serialize, ToSchema)]
pub struct Live {
    status: &'static str,
}

/// Whether the process answers at all. Touches nothing.
#[utoipa::path(get, path = "/livez", tag = "health", operation_id = "livez", security(()), responses((status = 200, body = Live)))]
pub async fn live() -> Response<Body> {
    json(StatusCode::OK, r#"{"status":"live"}"#)
}

/// A readiness check that passed.
#[derive(Serialize, ToSchema)]
pub struct PassedCheck {
    name: &'static str,
    status: &'static str,
}

/// Ready.
#[derive(Serialize, ToSchema)]
pub struct Ready {
    status: &'static str,
    checks: Vec<PassedCheck>,
}

/// Whether batches are taken; each check by name.
#[utoipa::path(
    get, path = "/readyz", tag = "health", operation_id = "readyz", security(()),
    responses(
        (status = 200, body = Ready),
        (status = 503, description = "Not ready; `checks` says why.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn ready(State(service): State<Arc<Service>>) -> Result<Response<Body>, Problem> {
    let checks = service.readiness().await;
    if checks.iter().any(|check| check.fault.is_some()) {
        return Err(Problem::not_ready(checks));
    }
    let checks = checks.into_iter().map(|check| PassedCheck { name: check.name, status: "ok" }).collect();
    let text = serde_json::to_string(&Ready { status: "ready", checks }).map_err(|error| Problem::internal(&error))?;
    Ok(json(StatusCode::OK, text))
}
