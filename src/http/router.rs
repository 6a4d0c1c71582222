//! Every route on one screen.

use std::{any::Any, sync::Arc, time::Duration};

use axum::{
    Router,
    body::Body,
    extract::State,
    http::{HeaderValue, Request, StatusCode, Uri},
    middleware,
    response::IntoResponse,
};
use tower_http::{
    catch_panic::CatchPanicLayer,
    request_id::{MakeRequestUuid, PropagateRequestIdLayer, SetRequestIdLayer},
    trace::TraceLayer,
};
use utoipa::OpenApi;
use utoipa_axum::{router::OpenApiRouter, routes};

use super::{
    access::{self, Gate, Rules},
    batches, certifications, commitments, forecasts, health, intake, leakage, ledger,
    limits::Limits,
    measurements, openapi,
    problem::Problem,
    rigs, yields,
};
use crate::service::Service;

/// The header with a request's name.
const REQUEST_ID: &str = "x-request-id";

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
        .routes(routes!(forecasts::post))
        .routes(routes!(openapi::get))
        .routes(routes!(health::live))
        .routes(routes!(health::ready))
        .routes(routes!(measurements::get))
}

/// The whole interface, with an answer for whatever is not part of it, and further routes beside it in the same layers.
pub(super) fn router(service: Arc<Service>, limits: &Limits, beside: Router) -> Router {
    let (router, document) = routes().split_for_parts();
    // A document that cannot be written states no rule, and then nobody is let in.
    let rules = Rules::read(&serde_json::to_value(&document).unwrap_or_default());
    let gate = Gate::new(Arc::clone(&service), rules, limits);
    let guarded = router.route_layer(middleware::from_fn_with_state(gate, access::guard)).fallback(nothing).with_state(service);
    dressed(guarded.merge(beside), limits)
}

/// What is left of the interface when there are too many connections: enough to see that the service is alive and busy.
pub(super) fn crowded(service: Arc<Service>, limits: &Limits) -> Router {
    let (router, _) = OpenApiRouter::new()
        .routes(routes!(health::live))
        .routes(routes!(health::ready))
        .routes(routes!(measurements::get))
        .split_for_parts();
    dressed(router.fallback(async || Problem::crowded()).with_state(service), limits)
}

/// What all requests have in common: a name, a line in the log, a body that has arrived, and an answer whatever happens.
fn dressed(router: Router, limits: &Limits) -> Router {
    router
        .layer(middleware::from_fn_with_state(limits.body, intake::take_in))
        .layer(CatchPanicLayer::custom(panicked))
        .layer(TraceLayer::new_for_http().make_span_with(span).on_failure(()))
        .layer(PropagateRequestIdLayer::x_request_id())
        .layer(SetRequestIdLayer::x_request_id(MakeRequestUuid))
        .layer(middleware::map_request(named_well))
}

async fn nothing(State(service): State<Arc<Service>>, uri: Uri) -> Problem {
    service.metrics().answered("any", "none", StatusCode::NOT_FOUND.as_u16(), Duration::ZERO);
    Problem::not_found(format!("There is nothing at {}.", uri.path()))
}

/// Longest name that a client may give its request.
const LONGEST_NAME: usize = 64;

/// A client's name for its request goes into the log and into the answer, so it is short and plain, or else the service's is taken.
async fn named_well<B>(mut request: Request<B>) -> Request<B> {
    let plain = |byte: &u8| byte.is_ascii_alphanumeric() || b"-_.:".contains(byte);
    let fits = |value: &HeaderValue| (1..=LONGEST_NAME).contains(&value.len()) && value.as_bytes().iter().all(plain);
    if !request.headers().get_all(REQUEST_ID).iter().all(fits) {
        request.headers_mut().remove(REQUEST_ID);
    }
    request
}

/// What the log says a request was about. What fails is logged where it is known why, not a second time by the layer.
fn span(request: &Request<Body>) -> tracing::Span {
    let name = request.headers().get(REQUEST_ID).and_then(|value| value.to_str().ok()).unwrap_or_default();
    tracing::info_span!("request", id = name, method = %request.method(), path = request.uri().path())
}

/// A bug must not leave a client without an answer. The panic itself has been logged by then.
fn panicked(_: Box<dyn Any + Send>) -> axum::response::Response {
    Problem::new(StatusCode::INTERNAL_SERVER_ERROR, "The service failed.").into_response()
}
