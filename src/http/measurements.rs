//! `/metrics`: what the service counts and measures, for whoever scrapes it.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{Response, StatusCode, header},
    response::IntoResponse,
};

use super::problem::{Problem, ProblemDocument};
use crate::{metrics::OPENMETRICS, service::Service};

/// Everything that is counted and measured, as OpenMetrics text.
#[utoipa::path(
    get, path = "/metrics", tag = "health", operation_id = "metrics", security(()),
    responses(
        (status = 200, description = "OpenMetrics 1.0.", body = String, content_type = "application/openmetrics-text"),
        (status = 500, description = "The text could not be written.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn get(State(service): State<Arc<Service>>) -> Result<Response<Body>, Problem> {
    let text = service.measurements().map_err(|error| Problem::internal(&error))?;
    Ok((StatusCode::OK, [(header::CONTENT_TYPE, OPENMETRICS)], text).into_response())
}
