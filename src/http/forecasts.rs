//! `/v1/forecasts`: what would be certified.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{Response, StatusCode, header},
    response::IntoResponse,
};

use super::{
    negotiation::{Offer, TakesPicture},
    problem::{Problem, ProblemDocument},
    wire::{Payload, Query, json},
};
use crate::{
    forecast::{Forecast, ForecastDocument, csv, picture},
    service::Service,
};

const FORECAST_LIMIT: usize = 256 * 1024;

/// Computes what would be certified over a grid of leakage, visibility or numbers of rounds, and where certification ends. Nothing is recorded,
/// and nothing may be released on a forecast.
#[utoipa::path(
    post, path = "/v1/forecasts", tag = "forecasts", operation_id = "post_forecast",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    request_body(description = "A scenario, an expected behaviour or earlier counts, and what is varied.", content = ForecastDocument, content_type = "application/json"),
    responses(
        (status = 200, description = "The forecast; as CSV one row a point, as SVG a picture of it.",
            content((Forecast = "application/json"), (String = "text/csv"), (String = "image/svg+xml"))),
        (status = 400, description = "The body does not have the shape of a request.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "Values that cannot be, or a grid that would take too long: `detail` has the figure.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 503, description = "The queue is full; `Retry-After` says when to ask again.", body = ProblemDocument, content_type = "application/problem+json", headers(("Retry-After" = u64))),
    )
)]
pub async fn post(
    Query(()): Query<()>,
    TakesPicture(offer): TakesPicture,
    State(service): State<Arc<Service>>,
    payload: Payload<FORECAST_LIMIT>,
) -> Result<Response<Body>, Problem> {
    let document: ForecastDocument = payload.object("A forecast's request")?;
    let forecast = service.forecast(service.read_forecast(document).await?).await?;
    let unwritable = |error: &(dyn std::error::Error + 'static)| Problem::internal(error);
    let vary = [(header::VARY, "Accept")];
    let body = match offer {
        Offer::Json => json(StatusCode::OK, serde_json::to_string(&forecast).map_err(|error| unwritable(&error))?),
        Offer::Csv => {
            let text = csv(&forecast).map_err(|error| unwritable(&error))?;
            (StatusCode::OK, [(header::CONTENT_TYPE, "text/csv; charset=utf-8; header=present")], text).into_response()
        }
        Offer::Svg => {
            let text = picture(&forecast).map_err(|error| unwritable(&error))?;
            (StatusCode::OK, [(header::CONTENT_TYPE, "image/svg+xml")], text).into_response()
        }
    };
    Ok((vary, body).into_response())
}
