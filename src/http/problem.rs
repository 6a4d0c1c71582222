//! Everything that goes wrong, as a problem document (RFC 9457).

use std::time::Duration;

use axum::{
    body::Body,
    http::{HeaderName, HeaderValue, Response, StatusCode, header},
    response::IntoResponse,
};
use serde::Serialize;
use uuid::Uuid;

use crate::{
    batch::BatchFault,
    fault::Fault,
    ledger::{LedgerError, seal::SealError, writer::WriteError},
    service::{Check, DocumentError, ForecastError, OrderError, SolveError, SubmitError},
};

/// Media type of every error.
pub const PROBLEM_JSON: &str = "application/problem+json";

/// What in the request is to blame.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Culprit {
    /// A JSON pointer (RFC 6901) into the body; `/lines/7/count` is a field of the seventh line of a CSV body.
    Pointer(String),
    /// A query or path parameter.
    Parameter(String),
    /// A header.
    Header(&'static str),
}

/// One thing that is wrong with a request.
#[derive(Debug, Clone, Serialize, utoipa::ToSchema)]
pub struct ProblemError {
    pub detail: String,
    /// JSON pointer (RFC 6901) into the body.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub pointer: Option<String>,
    /// Name of a query or path parameter.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub parameter: Option<String>,
    /// Name of a header.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub header: Option<&'static str>,
}

/// One readiness check that failed.
#[derive(Debug, Clone, Serialize, utoipa::ToSchema)]
pub struct FailedCheck {
    pub name: &'static str,
    pub detail: String,
}

/// A problem document (RFC 9457).
#[derive(Debug, Clone, Serialize, utoipa::ToSchema)]
#[schema(as = Problem)]
pub struct ProblemDocument {
    /// What kind of problem; `about:blank` where the status says it all.
    #[serde(rename = "type")]
    pub kind: &'static str,
    pub title: &'static str,
    pub status: u16,
    /// What happened, in plain words.
    pub detail: String,
    /// This one occurrence, by the name that the service's log has for it.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub instance: Option<String>,
    /// What in the body is to blame: a JSON pointer (RFC 6901).
    #[serde(skip_serializing_if = "Option::is_none")]
    pub pointer: Option<String>,
    #[serde(skip_serializing_if = "Vec::is_empty")]
    pub errors: Vec<ProblemError>,
    /// Readiness checks that failed.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    pub checks: Vec<FailedCheck>,
}

/// A problem on its way to the client.
#[derive(Debug, Clone)]
pub struct Problem {
    document: Box<ProblemDocument>,
    headers: Vec<(HeaderName, HeaderValue)>,
}

impl Problem {
    pub fn new(status: StatusCode, detail: impl Into<String>) -> Self {
        let document = ProblemDocument {
            kind: "about:blank",
            title: status.canonical_reason().unwrap_or("Error"),
            status: status.as_u16(),
            detail: detail.into(),
            instance: None,
            pointer: None,
            errors: vec![],
            checks: vec![],
        };
        Self { document: Box::new(document), headers: vec![] }
    }

    /// The request does not have the shape that was expected.
    pub fn malformed(detail: impl Into<String>) -> Self {
        Self::new(StatusCode::BAD_REQUEST, detail)
    }

    pub fn not_found(detail: impl Into<String>) -> Self {
        Self::new(StatusCode::NOT_FOUND, detail)
    }

    /// A problem that has a name of its own besides its status.
    pub fn named(mut self, kind: &'static str, title: &'static str) -> Self {
        self.document.kind = kind;
        self.document.title = title;
        self
    }

    /// Names what in the request is to blame.
    pub fn blaming(mut self, culprit: Culprit) -> Self {
        let detail = self.document.detail.clone();
        let mut error = ProblemError { detail, pointer: None, parameter: None, header: None };
        match culprit {
            Culprit::Pointer(pointer) => {
                self.document.pointer = Some(pointer.clone());
                error.pointer = Some(pointer);
            }
            Culprit::Parameter(name) => error.parameter = Some(name),
            Culprit::Header(name) => error.header = Some(name),
        }
        self.document.errors.push(error);
        self
    }

    pub fn parameter(name: &str, detail: impl Into<String>) -> Self {
        Self::malformed(detail).blaming(Culprit::Parameter(name.to_owned()))
    }

    pub fn header(name: &'static str, detail: impl Into<String>) -> Self {
        Self::malformed(detail).blaming(Culprit::Header(name))
    }

    /// A fault of a body.
    pub fn body(status: StatusCode, fault: Fault) -> Self {
        Self::new(status, fault.detail).blaming(Culprit::Pointer(fault.pointer))
    }

    pub fn with_header(mut self, name: HeaderName, value: HeaderValue) -> Self {
        self.headers.push((name, value));
        self
    }

