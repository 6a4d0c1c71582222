//! Which media type an answer takes: the client's `Accept` (RFC 9110, section 12.5.1) against what there is.

use axum::{
    extract::FromRequestParts,
    http::{HeaderMap, StatusCode, header, request::Parts},
};

use super::problem::{Culprit, Problem};

/// Media types of answers, in the order in which they are preferred if the client does not mind.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Offer {
    Json,
    Csv,
    Svg,
}

impl Offer {
    fn name(self) -> (&'static str, &'static str) {
        match self {
            Self::Json => ("application", "json"),
            Self::Csv => ("text", "csv"),
            Self::Svg => ("image", "svg+xml"),
        }
    }
}

/// How much the client wants an offer, from 0 (not at all) to 1000: the quality of the most specific range that covers it.
fn quality(ranges: &[(String, u16)], offer: Offer) -> u16 {
    let (kind, subtype) = offer.name();
    let exact = format!("{kind}/{subtype}");
    let wide = format!("{kind}/*");
    let of = |name: &str| ranges.iter().find(|(range, _)| range == name).map(|(_, quality)| *quality);
    of(&exact).or_else(|| of(&wide)).or_else(|| of("*/*")).unwrap_or(0)
}

/// Ranges of an `Accept` header with their qualities in thousandths; other parameters are passed over.
fn ranges(text: &str) -> Vec<(String, u16)> {
    let range = |part: &str| {
        let mut parts = part.split(';').map(str::trim);
        let name = parts.next()?.to_ascii_lowercase();
        let quality = parts.find_map(|part| part.strip_prefix("q=").or_else(|| part.strip_prefix("Q=")));
        let quality = quality.map_or(Some(1.0), |text| text.parse::<f64>().ok())?;
        (!name.is_empty()).then(|| (name, (quality.clamp(0.0, 1.0) * 1000.0).round() as u16))
    };
    text.split(',').filter_map(range).collect()
}

/// The offer that the client wants most; among equals, the first.
fn choose(headers: &HeaderMap, offers: &[Offer]) -> Result<Offer, Problem> {
    let lines: Vec<&str> = headers.get_all(header::ACCEPT).iter().filter_map(|value| value.to_str().ok()).collect();
    let ranges = if lines.is_empty() { vec![("*/*".to_owned(), 1000)] } else { ranges(&lines.join(",")) };
    let mut best: Option<(u16, Offer)> = None;
    for offer in offers {
        let quality = quality(&ranges, *offer);
        if quality > best.map_or(0, |(quality, _)| quality) {
            best = Some((quality, *offer));
        }
    }
    best.map(|(_, offer)| offer).ok_or_else(|| {
        let names: Vec<_> = offers.iter().map(|offer| offer.name()).map(|(kind, subtype)| format!("{kind}/{subtype}")).collect();
        let detail = format!("The answer comes as {}, none of which the request accepts.", names.join(" or "));
        Problem::new(StatusCode::NOT_ACCEPTABLE, detail).blaming(Culprit::Header("Accept"))
    })
}

/// The client takes JSON.
pub struct TakesJson;

impl<S: Send + Sync> FromRequestParts<S> for TakesJson {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        choose(&parts.headers, &[Offer::Json]).map(|_| Self)
    }
}

/// The client takes JSON or CSV.
pub struct TakesTable(pub Offer);

impl<S: Send + Sync> FromRequestParts<S> for TakesTable {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        choose(&parts.headers, &[Offer::Json, Offer::Csv]).map(Self)
    }
}

/// The client takes JSON, CSV or a picture.
pub struct TakesPicture(pub Offer);

impl<S: Send + Sync> FromRequestParts<S> for TakesPicture {
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, _: &S) -> Result<Self, Problem> {
        choose(&parts.headers, &[Offer::Json, Offer::Csv, Offer::Svg]).map(Self)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_most_wanted_offer_is_chosen() {
        use Offer::{Csv, Json};
        let cases = [
            (None, Some(Json)),
            (Some("*/*"), Some(Json)),
            (Some("text/csv"), Some(Csv)),
            (Some("text/*"), Some(Csv)),
            (Some("TEXT/CSV; header=present"), Some(Csv)),
            (Some("application/json;q=0.5, text/csv;q=0.9"), Some(Csv)),
            (Some("text/csv;q=0.9, */*"), Some(Json)),
            (Some("application/json;q=0, */*"), Some(Csv)),
            (Some("text/html,application/xhtml+xml,*/*;q=0.8"), Some(Json)),
            (Some("text/html"), None),
            (Some("application/json;q=0"), None),
            (Some(""), None),
        ];
        for (accept, wanted) in cases {
            let mut headers = HeaderMap::new();
            if let Some(accept) = accept {
                headers.insert(header::ACCEPT, accept.parse().unwrap());
            }
            assert_eq!(choose(&headers, &[Json, Csv]).ok(), wanted, "{accept:?}");
        }
    }
}
