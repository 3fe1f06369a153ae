//! The headers that a handler looks at: `Accept`, `Prefer`, entity tags, and
//! the `Link` to the next part of a list.

use crate::store::{Precondition, StoredPlant};
use axum::http::{HeaderMap, HeaderName, HeaderValue, header};
use percent_encoding::{AsciiSet, NON_ALPHANUMERIC, utf8_percent_encode};

/// What a segment of a path keeps as it is: the unreserved characters of RFC
/// 3986.
const SEGMENT: &AsciiSet = &NON_ALPHANUMERIC
    .remove(b'-')
    .remove(b'.')
    .remove(b'_')
    .remove(b'~');

/// A name as a segment of a path or a value of a query.
pub(super) fn encode(name: &str) -> String {
    utf8_percent_encode(name, SEGMENT).to_string()
}

/// The first of the offered media types that the client likes best (RFC 9110,
/// section 12.5.1); `None` where it likes none of them.
pub(super) fn accepted<'o>(headers: &HeaderMap, offered: &[&'o str]) -> Option<&'o str> {
    let wanted: Vec<&str> = headers
        .get_all(header::ACCEPT)
        .iter()
        .filter_map(|value| value.to_str().ok())
        .collect();
    if wanted.is_empty() {
        return offered.first().copied();
    }
    let mut best: Option<(f32, &str)> = None;
    for offer in offered {
        let weight = weight(&wanted, offer);
        if weight > best.map_or(0.0, |(weight, _)| weight) {
            best = Some((weight, offer));
        }
    }
    best.map(|(_, offer)| offer)
}

/// The weight that the most specific matching range gives to a media type.
fn weight(wanted: &[&str], offer: &str) -> f32 {
    let family = offer.split('/').next().unwrap_or_default();
    let ranges = wanted.iter().flat_map(|value| value.split(','));
    let matching = ranges.filter_map(|range| {
        let mut parts = range.split(';').map(str::trim);
        let name = parts.next()?.to_ascii_lowercase();
        let specific = match name.strip_suffix("/*") {
            _ if name == offer => 2,
            Some(range_family) if range_family == family => 1,
            Some("*") => 0,
            _ => return None,
        };
        let weight = parts
            .filter_map(|part| part.strip_prefix("q=").or(part.strip_prefix("Q=")))
            .find_map(|weight| weight.parse::<f32>().ok());
        Some((specific, weight.unwrap_or(1.0)))
    });
    matching
        .max_by_key(|(specific, _)| *specific)
        .map_or(0.0, |(_, weight)| weight)
}

/// Whether the client prefers not to wait (RFC 7240).
pub(super) fn prefers_async(headers: &HeaderMap) -> bool {
    headers
        .get_all(HeaderName::from_static("prefer"))
        .iter()
        .filter_map(|value| value.to_str().ok())
        .flat_map(|value| value.split([',', ';']))
        .any(|preference| preference.trim().eq_ignore_ascii_case("respond-async"))
}

/// Digits of the digest that an entity tag shows.
const TAG_DIGITS: usize = 16;

/// The strong entity tag of a revision, as JSON or, with `suffix`, as
/// something else.
pub(super) fn entity_tag(plant: &StoredPlant, suffix: &str) -> String {
    format!(
        "\"r{}-{}{suffix}\"",
        plant.revision,
        &plant.digest[..TAG_DIGITS.min(plant.digest.len())]
    )
}

/// The conditions of a request that changes a plant.
pub(super) fn precondition(headers: &HeaderMap) -> Precondition {
    if let Some(tags) = list(headers, header::IF_MATCH) {
        if tags.contains(&"*") {
            return Precondition::Present;
        }
        // A tag that is none of ours, a weak one too, matches nothing.
        return Precondition::OneOf(tags.into_iter().filter_map(revision_of_tag).collect());
    }
    match list(headers, header::IF_NONE_MATCH) {
        Some(tags) if tags.contains(&"*") => Precondition::Absent,
        Some(tags) => Precondition::NoneOf(tags.into_iter().filter_map(revision_of_tag).collect()),
        None => Precondition::Any,
    }
}