    fn retry_after(self, seconds: u64) -> Self {
        self.with_header(header::RETRY_AFTER, HeaderValue::from(seconds))
    }

    fn queue_full(detail: String, retry_after: Duration) -> Self {
        Self::new(StatusCode::SERVICE_UNAVAILABLE, detail)
            .named("urn:bitassay:problem:queue-full", "The queue is full")
            .retry_after(retry_after.as_secs().max(1))
    }

    /// There are too many connections to serve this one.
    pub fn crowded() -> Self {
        Self::new(StatusCode::SERVICE_UNAVAILABLE, "There are too many connections at present.").retry_after(5)
    }

    /// More requests than one client may send.
    pub fn too_many(wait: Duration) -> Self {
        let seconds = wait.as_secs() + 1;
        Self::new(StatusCode::TOO_MANY_REQUESTS, format!("Too many requests; the next is taken in {seconds} s at the latest."))
            .retry_after(seconds)
    }

    /// Not ready, and why.
    pub fn not_ready(failed: Vec<Check>) -> Self {
        let mut problem = Self::new(StatusCode::SERVICE_UNAVAILABLE, "The service takes no batches at present.").retry_after(5);
        let checks = failed.into_iter().filter_map(|check| check.fault.map(|detail| FailedCheck { name: check.name, detail }));
        problem.document.checks = checks.collect();
        problem
    }

    fn ledger_fault(detail: &str) -> Self {
        let detail = format!("The ledger is not in order, and nothing is signed or recorded until it is: {detail}.");
        Self::new(StatusCode::SERVICE_UNAVAILABLE, detail).named("urn:bitassay:problem:ledger-fault", "The ledger is not in order")
    }

