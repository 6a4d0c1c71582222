//! `/v1/certifications`: what was certified, and what was refused.

use std::sync::Arc;

use axum::{
    body::Body,
    extract::State,
    http::{Response, StatusCode, header},
    response::IntoResponse,
};
use serde::Serialize;
use utoipa::{IntoParams, ToSchema};

use super::{
    access::Sees,
    cursor,
    negotiation::{Offer, TakesJson, TakesTable},
    problem::{Problem, ProblemDocument},
    wire::{CertificationPath, FromParameters, Parameters, Query, by_digest, json, link_next, no_certification, page},
};
use crate::{
    bundle::Standing,
    certificate::Verdict,
    clock::Stamp,
    commitment::Commitment,
    ledger::{
        history::{Filter, Page},
        rows::Recorded,
    },
    profile::RigName,
    record::{Record, Summary},
    service::{Evidence, Exported, Service},
    witness::witness::Witness,
};

const CURSOR: &str = "certifications:";

/// One record, byte for byte as it was first answered.
#[utoipa::path(
    get, path = "/v1/certifications/{id}", tag = "certifications", operation_id = "get_certification",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    params(("id" = String, Path, description = "Identifier of the certification.")),
    responses(
        (status = 200, description = "The record.", body = Record),
        (status = 404, description = "No such certification.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn get(
    CertificationPath(id): CertificationPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let record = service.record(id).await?.ok_or_else(no_certification)?;
    Ok(json(StatusCode::OK, record))
}

/// What a certification rests on: its witnesses, or its commitment and the commitment's witnesses.
#[derive(Serialize, ToSchema)]
pub struct Witnesses {
    /// Identifier of the certification.
    certification: uuid::Uuid,
    /// Rounds with memory only: the commitment that the certification rests on.
    #[serde(skip_serializing_if = "Option::is_none")]
    commitment: Option<Commitment>,
    /// Each witness under its `sha256:` digest; exact integers, enough to check the bound offline.
    #[schema(value_type = std::collections::BTreeMap<String, Object>)]
    witnesses: std::collections::BTreeMap<String, Witness>,
}

/// What a certification rests on, enough to check it offline.
#[utoipa::path(
    get, path = "/v1/certifications/{id}/witness", tag = "certifications", operation_id = "get_witness",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    params(("id" = String, Path, description = "Identifier of the certification.")),
    responses(
        (status = 200, description = "The witnesses, by digest.", body = Witnesses),
        (status = 404, description = "No such certification.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn witness(
    CertificationPath(id): CertificationPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let evidence = service.evidence(id).await?.ok_or_else(no_certification)?;
    Ok(json(StatusCode::OK, format!("{{\"certification\":\"{id}\",{}}}", members(evidence))))
}

/// What `verify` reads: a record, what it rests on, and where it stands in the ledger.
#[derive(Serialize, ToSchema)]
pub struct ExportedBundle {
    record: Record,
    /// Rounds with memory only: the commitment that the certification rests on.
    #[serde(skip_serializing_if = "Option::is_none")]
    commitment: Option<Commitment>,
    #[schema(value_type = std::collections::BTreeMap<String, Object>)]
    witnesses: std::collections::BTreeMap<String, Witness>,
    ledger: Standing,
}

/// A record with everything that is needed to check it offline: its witnesses, and the proof that it is in the signed ledger.
///
/// Keep the answer as it is: `bitassay verify FILE --key KEY` reads it. The record's place in the ledger is the `index` of `ledger.entry`.
#[utoipa::path(
    get, path = "/v1/certifications/{id}/bundle", tag = "certifications", operation_id = "get_bundle",
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    params(("id" = String, Path, description = "Identifier of the certification.")),
    responses(
        (status = 200, description = "The bundle.", body = ExportedBundle),
        (status = 404, description = "No such certification.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 503, description = "The ledger is not in order, or is still being gone through.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn bundle(
    CertificationPath(id): CertificationPath,
    Query(()): Query<()>,
    TakesJson: TakesJson,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let Exported { record, evidence, standing } = service.exported(id).await?.ok_or_else(no_certification)?;
    let standing = serde_json::to_string(&standing).map_err(|error| Problem::internal(&error))?;
    Ok(json(StatusCode::OK, format!("{{\"record\":{record},{},\"ledger\":{standing}}}", members(evidence))))
}

/// The documents are texts that were kept as they are, so that their digests still hold.
fn members(Evidence { commitment, witnesses }: Evidence) -> String {
    let commitment = commitment.map_or_else(String::new, |document| format!("\"commitment\":{document},"));
    format!("{commitment}\"witnesses\":{}", by_digest(witnesses))
}

#[derive(IntoParams)]
#[into_params(parameter_in = Query)]
pub struct HistoryQuery {
    /// Only this rig's.
    #[param(value_type = Option<String>)]
    rig: Option<RigName>,
    /// Only of this verdict.
    #[param(value_type = Option<Verdict>)]
    verdict: Option<Verdict>,
    /// Only those recorded at this time or later, RFC 3339.
    #[param(value_type = Option<String>, format = DateTime)]
    since: Option<Stamp>,
    /// Only those recorded before this time, RFC 3339.
    #[param(value_type = Option<String>, format = DateTime)]
    until: Option<Stamp>,
    /// Where the page begins: the `next` of the page before.
    #[param(value_type = Option<String>)]
    cursor: Option<u64>,
    /// Items on the page.
    #[param(minimum = 1, maximum = 200, default = 50, value_type = Option<u32>)]
    limit: u32,
}

impl FromParameters for HistoryQuery {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem> {
        let rig = parameters.text("rig")?.map(RigName::try_from).transpose();
        let verdict = match parameters.text("verdict")?.as_deref() {
            None => None,
            Some("certified") => Some(Verdict::Certified),
            Some("estimate") => Some(Verdict::Estimate),
            Some("refused") => Some(Verdict::Refused),
            Some(_) => return Err(Problem::parameter("verdict", "A verdict is certified, estimate or refused.")),
        };
        Ok(Self {
            rig: rig.map_err(|error| Problem::parameter("rig", error.to_string()))?,
            verdict,
            since: parameters.value("since")?,
            until: parameters.value("until")?,
            cursor: parameters.cursor(CURSOR)?,
            limit: parameters.limit()?,
        })
    }
}

impl HistoryQuery {
    /// Path and query of the page that begins at a cursor.
    fn target(&self, next: &str) -> String {
        let mut target = format!("/v1/certifications?limit={}", self.limit);
        let word = self.verdict.map(|verdict| match verdict {
            Verdict::Certified => "certified".to_owned(),
            Verdict::Estimate => "estimate".to_owned(),
            Verdict::Refused => "refused".to_owned(),
        });
        let rest = [
            ("rig", self.rig.as_ref().map(RigName::to_string)),
            ("verdict", word),
            ("since", self.since.map(|time| time.to_string())),
            ("until", self.until.map(|time| time.to_string())),
            ("cursor", Some(next.to_owned())),
        ];
        // None of these texts has a character that a query would have to escape.
        for (name, value) in rest {
            if let Some(value) = value {
                target.push_str(&format!("&{name}={value}"));
            }
        }
        target
    }
}

/// Records, newest first.
#[derive(Serialize, ToSchema)]
pub struct HistoryPage {
    items: Vec<Record>,
    /// Where the next page begins; `null` at the end.
    next: Option<String>,
}

/// The history, newest first. Records that arrive meanwhile do not move the pages that follow.
#[utoipa::path(
    get, path = "/v1/certifications", tag = "certifications", operation_id = "list_certifications", params(HistoryQuery),
    security(("token" = ["rig"]), ("token" = ["operator"]), ("token" = ["auditor"])),
    responses(
        (status = 200, description = "One page. As CSV, one row a record; the `Link` header leads on.", headers(("Link" = String)),
            content((HistoryPage = "application/json"), (String = "text/csv"))),
        (status = 400, description = "A parameter is unknown or out of range.", body = ProblemDocument, content_type = "application/problem+json"),
        (status = 406, description = "The answer comes as JSON or CSV only.", body = ProblemDocument, content_type = "application/problem+json"),
    )
)]
pub async fn list(
    Query(query): Query<HistoryQuery>,
    sees: Sees,
    TakesTable(offer): TakesTable,
    State(service): State<Arc<Service>>,
) -> Result<Response<Body>, Problem> {
    let HistoryQuery { rig, verdict, since, until, cursor: before, limit } = &query;
    let within = sees.within(rig.as_ref())?;
    let filter = Filter { rig: rig.clone(), within, verdict: *verdict, since: *since, until: *until, before: *before };
    let Page { items, more } = service.history(&filter, *limit).await?;
    let next = items.last().filter(|_| more).map(|last| cursor::write(CURSOR, last.entry));
    let link = next.as_deref().map(|next| link_next(&query.target(next)));
    let vary = [(header::VARY, "Accept")];
    let body = match offer {
        // A picture is not among what this route offers.
        Offer::Json | Offer::Svg => json(StatusCode::OK, page(items.into_iter().map(|item| item.record), next.as_deref())),
        Offer::Csv => {
            let table = table(&items).map_err(|error| Problem::internal(error.as_ref()))?;
            (StatusCode::OK, [(header::CONTENT_TYPE, "text/csv; charset=utf-8; header=present")], table).into_response()
        }
    };
    Ok((link, vary, body).into_response())
}

const COLUMNS: [&str; 14] = [
    "id",
    "rig",
    "profile_version",
    "recorded_at",
    "started_at",
    "ended_at",
    "verdict",
    "reason",
    "total_rounds",
    "certified_bits",
    "bits_per_round",
    "failure",
    "counts_digest",
    "version",
];

/// Heads of records as CSV, numbers as they stand in the records.
fn table(items: &[Recorded]) -> Result<Vec<u8>, Box<dyn std::error::Error>> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
    writer.write_record(COLUMNS)?;
    for item in items {
        let row: Summary = serde_json::from_str(&item.record)?;
        let failure = row.failure.map(|failure| failure.total);
        writer.serialize((
            row.id,
            row.rig,
            row.profile_version,
            row.recorded_at,
            row.started_at,
            row.ended_at,
            row.verdict,
            row.reason,
            row.total_rounds,
            row.certified_bits,
            row.bits_per_round,
            failure,
            row.counts_digest,
            row.version,
        ))?;
    }
    Ok(writer.into_inner()?)
}
