//! `/v1/ledger`: the tree over everything that is recorded, for auditors.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::{FromRequestParts, Path, State},
    http::{Response, StatusCode, header, request::Parts},
    response::IntoResponse,
};
use serde::Serialize;
use utoipa::{IntoParams, ToSchema};

use super::{
    negotiation::TakesJson,
    problem::{Culprit, Problem, ProblemDocument},
    wire::{FromParameters, Parameters, Query, json},
};
use crate::{
    ledger::{
        proofs::{Proof, hexadecimal},
        tree::leaf_hash,
    },
    service::Service,
};

fn text(text: String) -> Response<Body> {
    ([(header::CONTENT_TYPE, "text/plain; charset=utf-8")], text).into_response()
}

/// Number of entries and root of the ledger's tree, signed.
///
/// A signed note (C2SP signed-note) with a checkpoint (C2SP tlog-checkpoint) of everything that was recorded when it was asked for.
/// What was signed is never taken back: of two checkpoints, one is the beginning of the other, and the ledger proves it. Keep checkpoints where
/// the operator cannot reach them; that is what they are for.
#[utoipa::path(
    get, path = "/v1/ledger/checkpoint", tag = "ledger", operation_id = "get_checkpoint",
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    responses(
        (status = 200, description = "A signed note.", body = String, content_type = "text/plain"),
        (status = 503, description = "The ledger is not in order, and `detail` says where; or it is still being gone through.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn checkpoint(Query(()): Query<()>, State(service): State<Arc<Service>>) -> Result<Response<Body>, Problem> {
    Ok(text(service.checkpoint().await?))
}

/// The public key of the checkpoints, as `name+identifier+key` (C2SP signed-note).
///
/// A key that is asked for here proves nothing to whoever does not trust the service; learn it once, by another way.
#[utoipa::path(
    get, path = "/v1/ledger/key", tag = "ledger", operation_id = "get_ledger_key",
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    responses((status = 200, description = "One line.", body = String, content_type = "text/plain"))
)]
pub async fn key(Query(()): Query<()>, State(service): State<Arc<Service>>) -> Response<Body> {
    text(format!("{}\n", service.ledger_key()))
}

/// The `{index}` of a path. What is no number names nothing.
pub struct IndexPath(u64);

impl<S: Send + Sync> FromRequestParts<S> for IndexPath {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, state: &S) -> Result<Self, Problem> {
        let text = Path::<String>::from_request_parts(parts, state).await.map(|Path(text)| text).ok();
        // One way to write a number, so that an entry has one address.
        let index = text.and_then(|text| text.parse().ok().filter(|index: &u64| index.to_string() == text));
        index.map(Self).ok_or_else(no_entry)
    }
}

fn no_entry() -> Problem {
    Problem::not_found("The ledger has no entry of this index.")
}

/// One entry, byte for byte as its leaf was hashed: `(printf '\0'; cat entry) | sha256sum` is the leaf's hash.
#[utoipa::path(
    get, path = "/v1/ledger/entries/{index}", tag = "ledger", operation_id = "get_ledger_entry",
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    params(("index" = u64, Path, description = "Place in the tree, from 0.")),
    responses(
        (status = 200, description = "The entry.", body = LedgerEntry),
        (status = 404, description = "No such entry.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn entry(
    IndexPath(index): IndexPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let line = service.entry(index).await?.ok_or_else(no_entry)?;
    Ok(json(StatusCode::OK, line))
}

/// An entry of the ledger. `body` holds what was recorded; a member `…_sha256` is the SHA-256, in hexadecimal, of a text that is kept elsewhere.
#[derive(ToSchema)]
#[expect(dead_code, reason = "describes what is kept as text")]
pub struct LedgerEntry {
    /// Version of this shape.
    version: u32,
    index: u64,
    kind: String,
    /// Which of its kind: an identifier, or `rig/version` of a profile.
    subject: String,
    #[schema(format = DateTime)]
    recorded_at: String,
    body: serde_json::Map<String, serde_json::Value>,
}

/// That an entry is in a tree.
#[derive(Serialize, ToSchema)]
pub struct InclusionProof {
    index: u64,
    size: u64,
    /// Hash of the entry.
    leaf: String,
    /// Root of the tree of that size.
    root: String,
    /// Hashes beside the way from the leaf to the root, in hexadecimal.
    proof: Vec<String>,
}

/// That a tree is the beginning of another.
#[derive(Serialize, ToSchema)]
pub struct ConsistencyProof {
    from: u64,
    to: u64,
    /// Root of the larger tree.
    root: String,
    /// Hashes as in RFC 6962, section 2.1.2, in hexadecimal.
    proof: Vec<String>,
}

fn needed(parameters: &mut Parameters, name: &'static str) -> Result<u64, Problem> {
    parameters.value(name)?.ok_or_else(|| Problem::parameter(name, format!("Say {name}.")))
}

fn out_of_range(name: &str, detail: String) -> Problem {
    Problem::new(StatusCode::UNPROCESSABLE_ENTITY, detail).blaming(Culprit::Parameter(name.to_owned()))
}

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct InclusionQuery {
    /// The entry.
    index: u64,
    /// Size of the tree, more than `index`.
    #[param(minimum = 1)]
    size: u64,
}

impl FromParameters for InclusionQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        Ok(Self { index: needed(parameters, "index")?, size: needed(parameters, "size")? })
    }
}

