//! The outermost layer: the request's id, its trace, its log line, and problem
//! documents for whatever the layers below answered.

use super::trace::Trace;
use super::{App, ambient, error};
use axum::body::{Body, Bytes, HttpBody};
use axum::extract::{MatchedPath, Request, State};
use axum::http::{HeaderMap, HeaderName, HeaderValue, header};
use axum::middleware::Next;
use axum::response::Response;
use hyper::body::{Frame, SizeHint};
use std::pin::Pin;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::task::{Context, Poll};
use std::time::Instant;
use tracing::Instrument;

/// The header of the request's id.
const REQUEST_ID: HeaderName = HeaderName::from_static("x-request-id");

/// Id of a request: the client's own where it sent a usable one.
#[derive(Clone, Debug)]
pub(super) struct RequestId(pub String);

/// See the module.
pub(super) async fn observe(State(app): State<App>, mut request: Request, next: Next) -> Response {
    let id = given_id(request.headers())
        .unwrap_or_else(|| ambient::request_id(&*app.clock, &*app.entropy));
    let route = request.extensions().get::<MatchedPath>().cloned();
    let route = route.as_ref().map(MatchedPath::as_str);
    let method = request.method().clone();
    let trace = Arc::new(Trace::of(request.headers(), &*app.entropy));
    let span = tracing::info_span!(
        "request",
        id = %id,
        %method,
        path = %request.uri().path(),
        route,
        trace_id = trace.id,
        span_id = trace.span,
        parent_span_id = trace.parent,
    );
    request.extensions_mut().insert(RequestId(id.clone()));
    let was_read = Arc::new(AtomicBool::new(request.body().is_end_stream()));
    let watch = Arc::clone(&was_read);
    let request = request.map(|body| {
        Body::new(Watched {
            body,
            was_read: watch,
        })
    });
    let started = Instant::now();
    let answering = trace.scope(next.run(request));
    let response = answering.instrument(span.clone()).await;
    let mut response = error::finish(response, &id);
    let refused = response.status().is_client_error() || response.status().is_server_error();
    if refused && !was_read.load(Ordering::Relaxed) {
        // The connection ends with this answer, because the rest of the body
        // stands in the way of the next request; the client has to know.
        response
            .headers_mut()
            .insert(header::CONNECTION, HeaderValue::from_static("close"));
    }
    if let Ok(value) = HeaderValue::from_str(&id) {
        response.headers_mut().insert(REQUEST_ID, value);
    }
    let took = started.elapsed();
    let milliseconds = took.as_secs_f64() * 1e3;
    let status = response.status().as_u16();
    let metrics = &app.metrics;
    metrics.requests.answered(route, &method, status, took);
    if error::is_overload(response.status()) {
        metrics.overloads.inc();
    }
    span.in_scope(|| tracing::info!(status, milliseconds, "answered"));
    response
}

/// A body that tells whether it was read to its end.
struct Watched {
    body: Body,
    was_read: Arc<AtomicBool>,
}

impl HttpBody for Watched {
    type Data = Bytes;
    type Error = axum::Error;

    fn poll_frame(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
    ) -> Poll<Option<Result<Frame<Bytes>, axum::Error>>> {
        let polled = Pin::new(&mut self.body).poll_frame(context);
        if matches!(polled, Poll::Ready(None)) || self.body.is_end_stream() {
            self.was_read.store(true, Ordering::Relaxed);
        }
        polled
    }

    fn is_end_stream(&self) -> bool {
        self.body.is_end_stream()
    }

    fn size_hint(&self) -> SizeHint {
        self.body.size_hint()
    }
}

/// A client's id, where it can go into a log and a URI reference as it is.
fn given_id(headers: &HeaderMap) -> Option<String> {
    let id = headers.get(REQUEST_ID)?.to_str().ok()?;
    let usable = |byte: u8| byte.is_ascii_alphanumeric() || b"-._".contains(&byte);
    (!id.is_empty() && id.len() <= 128 && id.bytes().all(usable)).then(|| id.to_owned())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn headers(name: &'static str, value: &str) -> HeaderMap {
        HeaderMap::from_iter([(
            HeaderName::from_static(name),
            HeaderValue::from_str(value).expect("a header"),
        )])
    }

    #[test]
    fn only_usable_ids_are_taken_over() {
        assert_eq!(
            given_id(&headers("x-request-id", "a-1._Z")),
            Some("a-1._Z".to_owned())
        );
        for bad in ["", "a b", "a\"b", "<x>", &"x".repeat(129)] {
            assert_eq!(given_id(&headers("x-request-id", bad)), None, "{bad}");
        }
    }
}
