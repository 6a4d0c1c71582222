//! The interface described to machines: OpenAPI 3.1, generated from the handlers.

use axum::{
    body::Body,
    http::{Response, StatusCode},
};
use utoipa::{
    OpenApi, PartialSchema, ToSchema,
    openapi::{ArrayBuilder, ObjectBuilder, OneOfBuilder, RefOr, Schema, schema::Type},
};

use super::{negotiation::TakesJson, problem::Problem, router, wire::json};
use crate::scenario::LeakageDocument;

/// What the handlers do not say themselves.
#[derive(OpenApi)]
#[openapi(
    info(
        title = "bitassay",
        description = "Certifies randomness from an untrusted prepare-and-measure rig whose carrier is almost d-dimensional. \
                       Every error is a problem document (RFC 9457).",
    ),
    tags(
        (name = "rigs", description = "What operators declare about their rigs, and what the rigs yield."),
        (name = "commitments", description = "What is fixed ahead of the data of rounds with memory."),
        (name = "batches", description = "What rigs post."),
        (name = "certifications", description = "What was certified, and what was refused."),
        (name = "ledger", description = "The Merkle tree over everything that is recorded, for auditors."),
        (name = "leakage", description = "What leaves the carrier, from what was measured."),
        (name = "health", description = "For whoever watches over the process."),
    ),
)]
pub(super) struct Frame;

/// The document as text, indented, as it is kept in `api/openapi.json`.
///
/// # Errors
/// The serialiser's.
pub fn document() -> Result<String, serde_json::Error> {
    let (_, mut document) = router::routes().split_for_parts();
    open_certificate(&mut document);
    serde_json::to_string_pretty(&document).map(|text| text + "\n")
}

/// A record is a certificate with more members, so the certificate's schema must not forbid them, as reading one alone does.
fn open_certificate(document: &mut utoipa::openapi::OpenApi) {
    let schemas = document.components.as_mut().map(|components| &mut components.schemas);
    if let Some(RefOr::T(Schema::Object(certificate))) = schemas.and_then(|schemas| schemas.get_mut("Certificate")) {
        certificate.additional_properties = None;
    }
}

/// This document.
#[utoipa::path(get, path = "/v1/openapi.json", tag = "health", operation_id = "get_openapi", responses((status = 200, description = "OpenAPI 3.1.")))]
pub async fn get(TakesJson: TakesJson) -> Result<Response<Body>, Problem> {
    let text = document().map_err(|error| Problem::internal(&error))?;
    Ok(json(StatusCode::OK, text))
}

/// By hand: a number or an array, which the derivation has no words for.
impl PartialSchema for LeakageDocument {
    fn schema() -> RefOr<Schema> {
        let number = || ObjectBuilder::new().schema_type(Type::Number).minimum(Some(0)).maximum(Some(1));
        OneOfBuilder::new()
            .description(Some(
                "Leakage tolerance: one number for all preparations, one per preparation, a leakage budget as `POST /v1/leakage` takes it, or the \
                 digest of one that is kept.",
            ))
            .item(number())
            .item(ArrayBuilder::new().items(number()))
            .item(ObjectBuilder::new().schema_type(Type::Object))
            .item(ObjectBuilder::new().schema_type(Type::String).pattern(Some("^sha256:[0-9a-f]{64}$")))
            .into()
    }
}

impl ToSchema for LeakageDocument {
    fn name() -> std::borrow::Cow<'static, str> {
        "Leakage".into()
    }
}
