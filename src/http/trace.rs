//! Trace context: which requests, here and elsewhere, belong to one cause.
//!
//! W3C Trace Context, Recommendation of 23 November 2021 ("level 1"): header
//! `traceparent` (section 3.2), `tracestate` (3.3), and what a service does with
//! them (4.2). The sections are given from memory. A trace is made where none
//! came, or none that can be read. Ours is one span of it: its log lines carry
//! the trace's id, and whatever is sent on for its sake has our span as parent.
//! Answers carry nothing: the header for them is a draft only.
//!
//! Of the flags the recommendation knows one, sampled; others are sent on as
//! zero. A trace that begins here is not marked as sampled: we keep log lines and
//! no spans. `tracestate` is opaque to us and is sent on as it came.

use super::ambient::Entropy;
use axum::http::HeaderMap;
use std::sync::Arc;
use tracing::Instrument;

/// Most members of a `tracestate` (section 3.3.1.1).
const MOST_MEMBERS: usize = 32;

/// Characters of a `tracestate` that are sent on; at least 512 should be
/// (section 3.3.1.5).
const MOST_STATE: usize = 2048;

/// The flag "sampled" (section 3.2.2.5.1).
const SAMPLED: u8 = 1;

tokio::task_local! {
    static CURRENT: Arc<Trace>;
}

/// A trace with our own span in it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) struct Trace {
    /// 32 hexadecimal digits.
    pub id: String,
    /// The span that called us, where there was one: 16 digits.
    pub parent: Option<String>,
    /// Our own: 16 digits.
    pub span: String,
    sampled: bool,
    state: Option<String>,
}

impl Trace {
    /// The trace that headers tell of, or a new one.
    pub fn of(headers: &HeaderMap, entropy: &dyn Entropy) -> Self {
        let span = random(entropy);
        match parent(headers) {
            Some((id, parent, flags)) => Trace {
                id,
                parent: Some(parent),
                span,
                sampled: flags & SAMPLED != 0,
                state: state(headers),
            },
            None => Trace {
                span,
                ..Trace::new(entropy)
            },
        }
    }

    /// One that begins here.
    pub fn new(entropy: &dyn Entropy) -> Self {
        Trace {
            id: random(entropy) + &random(entropy),
            parent: None,
            span: random(entropy),
            sampled: false,
            state: None,
        }
    }

    /// The one that the present task works for.
    pub fn current() -> Option<Arc<Trace>> {
        CURRENT.try_with(Arc::clone).ok()
    }

    /// Runs work for this trace.
    pub async fn scope<F: Future>(self: Arc<Self>, work: F) -> F::Output {
        CURRENT.scope(self, work).await
    }

    /// The headers of a request that is sent for its sake.
    pub fn headers(&self) -> Vec<(&'static str, String)> {
        let flags = if self.sampled { SAMPLED } else { 0 };
        let parent = format!("00-{}-{}-{flags:02x}", self.id, self.span);
        let mut headers = vec![("traceparent", parent)];
        headers.extend(self.state.clone().map(|state| ("tracestate", state)));
        headers
    }
}

/// Work that goes on in a task of its own for the sake of the present one: its
/// log lines and what it sends belong to the same trace.
pub(super) fn carried<F: Future>(work: F) -> impl Future<Output = F::Output> {
    let trace = Trace::current();
    let carried = async move {
        match trace {
            Some(trace) => trace.scope(work).await,
            None => work.await,
        }
    };
    carried.instrument(tracing::Span::current())
}

/// Sixteen hexadecimal digits, not all of them zero.
fn random(entropy: &dyn Entropy) -> String {
    let bytes = entropy.ten_bytes();
    let number = bytes[2..]
        .iter()
        .fold(0_u64, |sum, byte| (sum << 8) | u64::from(*byte));
    format!("{:016x}", number.max(1))
}

/// Trace, parent and flags of a `traceparent`; of a version that is not known
/// yet, the parts that this one knows (section 3.2.4).
fn parent(headers: &HeaderMap) -> Option<(String, String, u8)> {
    let mut values = headers.get_all("traceparent").iter();
    let text = values.next()?.to_str().ok()?;
    if values.next().is_some() {
        return None;
    }
    let mut parts = text.split('-');
    let (version, trace, parent, flags) =
        (parts.next()?, parts.next()?, parts.next()?, parts.next()?);
    let is_hex = |part: &str, length: usize| {
        part.len() == length
            && part
                .bytes()
                .all(|byte| matches!(byte, b'0'..=b'9' | b'a'..=b'f'))
    };
    let not_zero = |part: &str| part.bytes().any(|byte| byte != b'0');
    let valid = is_hex(version, 2)
        && version != "ff"
        && (version != "00" || parts.next().is_none())
        && is_hex(trace, 32)
        && not_zero(trace)
        && is_hex(parent, 16)
        && not_zero(parent)
        && is_hex(flags, 2);
    let flags = u8::from_str_radix(flags, 16).ok()?;
    valid.then(|| (trace.to_owned(), parent.to_owned(), flags))
}

