//! The interface described to machines: OpenAPI 3.1, generated from the handlers.

use std::sync::OnceLock;

use axum::{
    body::Body,
    http::{Response, StatusCode},
};
use utoipa::{
    OpenApi, PartialSchema, ToSchema,
    openapi::{
        ArrayBuilder, Content, HeaderBuilder, ObjectBuilder, OneOfBuilder, Ref, RefOr, ResponseBuilder, Schema,
        schema::Type,
        security::{Http, HttpAuthScheme, SecurityRequirement, SecurityScheme},
    },
};

use super::{
    access::SCHEME,
    negotiation::TakesJson,
    problem::{PROBLEM_JSON, Problem},
    router,
    wire::json,
};
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
        (name = "forecasts", description = "What would be certified."),
        (name = "health", description = "For whoever watches over the process."),
    ),
    modifiers(&Tokens),
)]
pub(super) struct Frame;

/// Who is asked for a token, and how.
struct Tokens;

impl utoipa::Modify for Tokens {
    fn modify(&self, document: &mut utoipa::openapi::OpenApi) {
        let description = "A token that `bitassay token create` printed. An operation names the roles that may use it, one alternative each; a rig's \
                           token is for the rigs it was created for, and sees nothing of others. As long as no token was ever created, the service \
                           listens on loopback only and asks for none.";
        let mut bearer = Http::new(HttpAuthScheme::Bearer);
        bearer.description = Some(description.into());
        document.components.get_or_insert_default().add_security_scheme(SCHEME, SecurityScheme::Http(bearer));
    }
}

/// The document as text, indented, as it is kept in `api/openapi.json`.
///
/// # Errors
/// The serialiser's.
pub fn document() -> Result<String, serde_json::Error> {
    let (_, mut document) = router::routes().split_for_parts();
    open_certificate(&mut document);
    tell_refusals(&mut document);
    serde_json::to_string_pretty(&document).map(|text| text + "\n")
}

/// What any operation may answer besides what it says itself: what its guard answers, and whatever else is a problem.
fn tell_refusals(document: &mut utoipa::openapi::OpenApi) {
    let problem = |description: &str| {
        let content = Content::new(Some(Ref::from_schema_name("Problem")));
        ResponseBuilder::new().description(description).content(PROBLEM_JSON, content)
    };
    let header = |kind| HeaderBuilder::new().schema(Some(ObjectBuilder::new().schema_type(kind))).build();
    let challenge = "WWW-Authenticate";
    let unknown = problem("A token is needed, and none was sent, or one that is not taken.").header(challenge, header(Type::String));
    let forbidden = problem("The token is not for this, or not for this rig.").header(challenge, header(Type::String));
    let too_many = problem("The token, or the peer without one, sent too many requests.").header("Retry-After", header(Type::Integer));
    let refusals = [("401", unknown.build()), ("403", forbidden.build()), ("429", too_many.build())];
    let other = problem("Anything else that went wrong.").build();
    let items = document.paths.paths.values_mut();
    let operations = items.flat_map(|item| [&mut item.get, &mut item.put, &mut item.post, &mut item.delete, &mut item.patch]).flatten();
    for operation in operations {
        let public = operation.security.as_ref().is_some_and(|alternatives| alternatives.contains(&SecurityRequirement::default()));
        let told = if public { &[][..] } else { &refusals[..] };
        let all = told.iter().cloned().chain([("default", other.clone())]);
        for (status, response) in all {
            operation.responses.responses.entry(status.into()).or_insert(RefOr::T(response));
        }
    }
}

/// A record is a certificate with more members, so the certificate's schema must not forbid them, as reading one alone does.
fn open_certificate(document: &mut utoipa::openapi::OpenApi) {
    let schemas = document.components.as_mut().map(|components| &mut components.schemas);
    if let Some(RefOr::T(Schema::Object(certificate))) = schemas.and_then(|schemas| schemas.get_mut("Certificate")) {
        certificate.additional_properties = None;
    }
}

/// This document.
#[utoipa::path(get, path = "/v1/openapi.json", tag = "health", operation_id = "get_openapi", security(()), responses((status = 200, description = "OpenAPI 3.1.")))]
pub async fn get(TakesJson: TakesJson) -> Result<Response<Body>, Problem> {
    // The same each time: written once.
    static TEXT: OnceLock<String> = OnceLock::new();
    if TEXT.get().is_none() {
        // Whoever comes second finds the same text there.
        let _ = TEXT.set(document().map_err(|error| Problem::internal(&error))?);
    }
    Ok(json(StatusCode::OK, TEXT.get().map_or("", String::as_str)))
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
