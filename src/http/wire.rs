//! What is taken from requests, and the shapes of answers that several resources share.

use std::{fmt::Display, str::FromStr, sync::Arc};

use axum::{
    body::{Body, Bytes, to_bytes},
    extract::{FromRequest, FromRequestParts, Path, Query as Pairs, Request},
    http::{HeaderMap, HeaderName, Response, StatusCode, Uri, header, request::Parts},
    response::IntoResponse,
};
use serde::de::DeserializeOwned;
use uuid::Uuid;

use super::{
    access::Sees,
    cursor,
    intake::too_large,
    problem::{Culprit, Problem},
};
use crate::{
    fault,
    profile::RigName,
    service::Service,
    submission::{IdempotencyKey, NoKey},
};

/// How many items a page has unless asked for otherwise, and at most.
const PAGE: u32 = 50;
pub const LONGEST_PAGE: u32 = 200;

/// The `{rig}` of a path.
pub struct RigPath(pub RigName);

impl<S: Send + Sync> FromRequestParts<S> for RigPath {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, state: &S) -> Result<Self, Problem> {
        let Path(text) =
            Path::<String>::from_request_parts(parts, state).await.map_err(|error| Problem::parameter("rig", error.body_text()))?;
        RigName::try_from(text).map(Self).map_err(|error| Problem::parameter("rig", error.to_string()))
    }
}

/// The `{id}` of a certification's path, if the caller may see it. What is no identifier names nothing, and what may not be seen is not
/// there.
pub struct CertificationPath(pub Uuid);

impl FromRequestParts<Arc<Service>> for CertificationPath {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, service: &Arc<Service>) -> Result<Self, Problem> {
        let id = identifier(parts, service).await.ok_or_else(no_certification)?;
        let Sees(scope) = Sees::from_request_parts(parts, service).await?;
        if service.may_see(id, &scope).await? { Ok(Self(id)) } else { Err(no_certification()) }
    }
}

/// The `{id}` of a commitment's path. What is no identifier names nothing.
pub struct CommitmentPath(pub Uuid);

impl<S: Send + Sync> FromRequestParts<S> for CommitmentPath {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, state: &S) -> Result<Self, Problem> {
        identifier(parts, state).await.map(Self).ok_or_else(no_commitment)
    }
}

/// The `{digest}` of a budget's path, as it stands there.
pub struct BudgetPath(pub String);

impl<S: Send + Sync> FromRequestParts<S> for BudgetPath {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, state: &S) -> Result<Self, Problem> {
        let Path(text) =
            Path::<String>::from_request_parts(parts, state).await.map_err(|error| Problem::parameter("digest", error.body_text()))?;
        Ok(Self(text))
    }
}

/// The path's identifier, in the one way that it is written.
async fn identifier<S: Send + Sync>(parts: &mut Parts, state: &S) -> Option<Uuid> {
    let Path(text) = Path::<String>::from_request_parts(parts, state).await.ok()?;
    Uuid::try_parse(&text).ok().filter(|id| id.to_string() == text)
}

pub fn no_certification() -> Problem {
    Problem::not_found("There is no certification of this identifier.")
}

pub fn no_commitment() -> Problem {
    Problem::not_found("There is no commitment of this identifier.")
}

pub fn no_rig() -> Problem {
    Problem::not_found("There is no rig of this name.")
}

/// Query parameters that were not asked after yet.
pub struct Parameters(Vec<(String, String)>);

impl Parameters {
    fn of(uri: &Uri) -> Result<Self, Problem> {
        let Pairs(pairs) = Pairs::try_from_uri(uri).map_err(|error| Problem::malformed(error.body_text()))?;
        Ok(Self(pairs))
    }

    /// The text of a parameter, which may be given once at most.
    pub fn text(&mut self, name: &str) -> Result<Option<String>, Problem> {
        let Some(at) = self.0.iter().position(|(key, _)| key == name) else { return Ok(None) };
        let (_, value) = self.0.swap_remove(at);
        if self.0.iter().any(|(key, _)| key == name) {
            return Err(Problem::parameter(name, format!("The parameter {name} is given twice.")));
        }
        Ok(Some(value))
    }

    pub fn value<T: FromStr<Err: Display>>(&mut self, name: &str) -> Result<Option<T>, Problem> {
        let read = |text: String| text.parse().map_err(|error| Problem::parameter(name, format!("{name}: {error}")));
        self.text(name)?.map(read).transpose()
    }

    /// A parameter that is written as the member of the same name is in JSON.
    pub fn json<T: DeserializeOwned>(&mut self, name: &str) -> Result<Option<T>, Problem> {
        let read =
            |text: String| fault::parse(text.as_bytes()).map_err(|fault| Problem::parameter(name, format!("{name}: {}", fault.detail)));
        self.text(name)?.map(read).transpose()
    }

    /// A whole number from 1 to `most`.
    pub fn count(&mut self, name: &str, most: u32) -> Result<Option<u32>, Problem> {
        match self.value(name)? {
            Some(number) if !(1..=most).contains(&number) => {
                Err(Problem::parameter(name, format!("{name} is from 1 to {most}, is {number}.")))
            }
            number => Ok(number),
        }
    }

    pub fn limit(&mut self) -> Result<u32, Problem> {
        Ok(self.count("limit", LONGEST_PAGE)?.unwrap_or(PAGE))
    }

    /// Where a page begins; `kind` keeps the cursors of one collection out of another.
    pub fn cursor<T: FromStr + Display>(&mut self, kind: &str) -> Result<Option<T>, Problem> {
        let wrong = || Problem::parameter("cursor", "This is no cursor of this collection; take it from `next` as it is.");
        self.text("cursor")?.map(|text| cursor::read(kind, &text).ok_or_else(wrong)).transpose()
    }