/// `tracestate`, its lines joined (section 3.3.1); `None` where it is none.
fn state(headers: &HeaderMap) -> Option<String> {
    let lines: Result<Vec<&str>, _> = headers
        .get_all("tracestate")
        .iter()
        .map(|line| line.to_str())
        .collect();
    let state = lines.ok()?.join(",");
    let mut members = 0;
    for member in state
        .split(',')
        .map(|member| member.trim_matches([' ', '\t']))
    {
        if member.is_empty() {
            continue;
        }
        members += 1;
        let (key, value) = member.split_once('=')?;
        if !is_key(key) || value.is_empty() || value.len() > 256 || value.contains('=') {
            return None;
        }
    }
    (members > 0 && members <= MOST_MEMBERS && state.len() <= MOST_STATE).then_some(state)
}

fn is_key(key: &str) -> bool {
    let known =
        |byte: u8| byte.is_ascii_lowercase() || byte.is_ascii_digit() || b"_-*/@".contains(&byte);
    (1..=256).contains(&key.len()) && key.bytes().all(known)
}

#[cfg(test)]
mod tests {
    use super::*;
    use axum::http::{HeaderName, HeaderValue};

    const GOOD: &str = "00-4bf92f3577b34da6a3ce929d0e0e4736-00f067aa0ba902b7-01";

    struct Zeros;

    impl Entropy for Zeros {
        fn ten_bytes(&self) -> [u8; 10] {
            [0; 10]
        }
    }

    fn headers(lines: &[(&'static str, &str)]) -> HeaderMap {
        let mut headers = HeaderMap::new();
        for (name, value) in lines {
            let value = HeaderValue::from_str(value).expect("a header");
            headers.append(HeaderName::from_static(name), value);
        }
        headers
    }

    fn read(value: &str) -> Option<(String, String, u8)> {
        parent(&headers(&[("traceparent", value)]))
    }

    #[test]
    fn a_trace_that_came_goes_on_under_our_span() {
        let came = headers(&[
            ("traceparent", &GOOD.replace("-01", "-ff")),
            ("tracestate", "rojo=00f067aa0ba902b7"),
            ("tracestate", "congo=t61rcWkgMzE, x@y=1"),
        ]);
        let trace = Trace::of(&came, &Zeros);
        assert_eq!(trace.parent.as_deref(), Some("00f067aa0ba902b7"));
        let sent = trace.headers();
        let ours = GOOD.replace("00f067aa0ba902b7", "0000000000000001");
        assert_eq!(sent[0], ("traceparent", ours));
        let state = "rojo=00f067aa0ba902b7,congo=t61rcWkgMzE, x@y=1";
        assert_eq!(sent[1], ("tracestate", state.to_owned()));
    }

    #[test]
    fn a_trace_begins_here_where_none_came_and_its_state_with_it() {
        let came = headers(&[("traceparent", "00-x-y-01"), ("tracestate", "a=1")]);
        let trace = Trace::of(&came, &Zeros);
        assert_eq!(trace.parent, None);
        let sent = trace.headers();
        assert_eq!(sent.len(), 1, "{sent:?}");
        assert!(read(&sent[0].1).is_some(), "{sent:?}");
        assert!(sent[0].1.ends_with("-00"), "{sent:?}");
    }

    #[test]
    fn trace_parents() {
        let (id, parent, flags) = read(GOOD).expect("valid");
        assert_eq!(id, "4bf92f3577b34da6a3ce929d0e0e4736");
        assert_eq!((parent.as_str(), flags), ("00f067aa0ba902b7", 1));
        assert!(read(&GOOD.replace("00-4", "01-4")).is_some());
        assert!(read(&(GOOD.replace("00-4", "01-4") + "-more")).is_some());
        for bad in [
            GOOD.to_uppercase(),
            GOOD.replace("00-4", "ff-4"),
            format!("{GOOD}-x"),
            GOOD[..54].to_owned(),
            GOOD.replace("00f067aa0ba902b7", "0000000000000000"),
        ] {
            assert_eq!(read(&bad), None, "{bad}");
        }
        let twice = headers(&[("traceparent", GOOD), ("traceparent", GOOD)]);
        assert_eq!(super::parent(&twice), None);
    }

    #[test]
    fn states_that_are_none_are_dropped() {
        let read = |value: &str| state(&headers(&[("tracestate", value)]));
        assert!(read("a=1,,b=2").is_some(), "empty members are allowed");
        let long = "a=".to_owned() + &"x".repeat(257);
        let many = vec!["a=1"; 33].join(",");
        for bad in ["", ",", "a", "A=1", "a=", "a=b=c", &long, &many] {
            assert_eq!(read(bad), None, "{bad}");
        }
    }

    #[tokio::test]
    async fn work_in_another_task_belongs_to_the_trace() {
        let trace = Arc::new(Trace::new(&Zeros));
        let work = Arc::clone(&trace).scope(async {
            let carried = tokio::spawn(carried(async { Trace::current() }));
            let lost = tokio::spawn(async { Trace::current() });
            (carried.await, lost.await)
        });
        let (carried, lost) = work.await;
        assert_eq!(carried.unwrap(), Some(trace));
        assert_eq!(lost.unwrap(), None);
    }
}
