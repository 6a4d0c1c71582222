//! Every route on one screen.

use std::{any::Any, sync::Arc};

use axum::{
    Router,
    body::Body,
    http::{Request, StatusCode, Uri},
    middleware,
    response::IntoResponse,
};
use tower_http::{catch_panic::CatchPanicLayer, trace::TraceLayer};
use utoipa::OpenApi;
use utoipa_axum::{router::OpenApiRouter, routes};

use super::{batches, certifications, commitments, health, intake, leakage, ledger, openapi, problem::Problem, rigs, yields};
use crate::service::Service;

pub(super) fn routes() -> OpenApiRouter<Arc<Service>> {
    OpenApiRouter::with_openapi(openapi::Frame::openapi())
        .routes(routes!(rigs::list))
        .routes(routes!(rigs::get, rigs::put))
        .routes(routes!(batches::post))
        .routes(routes!(commitments::list, commitments::post))
        .routes(routes!(commitments::get))
        .routes(routes!(commitments::witness))
        .routes(routes!(yields::get))
        .routes(routes!(certifications::list))
        .routes(routes!(certifications::get))
        .routes(routes!(certifications::witness))
        .routes(routes!(certifications::bundle))
        .routes(routes!(ledger::checkpoint))
        .routes(routes!(ledger::key))
        .routes(routes!(ledger::entry))
        .routes(routes!(ledger::inclusion))
        .routes(routes!(ledger::consistency))
        .routes(routes!(leakage::list, leakage::post))
        .routes(routes!(leakage::get))
        .routes(routes!(openapi::get))
        .routes(routes!(health::live))
        .routes(routes!(health::ready))
}

/// The whole interface, with an answer for whatever is not part of it.
pub(super) fn router(service: Arc<Service>) -> Router {
    let (router, _) = routes().split_for_parts();
    router
        .fallback(async |uri: Uri| Problem::not_found(format!("There is nothing at {}.", uri.path())))
        .method_not_allowed_fallback(async || Problem::new(StatusCode::METHOD_NOT_ALLOWED, "`Allow` lists the methods there are here."))
        .with_state(service)
        .layer(middleware::from_fn(intake::take_in))
        .layer(CatchPanicLayer::custom(panicked))
        .layer(TraceLayer::new_for_http().make_span_with(span).on_failure(()))
}

/// What the log says a request was about. What fails is logged where it is known why, not a second time by the layer.
fn span(request: &Request<Body>) -> tracing::Span {
    tracing::info_span!("request", method = %request.method(), path = request.uri().path())
}

/// A bug must not leave a client without an answer. The panic itself has been logged by then.
fn panicked(_: Box<dyn Any + Send>) -> axum::response::Response {
    Problem::new(StatusCode::INTERNAL_SERVER_ERROR, "The service failed.").into_response()
}