    fn finish(self) -> Result<(), Problem> {
        match self.0.into_iter().next() {
            Some((name, _)) => Err(Problem::parameter(&name, format!("There is no parameter {name:?} here."))),
            None => Ok(()),
        }
    }
}

/// What a resource takes from the query.
pub trait FromParameters: Sized {
    fn from_parameters(parameters: &mut Parameters) -> Result<Self, Problem>;
}

impl FromParameters for () {
    fn from_parameters(_: &mut Parameters) -> Result<Self, Problem> {
        Ok(())
    }
}

/// The whole query; a parameter that the resource does not know is turned away.
pub struct Query<T>(pub T);

impl<T: FromParameters, S: Send + Sync> FromRequestParts<S> for Query<T> {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        let mut parameters = Parameters::of(&parts.uri)?;
        let query = T::from_parameters(&mut parameters)?;
        parameters.finish()?;
        Ok(Self(query))
    }
}

/// The name under which a batch can be sent again.
pub struct Key(pub IdempotencyKey);

impl<S: Send + Sync> FromRequestParts<S> for Key {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        const NAME: &str = "Idempotency-Key";
        let mut values = parts.headers.get_all("idempotency-key").iter();
        let (Some(value), None) = (values.next(), values.next()) else {
            let detail = "Send one Idempotency-Key with each batch, the same each time the batch is sent: then it is certified once.";
            return Err(Problem::header(NAME, detail));
        };
        let key = value.to_str().map_err(|_| NoKey).and_then(IdempotencyKey::try_from);
        key.map(Self).map_err(|error| Problem::header(NAME, error.to_string()))
    }
}

/// Media types that bodies come in.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Media {
    Json,
    Csv,
}

impl Media {
    fn of(headers: &HeaderMap) -> Option<Self> {
        let text = headers.get(header::CONTENT_TYPE)?.to_str().ok()?;
        let mut parts = text.split(';').map(str::trim);
        let media = match parts.next()?.to_ascii_lowercase().as_str() {
            "application/json" => Self::Json,
            "text/csv" => Self::Csv,
            _ => return None,
        };
        // Any other parameter changes nothing that matters here, except a character set that is not ours.
        let charset = parts.filter_map(|part| part.split_once('=')).find(|(name, _)| name.eq_ignore_ascii_case("charset"));
        let ours = charset.is_none_or(|(_, charset)| charset.trim_matches('"').eq_ignore_ascii_case("utf-8"));
        ours.then_some(media)
    }
}

/// A body of at most `LIMIT` bytes, which [`super::intake`] has let in.
pub struct Payload<const LIMIT: usize> {
    pub media: Media,
    pub bytes: Bytes,
}

impl<const LIMIT: usize, S: Send + Sync> FromRequest<S> for Payload<LIMIT> {
    type Rejection = Problem;

    async fn from_request(request: Request, _: &S) -> Result<Self, Problem> {
        let unsupported = |detail: &str| Problem::new(StatusCode::UNSUPPORTED_MEDIA_TYPE, detail);
        let headers = request.headers();
        if headers.contains_key(header::CONTENT_ENCODING) {
            return Err(
                unsupported("Bodies are taken as they are, without a content encoding.").blaming(Culprit::Header("Content-Encoding"))
            );
        }
        let Some(media) = Media::of(headers) else {
            let detail = "The body is application/json, in UTF-8; a batch may also be text/csv.";
            return Err(unsupported(detail).blaming(Culprit::Header("Content-Type")));
        };
        // The body has arrived already, and is not much longer than the longest that is taken.
        let bytes = to_bytes(request.into_body(), usize::MAX).await.map_err(|_| Problem::malformed("The body did not arrive whole."))?;
        if bytes.len() > LIMIT {
            return Err(too_large(LIMIT));
        }
        Ok(Self { media, bytes })
    }
}

impl<const LIMIT: usize> Payload<LIMIT> {
    /// The body as a JSON object; `what` begins the sentence that is answered to any other kind of body.
    pub fn object<T: DeserializeOwned>(&self, what: &str) -> Result<T, Problem> {
        if self.media != Media::Json {
            let detail = format!("{what} is application/json.");
            return Err(Problem::new(StatusCode::UNSUPPORTED_MEDIA_TYPE, detail).blaming(Culprit::Header("Content-Type")));
        }
        fault::parse_object(&self.bytes).map_err(|fault| Problem::body(StatusCode::BAD_REQUEST, fault))
    }
}

/// A JSON answer from a text that is JSON already.
pub fn json(status: StatusCode, text: impl Into<Body>) -> Response<Body> {
    (status, [(header::CONTENT_TYPE, "application/json")], text.into()).into_response()
}

/// A page of a collection from the texts of its items.
pub fn page(items: impl Iterator<Item = String>, next: Option<&str>) -> String {
    let items: Vec<String> = items.collect();
    let next = next.map_or_else(|| "null".into(), |cursor| format!("\"{cursor}\""));
    format!("{{\"items\":[{}],\"next\":{next}}}", items.join(","))
}

/// Documents by their digests, as an object; each is a text that goes in as it was kept, so that its digest still holds.
pub fn by_digest(documents: Vec<(String, String)>) -> String {
    let members: Vec<String> = documents.into_iter().map(|(digest, document)| format!("\"{digest}\":{document}")).collect();
    format!("{{{}}}", members.join(","))
}

/// The header that leads to the next page, for clients that follow links.
pub fn link_next(target: &str) -> [(HeaderName, String); 1] {
    [(header::LINK, format!("<{target}>; rel=\"next\""))]
}