/// Whether the client has this representation already.
pub(super) fn has_already(headers: &HeaderMap, tag: &str) -> bool {
    list(headers, header::IF_NONE_MATCH).is_some_and(|tags| {
        tags.iter()
            .any(|&sent| sent == "*" || sent.trim_start_matches("W/") == tag)
    })
}

fn list(headers: &HeaderMap, name: HeaderName) -> Option<Vec<&str>> {
    let mut values = headers.get_all(name).iter().peekable();
    values.peek()?;
    let texts = values.filter_map(|value| value.to_str().ok());
    Some(
        texts
            .flat_map(|text| text.split(','))
            .map(str::trim)
            .collect(),
    )
}

fn revision_of_tag(tag: &str) -> Option<(u32, String)> {
    let inner = tag.strip_prefix("\"r")?.strip_suffix('"')?;
    let mut parts = inner.split('-');
    let revision = parts.next()?.parse().ok()?;
    let digest = parts.next()?;
    (digest.len() == TAG_DIGITS).then(|| (revision, digest.to_owned()))
}

/// A header value from text of ours that is percent-encoded or ASCII.
pub(super) fn value(text: &str) -> HeaderValue {
    HeaderValue::from_str(text).unwrap_or(HeaderValue::from_static(""))
}

/// The link to the next part of a list (RFC 8288).
pub(super) fn next_link(target: &str) -> (HeaderName, HeaderValue) {
    (header::LINK, value(&format!("<{target}>; rel=\"next\"")))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn accept(value: &str) -> Option<&'static str> {
        let headers = HeaderMap::from_iter([(header::ACCEPT, super::value(value))]);
        accepted(&headers, &["application/json", "text/csv"])
    }

    #[test]
    fn the_best_liked_form_is_chosen() {
        assert_eq!(
            accepted(&HeaderMap::new(), &["application/json"]),
            Some("application/json")
        );
        assert_eq!(accept("*/*"), Some("application/json"));
        assert_eq!(accept("text/csv"), Some("text/csv"));
        assert_eq!(accept("text/*, application/json;q=0.5"), Some("text/csv"));
        assert_eq!(accept("text/csv;q=0, */*"), Some("application/json"));
        assert_eq!(
            accept("application/json; q=0.2, text/csv; q=0.9"),
            Some("text/csv")
        );
        assert_eq!(accept("image/png"), None);
    }

    #[test]
    fn preferences_are_found_among_others() {
        let prefer = |value: &str| {
            prefers_async(&HeaderMap::from_iter([(
                HeaderName::from_static("prefer"),
                super::value(value),
            )]))
        };
        assert!(prefer("respond-async"));
        assert!(prefer("wait=10, Respond-Async"));
        assert!(!prefer("return=minimal"));
    }

    #[test]
    fn conditions() {
        let read =
            |name, value: &str| precondition(&HeaderMap::from_iter([(name, super::value(value))]));
        let tag = "\"r3-0123456789abcdef-toml\"";
        let revision = vec![(3, "0123456789abcdef".to_owned())];
        assert_eq!(
            read(header::IF_MATCH, tag),
            Precondition::OneOf(revision.clone())
        );
        assert_eq!(
            read(header::IF_MATCH, "W/\"x\", \"y\""),
            Precondition::OneOf(vec![])
        );
        assert_eq!(read(header::IF_MATCH, "*"), Precondition::Present);
        assert_eq!(read(header::IF_NONE_MATCH, "*"), Precondition::Absent);
        assert_eq!(
            read(header::IF_NONE_MATCH, tag),
            Precondition::NoneOf(revision)
        );
        assert_eq!(precondition(&HeaderMap::new()), Precondition::Any);
    }

    #[test]
    fn names_survive_a_path() {
        assert_eq!(encode("2031-04-02T10:05Z"), "2031-04-02T10%3A05Z");
        assert_eq!(encode("a/b c"), "a%2Fb%20c");
    }
}