/// Proves that an entry is in the tree of a size (RFC 6962, section 2.1.1).
#[utoipa::path(
    get, path = "/v1/ledger/proofs/inclusion", tag = "ledger", operation_id = "get_inclusion_proof", params(InclusionQuery),
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    responses(
        (status = 200, description = "The proof.", body = InclusionProof),
        (status = 400, description = "A parameter is missing, unknown or no number.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "The index is not below the size, or the ledger has fewer entries.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn inclusion(
    Query(InclusionQuery { index, size }): Query<InclusionQuery>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    if index >= size {
        return Err(out_of_range("index", format!("A tree of {size} entries has no entry {index}.")));
    }
    let Some(Proof { root, hashes }) = service.inclusion(index, size).await? else { return Err(too_large("size", size, &service).await?) };
    let leaf = service.entry(index).await?.ok_or_else(no_entry)?;
    let leaf = hex::encode(leaf_hash(leaf.as_bytes()));
    document(&InclusionProof { index, size, leaf, root: hex::encode(root), proof: hexadecimal(&hashes) })
}

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct ConsistencyQuery {
    /// Size of the smaller tree.
    #[param(minimum = 1)]
    from: u64,
    /// Size of the larger tree.
    #[param(minimum = 1)]
    to: u64,
}

impl FromParameters for ConsistencyQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        Ok(Self { from: needed(parameters, "from")?, to: needed(parameters, "to")? })
    }
}

/// Proves that the tree of one size is the beginning of that of another (RFC 6962, section 2.1.2).
#[utoipa::path(
    get, path = "/v1/ledger/proofs/consistency", tag = "ledger", operation_id = "get_consistency_proof", params(ConsistencyQuery),
    security(("token" = ["operator"]), ("token" = ["auditor"])),
    responses(
        (status = 200, description = "The proof.", body = ConsistencyProof),
        (status = 400, description = "A parameter is missing, unknown or no number.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 422, description = "`from` is 0 or above `to`, or the ledger has fewer entries.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn consistency(
    Query(ConsistencyQuery { from, to }): Query<ConsistencyQuery>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    if from == 0 || from > to {
        return Err(out_of_range("from", format!("from is from 1 to {to}, is {from}. The empty tree is the beginning of every other.")));
    }
    let Some(Proof { root, hashes }) = service.consistency(from, to).await? else { return Err(too_large("to", to, &service).await?) };
    document(&ConsistencyProof { from, to, root: hex::encode(root), proof: hexadecimal(&hashes) })
}

async fn too_large(name: &str, size: u64, service: &Service) -> Result<Problem, Problem> {
    let entries = service.entries().await?;
    Ok(out_of_range(name, format!("The ledger has {entries} entries, fewer than {size}.")))
}

fn document(document: &impl Serialize) -> Result<Response<Body>, Problem> {
    Ok(json(StatusCode::OK, serde_json::to_string(document).map_err(|error| Problem::internal(&error))?))
}
