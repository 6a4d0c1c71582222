//! Conditional requests (RFC 9110, section 13) on resources whose entity tag is a version number.

use axum::{
    extract::FromRequestParts,
    http::{HeaderMap, HeaderName, header, request::Parts},
};

use super::problem::Problem;
use crate::ledger::writer::Expectation;

/// The entity tag of a version.
pub fn entity_tag(version: u64) -> String {
    format!("\"{version}\"")
}

/// What a header of entity tags says.
#[derive(Debug, Clone, PartialEq, Eq)]
enum Tags {
    Any,
    Listed(Vec<Tag>),
}

#[derive(Debug, Clone, PartialEq, Eq)]
struct Tag {
    weak: bool,
    /// `None` for a tag that no version has.
    version: Option<u64>,
}

impl Tag {
    fn read(text: &str) -> Option<Self> {
        let (weak, quoted) = text.strip_prefix("W/").map_or((false, text), |rest| (true, rest));
        let opaque = quoted.strip_prefix('"')?.strip_suffix('"')?;
        let version = opaque.parse().ok().filter(|version: &u64| version.to_string() == opaque);
        (!opaque.contains('"')).then_some(Self { weak, version })
    }
}

fn tags(headers: &HeaderMap, name: HeaderName, shown: &'static str) -> Result<Option<Tags>, Problem> {
    let lines: Vec<&str> = headers.get_all(&name).iter().map(|value| value.to_str().unwrap_or("?")).collect();
    if lines.is_empty() {
        return Ok(None);
    }
    let text = lines.join(",");
    if text.trim() == "*" {
        return Ok(Some(Tags::Any));
    }
    let listed: Option<Vec<Tag>> = text.split(',').map(|tag| Tag::read(tag.trim())).collect();
    let listed = listed.ok_or_else(|| Problem::header(shown, format!("{shown} is * or entity tags, such as \"3\".")))?;
    Ok(Some(Tags::Listed(listed)))
}

/// What a write expects, by `If-Match` and `If-None-Match`.
pub struct Expects(pub Expectation);

impl<S: Send + Sync> FromRequestParts<S> for Expects {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        let matching = tags(&parts.headers, header::IF_MATCH, "If-Match")?;
        let other = tags(&parts.headers, header::IF_NONE_MATCH, "If-None-Match")?;
        match (matching, other) {
            (None, None) => Ok(Self(Expectation::Unstated)),
            (Some(Tags::Any), None) => Ok(Self(Expectation::Present)),
            // If-Match compares strongly: a weak tag matches nothing.
            (Some(Tags::Listed(tags)), None) => {
                Ok(Self(Expectation::Versions(tags.into_iter().filter(|tag| !tag.weak).filter_map(|tag| tag.version).collect())))
            }
            (None, Some(Tags::Any)) => Ok(Self(Expectation::Absent)),
            _ => Err(Problem::header("If-None-Match", "A profile is put with If-Match, or with If-None-Match: *, or with neither.")),
        }
    }
}

/// The versions that the client has already, by `If-None-Match`.
pub struct Holds(Option<Tags>);

impl Holds {
    pub fn version(&self, version: u64) -> bool {
        match &self.0 {
            None => false,
            Some(Tags::Any) => true,
            Some(Tags::Listed(tags)) => tags.iter().any(|tag| tag.version == Some(version)),
        }
    }
}

impl<S: Send + Sync> FromRequestParts<S> for Holds {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        tags(&parts.headers, header::IF_NONE_MATCH, "If-None-Match").map(Self)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn tags_are_read_strictly() {
        assert_eq!(Tag::read("\"3\""), Some(Tag { weak: false, version: Some(3) }));
        assert_eq!(Tag::read("W/\"3\""), Some(Tag { weak: true, version: Some(3) }));
        assert_eq!(Tag::read("\"03\""), Some(Tag { weak: false, version: None }));
        assert_eq!(Tag::read("\"x\""), Some(Tag { weak: false, version: None }));
        for text in ["3", "\"3", "w/\"3\"", "\"", ""] {
            assert_eq!(Tag::read(text), None, "{text}");
        }
    }
}
