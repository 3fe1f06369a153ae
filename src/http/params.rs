//! Names in the path, and query parameters: unknown ones refused, repeated ones allowed where they
//! mean something, every fault at once.

use super::error::{Kind, Problem, count};
use crate::plant::{Fault, Severity};
use crate::store::Cursor;
use axum::extract::{FromRequestParts, Path};
use axum::http::Uri;
use axum::http::request::Parts;
use serde::de::DeserializeOwned;
use std::str::FromStr;
use time::format_description::well_known::Rfc3339;
use time::{OffsetDateTime, UtcOffset};

/// The query of a request, taken apart one parameter after another.
pub(super) struct Params {
    pairs: Vec<(String, String)>,
    faults: Vec<Fault>,
}

/// The names in the path of a request, decoded.
pub(super) struct Address<T>(pub T);

impl<T, S> FromRequestParts<S> for Address<T>
where
    T: DeserializeOwned + Send,
    S: Send + Sync,
{
    type Rejection = Problem;

    async fn from_request_parts(parts: &mut Parts, state: &S) -> Result<Self, Problem> {
        match Path::from_request_parts(parts, state).await {
            Ok(Path(names)) => Ok(Address(names)),
            Err(_) => Err(no_name()),
        }
    }
}

/// The answer where a name in the address cannot be read.
pub(super) fn no_name() -> Problem {
    Problem::new(
        Kind::BadParameter,
        "a name in the address is not UTF-8, percent-encoded",
    )
}

impl Params {
    pub fn new(uri: &Uri) -> Self {
        let query = uri.query().unwrap_or_default();
        let pairs = form_urlencoded::parse(query.as_bytes())
            .into_owned()
            .collect();
        Params {
            pairs,
            faults: Vec::new(),
        }
    }

    /// Notes what is wrong with a parameter.
    pub fn fault(&mut self, name: &str, what: impl Into<String>, mend: impl Into<String>) {
        self.faults.push(Fault {
            severity: Severity::Error,
            path: format!("?{name}"),
            line: None,
            column: None,
            what: what.into(),
            mend: mend.into(),
        });
    }

    /// All values of a parameter that may be repeated.
    pub fn all(&mut self, name: &str) -> Vec<String> {
        let (taken, left) = std::mem::take(&mut self.pairs)
            .into_iter()
            .partition(|p| p.0 == name);
        self.pairs = left;
        let taken: Vec<(String, String)> = taken;
        taken.into_iter().map(|(_, value)| value).collect()
    }

    /// The value of a parameter that may stand once.
    pub fn one(&mut self, name: &str) -> Option<String> {
        let mut values = self.all(name);
        if values.len() > 1 {
            self.fault(name, "given more than once", "give it once");
        }
        values.pop()
    }

    /// The same, read as something.
    pub fn read<T: FromStr>(&mut self, name: &str, mend: &str) -> Option<T> {
        self.choose(name, mend, |text| text.parse().ok())
    }

    /// The same, read by a function.
    pub fn choose<T>(
        &mut self,
        name: &str,
        mend: &str,
        read: impl Fn(&str) -> Option<T>,
    ) -> Option<T> {
        let text = self.one(name)?;
        let value = read(&text);
        if value.is_none() {
            self.fault(name, format!("\"{text}\" cannot be used"), mend);
        }
        value
    }

    /// A time.
    pub fn time(&mut self, name: &str) -> Option<OffsetDateTime> {
        // An unencoded plus sign of an offset arrives as a space.
        let mend =
            "write it as in RFC 3339: 2026-03-17T10:05:00Z, or with %2B for the + of an offset";
        self.choose(name, mend, |text| {
            let time = OffsetDateTime::parse(&text.replace(' ', "+"), &Rfc3339).ok()?;
            Some(time.to_offset(UtcOffset::UTC))
        })
    }

    /// How many at most.
    pub fn limit(&mut self, default: usize, most: usize) -> usize {
        let mend = format!("a whole number from 1 to {most}");
        self.choose("limit", &mend, |text| {
            text.parse().ok().filter(|limit| (1..=most).contains(limit))
        })
        .unwrap_or(default)
    }

    /// A place in a list by time, as [`cursor_text`] writes it.
    pub fn cursor(&mut self) -> Option<Cursor> {
        self.choose(
            "cursor",
            "take it from the Link header of the answer before",
            |text| {
                let (start, id) = text.split_once('.')?;
                Some(Cursor {
                    start_ns: start.parse().ok()?,
                    id: id.parse().ok()?,
                })
            },
        )
    }

    /// Refuses what is left and tells every fault.
    pub fn finish(mut self) -> Result<(), Problem> {
        for (name, _) in std::mem::take(&mut self.pairs) {
            self.fault(&name, "unknown parameter", "leave it out; /docs lists them");
        }
        if self.faults.is_empty() {
            return Ok(());
        }
        let detail = format!("{} in the query", count(&self.faults));
        Err(Problem::new(Kind::BadParameter, detail).with_faults(self.faults))
    }
}

/// A place in a list, as a parameter.
pub(super) fn cursor_text(cursor: Cursor) -> String {
    format!("{}.{}", cursor.start_ns, cursor.id)
}

/// The address of the next part: the same query with another cursor.
pub(super) fn with_cursor(uri: &Uri, name: &str, cursor: &str) -> String {
    let query = uri.query().unwrap_or_default();
    let kept = form_urlencoded::parse(query.as_bytes()).filter(|(key, _)| key != name);
    let query = form_urlencoded::Serializer::new(String::new())
        .extend_pairs(kept)
        .append_pair(name, cursor)
        .finish();
    format!("{}?{query}", uri.path())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_fault_of_a_query_is_told() {
        let uri = Uri::from_static("/x?limit=0&from=yesterday&colour=red&cursor=1.2&tag=A&tag=B");
        let mut params = Params::new(&uri);
        assert_eq!(params.limit(10, 100), 10);
        assert_eq!(params.time("from"), None);
        assert_eq!(params.cursor(), Some(Cursor { start_ns: 1, id: 2 }));
        assert_eq!(params.all("tag"), ["A", "B"]);
        let places: Vec<_> = params
            .faults
            .iter()
            .map(|fault| fault.path.clone())
            .collect();
        assert_eq!(places, ["?limit", "?from"]);
        assert!(params.finish().is_err());
    }

    #[test]
    fn the_next_part_has_the_same_query() {
        let uri = Uri::from_static("/x?tag=A%20B&cursor=1.2&limit=3");
        assert_eq!(
            with_cursor(&uri, "cursor", "5.6"),
            "/x?tag=A+B&limit=3&cursor=5.6"
        );
    }
}
