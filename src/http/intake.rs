//! Bodies are taken in whole before anything is decided.
//!
//! A server that answers while the client still sends, and then closes, loses its answer: the client's system drops what it has
//! received when its own data bounces. So a body is read to its end even if it will be turned away, within limits.

use std::time::Duration;

use axum::{
    body::{Body, Bytes},
    extract::{Request, State},
    http::{StatusCode, header},
    middleware::Next,
    response::{IntoResponse, Response},
};
use http_body_util::BodyExt;

use super::problem::Problem;

/// Longest body of any route; what is longer is cut off behind the first byte too many.
pub const LONGEST: usize = 1024 * 1024;
/// How much is read, and thrown away, for the sake of an answer.
const PATIENCE: usize = 16 * 1024 * 1024;

/// Replaces the body by one that has arrived, within the time there is.
pub async fn take_in(State(limit): State<Duration>, request: Request, next: Next) -> Response {
    let stated = request.headers().get(header::CONTENT_LENGTH).and_then(|value| value.to_str().ok()?.parse::<usize>().ok());
    if stated.is_some_and(|length| length > PATIENCE) {
        return too_large(LONGEST).into_response();
    }
    let (parts, body) = request.into_parts();
    match tokio::time::timeout(limit, read(body)).await {
        Ok(Ok(bytes)) => next.run(Request::from_parts(parts, Body::from(bytes))).await,
        Ok(Err(problem)) => problem.into_response(),
        Err(_) => Problem::new(StatusCode::REQUEST_TIMEOUT, "The body took too long to arrive.").into_response(),
    }
}

pub fn too_large(limit: usize) -> Problem {
    Problem::new(StatusCode::PAYLOAD_TOO_LARGE, format!("A body has at most {limit} bytes here."))
}

/// The first bytes of a body, one more than any route takes at most.
async fn read(mut body: Body) -> Result<Bytes, Problem> {
    let (mut kept, mut length) = (Vec::new(), 0usize);
    while let Some(frame) = body.frame().await {
        let frame = frame.map_err(|_| Problem::malformed("The body did not arrive whole."))?;
        // Trailers are of no use here.
        let Ok(data) = frame.into_data() else { continue };
        length = length.saturating_add(data.len());
        kept.extend_from_slice(&data[..data.len().min(LONGEST + 1 - kept.len())]);
        if length > PATIENCE {
            return Err(too_large(LONGEST));
        }
    }
    Ok(kept.into())
}