    /// Something failed that the client can do nothing about. The log has the causes under the name that the client is given.
    pub fn internal(error: &(dyn std::error::Error + 'static)) -> Self {
        let instance = format!("urn:uuid:{}", Uuid::now_v7());
        tracing::error!(%instance, error, "a request failed");
        let mut problem =
            Self::new(StatusCode::INTERNAL_SERVER_ERROR, "The service failed. Its log says more under the name in `instance`.");
        problem.document.instance = Some(instance);
        problem
    }
}

impl IntoResponse for Problem {
    fn into_response(self) -> Response<Body> {
        let status = StatusCode::from_u16(self.document.status).unwrap_or(StatusCode::INTERNAL_SERVER_ERROR);
        // Plain data: serialisation cannot fail.
        let text = serde_json::to_string(&self.document).unwrap_or_default();
        let mut response = (status, [(header::CONTENT_TYPE, PROBLEM_JSON)], text).into_response();
        response.headers_mut().extend(self.headers);
        response
    }
}

impl From<LedgerError> for Problem {
    fn from(error: LedgerError) -> Self {
        match error {
            LedgerError::Closed => Self::new(StatusCode::SERVICE_UNAVAILABLE, "The service is shutting down.").retry_after(5),
            LedgerError::Fault { detail } => Self::ledger_fault(&detail),
            error if error.is_damage() => {
                tracing::error!(error = &error as &dyn std::error::Error, "the database is damaged");
                Self::ledger_fault("the database is damaged")
            }
            error => match error.obstacle() {
                Some(obstacle) => {
                    tracing::error!(error = &error as &dyn std::error::Error, obstacle, "the ledger could not be used");
                    let detail = format!(
                        "The ledger cannot be used at present: {obstacle}. Nothing was recorded; send the same again later, under the same key."
                    );
                    Self::new(StatusCode::SERVICE_UNAVAILABLE, detail)
                        .named("urn:bitassay:problem:storage", "The ledger cannot be used at present")
                        .retry_after(10)
                }
                None => Self::internal(&error),
            },
        }
    }
}

impl From<SealError> for Problem {
    fn from(error: SealError) -> Self {
        match error {
            SealError::Fault(detail) => Self::ledger_fault(&detail),
            SealError::Behind { checked, entries } => {
                let detail = format!("The ledger is gone through before anything is signed: {checked} of {entries} entries so far.");
                Self::new(StatusCode::SERVICE_UNAVAILABLE, detail).retry_after(10)
            }
            SealError::Ledger(error) => error.into(),
            SealError::Key(error) => {
                tracing::error!(error = &error as &dyn std::error::Error, "a checkpoint was not signed");
                let detail = "The checkpoint cannot be kept beside the key, and is therefore not signed. The log says why.";
                Self::new(StatusCode::SERVICE_UNAVAILABLE, detail)
                    .named("urn:bitassay:problem:storage", "The ledger cannot be used at present")
                    .retry_after(10)
            }
        }
    }
}

impl From<DocumentError> for Problem {
    fn from(error: DocumentError) -> Self {
        match error {
            DocumentError::Document(fault) => Self::body(StatusCode::UNPROCESSABLE_ENTITY, fault),
            DocumentError::Ledger(error) => error.into(),
        }
    }
}

impl From<WriteError> for Problem {
    fn from(error: WriteError) -> Self {
        match error {
            WriteError::ExpectationMissing { current } => {
                let detail = format!(
                    "The profile exists, at version {current}. To change it, send `If-Match: \"{current}\"`: that says which version \
                     the change was made from."
                );
                Self::new(StatusCode::PRECONDITION_REQUIRED, detail).blaming(Culprit::Header("If-Match"))
            }
            WriteError::ExpectationFailed { current } => {
                let detail = current.map_or_else(
                    || "The rig has no profile yet.".to_owned(),
                    |current| format!("The profile is at version {current}: it was changed since, or exists already."),
                );
                Self::new(StatusCode::PRECONDITION_FAILED, detail)
            }
            WriteError::KeyReused => SubmitError::KeyReused.into(),
            WriteError::Ledger(error) => error.into(),
        }
    }
}

impl From<SubmitError> for Problem {
    fn from(error: SubmitError) -> Self {
        match error {
            SubmitError::UnknownRig => Self::not_found("There is no rig of this name; an operator has to put its profile first."),
            SubmitError::Uncommitted => {
                let detail = "The rig's rounds have memory, and no commitment stands for its newest profile. Nothing was recorded; commit \
                              first, with a POST to the rig's commitments, and post batches that begin afterwards.";
                Self::new(StatusCode::UNPROCESSABLE_ENTITY, detail).named("urn:bitassay:problem:no-commitment", "Nothing is committed")
            }
            SubmitError::Batch(BatchFault::Malformed(fault)) => Self::body(StatusCode::BAD_REQUEST, fault),
            SubmitError::Batch(BatchFault::Impossible(fault)) => Self::body(StatusCode::UNPROCESSABLE_ENTITY, fault),
            SubmitError::KeyReused => {
                let detail = "This idempotency key already stands for another batch. A new batch needs a key of its own.";
                Self::new(StatusCode::UNPROCESSABLE_ENTITY, detail)
                    .named("urn:bitassay:problem:key-reused", "The idempotency key is taken")
                    .blaming(Culprit::Header("Idempotency-Key"))
            }
            SubmitError::Solve(SolveError::QueueFull { waiting, retry_after }) => {
                let detail = format!("{waiting} jobs are waiting already. Nothing was recorded; send the batch again, under the same key.");
                Self::queue_full(detail, retry_after)
            }
            SubmitError::Solve(SolveError::Stopped) => LedgerError::Closed.into(),
            SubmitError::Ledger(error) => error.into(),
            error @ (SubmitError::Solve(SolveError::Panicked) | SubmitError::Unwritable(_) | SubmitError::Abandoned(_)) => {
                Self::internal(&error)
            }
        }
    }
}

impl From<OrderError> for Problem {
    fn from(error: OrderError) -> Self {
        match error {
            OrderError::UnknownRig => SubmitError::UnknownRig.into(),
            OrderError::OtherRounds => {
                let detail = "Only rounds with memory are committed to, and the rig's profile does not say that its rounds have memory.";
                Self::new(StatusCode::UNPROCESSABLE_ENTITY, detail)
            }
            OrderError::Order(fault) => Self::body(StatusCode::UNPROCESSABLE_ENTITY, fault),
            OrderError::Commit(error) => {
                let detail = format!("No commitment came of it, and nothing was recorded: {error}.");
                Self::new(StatusCode::UNPROCESSABLE_ENTITY, detail)
            }
            OrderError::Solve(SolveError::QueueFull { waiting, retry_after }) => {
                let detail = format!("{waiting} jobs are waiting already. Nothing was recorded; send the commitment again.");
                Self::queue_full(detail, retry_after)
            }
            OrderError::Solve(SolveError::Stopped) => LedgerError::Closed.into(),
            OrderError::Ledger(error) => error.into(),
            error @ (OrderError::Solve(SolveError::Panicked) | OrderError::Abandoned(_)) => Self::internal(&error),
        }
    }
}

impl From<ForecastError> for Problem {
    fn from(error: ForecastError) -> Self {
        match error {
            ForecastError::TooLarge(fault) => Self::body(StatusCode::UNPROCESSABLE_ENTITY, fault),
            ForecastError::Solve(SolveError::QueueFull { waiting, retry_after }) => {
                Self::queue_full(format!("{waiting} jobs are waiting already. Ask for the forecast again."), retry_after)
            }
            ForecastError::Solve(SolveError::Stopped) => LedgerError::Closed.into(),
            error @ ForecastError::Solve(SolveError::Panicked) => Self::internal(&error),
        }
    }
}
