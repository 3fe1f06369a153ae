//! Problem documents (RFC 9457), and the only place that knows which error has
//! which status code.
//!
//! A handler answers with a [`Problem`]; the document is written by the
//! outermost layer, which knows the request's id and turns the errors of every
//! other layer into problems as well.

use crate::alarms::{Action, State};
use crate::ingest::Refusal;
use crate::plant::Fault;
use crate::store::StoreError;
use axum::http::{HeaderName, HeaderValue, StatusCode, header};
use axum::response::{IntoResponse, Response};
use serde::Serialize;
use std::any::Any;
use std::borrow::Cow;
use utoipa::ToSchema;

/// The media type of problem documents.
pub const PROBLEM_JSON: &str = "application/problem+json";

/// What kind of problem.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// The body cannot be read.
    Malformed,
    /// A parameter of the query cannot be used.
    BadParameter,
    /// A token is needed that is known and in force.
    Unauthorised,
    /// What is asked for is not allowed to whoever asks.
    Forbidden,
    /// There is no such thing.
    NotFound,
    /// It was here and has been removed.
    Gone,
    /// The address does not take the method.
    MethodNotAllowed,
    /// It does not exist in the form that was asked for.
    NotAcceptable,
    /// The request did not come in time.
    Timeout,
    /// The name is taken by other content.
    Conflict,
    /// The state that it is in does not allow it.
    Refused,
    /// The current revision is not the one that was expected.
    PreconditionFailed,
    /// The body is too large, as sent or after decompression.
    TooLarge,
    /// The body is of a kind that is not taken.
    UnsupportedMediaType,
    /// The content has faults.
    Unacceptable,
    /// There is too much to do now.
    Overloaded,
    /// One client asks more often than it may.
    TooOften,
    /// The service made a mistake.
    Internal,
    /// The service cannot do this now.
    Unavailable,
    /// Any other error of HTTP.
    Other(StatusCode),
}

impl Kind {
    /// Status code, type and title.
    fn describe(self) -> (StatusCode, &'static str, &'static str) {
        match self {
            Kind::Malformed => (
                StatusCode::BAD_REQUEST,
                "urn:counterpoise:problem:malformed",
                "The body cannot be read",
            ),
            Kind::BadParameter => (
                StatusCode::BAD_REQUEST,
                "urn:counterpoise:problem:bad-parameter",
                "A parameter cannot be used",
            ),
            Kind::Unauthorised => (
                StatusCode::UNAUTHORIZED,
                "urn:counterpoise:problem:unauthorised",
                "A token is needed",
            ),
            Kind::Forbidden => (
                StatusCode::FORBIDDEN,
                "urn:counterpoise:problem:forbidden",
                "This is not allowed to you",
            ),
            Kind::NotFound => (
                StatusCode::NOT_FOUND,
                "urn:counterpoise:problem:not-found",
                "There is nothing here",
            ),
            Kind::Gone => (
                StatusCode::GONE,
                "urn:counterpoise:problem:gone",
                "It has been removed",
            ),
            Kind::MethodNotAllowed => (
                StatusCode::METHOD_NOT_ALLOWED,
                "urn:counterpoise:problem:method-not-allowed",
                "This address does not take this method",
            ),
            Kind::NotAcceptable => (
                StatusCode::NOT_ACCEPTABLE,
                "urn:counterpoise:problem:not-acceptable",
                "It does not exist in the form that was asked for",
            ),
            Kind::Timeout => (
                StatusCode::REQUEST_TIMEOUT,
                "urn:counterpoise:problem:timeout",
                "The request did not come in time",
            ),
            Kind::Conflict => (
                StatusCode::CONFLICT,
                "urn:counterpoise:problem:conflict",
                "The name is taken by other content",
            ),
            Kind::Refused => (
                StatusCode::CONFLICT,
                "urn:counterpoise:problem:refused",
                "Its state does not allow this",
            ),
            Kind::PreconditionFailed => (
                StatusCode::PRECONDITION_FAILED,
                "urn:counterpoise:problem:precondition-failed",
                "The current revision is not the one that was expected",
            ),
            Kind::TooLarge => (
                StatusCode::PAYLOAD_TOO_LARGE,
                "urn:counterpoise:problem:too-large",
                "The body is too large",
            ),
            Kind::UnsupportedMediaType => (
                StatusCode::UNSUPPORTED_MEDIA_TYPE,
                "urn:counterpoise:problem:unsupported-media-type",
                "The body is of a kind that is not taken here",
            ),
            Kind::Unacceptable => (
                StatusCode::UNPROCESSABLE_ENTITY,
                "urn:counterpoise:problem:unacceptable",
                "The content has faults",
            ),
            Kind::Overloaded => (
                StatusCode::TOO_MANY_REQUESTS,
                "urn:counterpoise:problem:overloaded",
                "There is too much to do now",
            ),
            Kind::TooOften => (
                StatusCode::TOO_MANY_REQUESTS,
                "urn:counterpoise:problem:too-often",
                "You ask more often than you may",
            ),
            Kind::Internal => (
                StatusCode::INTERNAL_SERVER_ERROR,
                "urn:counterpoise:problem:internal",
                "The service made a mistake",
            ),
            Kind::Unavailable => (
                StatusCode::SERVICE_UNAVAILABLE,
                "urn:counterpoise:problem:unavailable",
                "The service cannot do this now",
            ),
            Kind::Other(status) => (
                status,
                "urn:counterpoise:problem:http",
                status.canonical_reason().unwrap_or("An HTTP error"),
            ),
        }
    }

    fn of(status: StatusCode) -> Self {
        match status {
            StatusCode::BAD_REQUEST => Kind::Malformed,
            StatusCode::NOT_FOUND => Kind::NotFound,
            StatusCode::METHOD_NOT_ALLOWED => Kind::MethodNotAllowed,
            StatusCode::REQUEST_TIMEOUT => Kind::Timeout,
            StatusCode::PAYLOAD_TOO_LARGE => Kind::TooLarge,
            StatusCode::UNSUPPORTED_MEDIA_TYPE => Kind::UnsupportedMediaType,
            StatusCode::INTERNAL_SERVER_ERROR => Kind::Internal,
            other => Kind::Other(other),
        }
    }
}

/// A problem document (RFC 9457).
#[derive(Clone, Debug, Serialize, ToSchema)]
pub struct Problem {
    /// Kind of problem: `urn:counterpoise:problem:` and a word.
    #[serde(rename = "type")]
    #[schema(example = "urn:counterpoise:problem:unacceptable")]
    kind: &'static str,
    /// The same for people.
    #[schema(example = "The content has faults")]
    title: &'static str,
    /// HTTP status code.
    #[schema(example = 422)]
    status: u16,
    /// What is wrong this time.
    #[schema(value_type = String, example = "1 fault in the batch")]
    detail: Box<str>,
    /// Id of the request, as in its `x-request-id`; empty where there was none.
    #[schema(value_type = String, example = "0195f3a8-6c1e-7d0a-9f53-2b8c4e1f7a60")]
    instance: Box<str>,
    /// Every fault of the content.
    #[serde(skip_serializing_if = "Vec::is_empty")]
    #[schema(required = false)]
    faults: Vec<Fault>,
    /// What stands in the way, and what may be done instead.
    #[serde(flatten)]
    standing: Option<Box<Standing>>,
    #[serde(skip)]
    headers: Box<[(HeaderName, Cow<'static, str>)]>,
}

/// The state of an alarm to which something cannot be done.
#[derive(Clone, Debug, Serialize, ToSchema)]
pub struct Standing {
    /// State.
    #[schema(required = false)]
    state: State,
    /// What may be done to it.
    #[schema(required = false)]
    allowed: &'static [Action],
}

impl Problem {
    /// A problem of a kind.
    pub fn new(kind: Kind, detail: impl Into<String>) -> Self {
        let (status, kind_urn, title) = kind.describe();
        let mut headers = Vec::new();
        if matches!(kind, Kind::Overloaded | Kind::Unavailable) {
            headers.push((header::RETRY_AFTER, "1".into()));
        }
        Problem {
            kind: kind_urn,
            title,
            status: status.as_u16(),
            detail: detail.into().into_boxed_str(),
            instance: Box::default(),
            faults: Vec::new(),
            standing: None,
            headers: headers.into_boxed_slice(),
        }
    }

    /// The same with faults.
    pub fn with_faults(mut self, faults: Vec<Fault>) -> Self {
        self.faults = faults;
        self
    }

    /// The same of an alarm in a state.
    pub fn with_state(mut self, state: State) -> Self {
        let allowed = state.allows();
        self.standing = Some(Box::new(Standing { state, allowed }));
        self
    }

    /// The same with a header on its response.
    pub fn with_header(mut self, name: HeaderName, value: impl Into<Cow<'static, str>>) -> Self {
        let mut headers = self.headers.into_vec();
        headers.push((name, value.into()));
        self.headers = headers.into_boxed_slice();
        self
    }

    /// Whether the same may do another time.
    pub fn is_passing(&self) -> bool {
        [
            StatusCode::TOO_MANY_REQUESTS,
            StatusCode::SERVICE_UNAVAILABLE,
        ]
        .contains(&self.status())
    }

    /// The same with more to say.
    pub fn adding(mut self, more: &str) -> Self {
        self.detail = format!("{}; {more}", self.detail).into_boxed_str();
        self
    }

    /// The same, said of a request.
    pub fn at(mut self, request_id: &str) -> Self {
        self.instance = request_id.into();
        self
    }

    /// The same, said of a line of a stream: its faults have that line.
    pub fn on_line(mut self, line: usize) -> Self {
        self.detail = format!("line {line}: {}", self.detail).into_boxed_str();
        for fault in &mut self.faults {
            fault.line = Some(line);
        }
        self
    }

    /// The same, said of a batch of many.
    pub fn of_batch(mut self, batch: &str) -> Self {
        self.detail = format!("batch \"{batch}\": {}", self.detail).into_boxed_str();
        self
    }

    /// Status code.
    pub fn status(&self) -> StatusCode {
        // Every kind's code is one.
        StatusCode::from_u16(self.status).unwrap_or(StatusCode::INTERNAL_SERVER_ERROR)
    }

    /// The document.
    pub fn document(&self) -> Vec<u8> {
        serde_json::to_vec(self).unwrap_or_default()
    }
}

impl From<StoreError> for Problem {
    fn from(error: StoreError) -> Self {
        match error {
            StoreError::Overloaded => Problem::new(Kind::Overloaded, error.to_string()),
            StoreError::Unavailable(reason) => Problem::new(Kind::Unavailable, reason),
            StoreError::Unusable(_) | StoreError::Corrupt(_) => {
                tracing::error!(%error, "the store");
                Problem::new(
                    Kind::Internal,
                    "the store could not answer; the log says why",
                )
            }
        }
    }
}

impl From<Refusal> for Problem {
    fn from(refusal: Refusal) -> Self {
        let kind = if refusal.syntax {
            Kind::Malformed
        } else {
            Kind::Unacceptable
        };
        Problem::new(kind, format!("{} in the batch", count(&refusal.faults)))
            .with_faults(refusal.faults)
    }
}

/// Whether a status says that there is too much to do.
pub(super) fn is_overload(status: StatusCode) -> bool {
    status == StatusCode::TOO_MANY_REQUESTS
}

/// "1 fault", "3 faults".
pub(super) fn count(faults: &[Fault]) -> String {
    match faults.len() {
        1 => "1 fault".to_owned(),
        number => format!("{number} faults"),
    }
}

impl IntoResponse for Problem {
    fn into_response(self) -> Response {
        let mut response = self.status().into_response();
        response.extensions_mut().insert(self);
        response
    }
}

/// The response to a panic; the hook of the panic has logged it.
pub(super) fn panicked(_: Box<dyn Any + Send + 'static>) -> Response {
    Problem::new(Kind::Internal, "the log says more").into_response()
}

/// Turns every response with an error status into a problem document.
pub(super) fn finish(mut response: Response, request_id: &str) -> Response {
    let status = response.status();
    if !status.is_client_error() && !status.is_server_error() {
        return response;
    }
    let problem = response
        .extensions_mut()
        .remove::<Problem>()
        .unwrap_or_else(|| {
            Problem::new(
                Kind::of(status),
                status.canonical_reason().unwrap_or("an HTTP error"),
            )
        })
        .at(request_id);
    let mut headers = std::mem::take(response.headers_mut());
    for name in [
        header::CONTENT_LENGTH,
        header::CONTENT_ENCODING,
        header::TRANSFER_ENCODING,
    ] {
        headers.remove(name);
    }
    headers.insert(header::CONTENT_TYPE, HeaderValue::from_static(PROBLEM_JSON));
    for (name, value) in problem.headers.iter() {
        if let Ok(value) = HeaderValue::from_str(value) {
            headers.insert(name, value);
        }
    }
    let mut finished = (status, problem.document()).into_response();
    *finished.headers_mut() = headers;
    finished
}

/// A response as bytes, for a connection that has no request to answer.
pub(super) fn raw_response(problem: &Problem, request_id: &str) -> Vec<u8> {
    let status = problem.status();
    let document = problem.document();
    let mut bytes = format!(
        "HTTP/1.1 {} {}\r\ncontent-type: {PROBLEM_JSON}\r\ncontent-length: {}\r\n\
         x-request-id: {request_id}\r\nconnection: close\r\n\r\n",
        status.as_u16(),
        status.canonical_reason().unwrap_or_default(),
        document.len(),
    )
    .into_bytes();
    bytes.extend(document);
    bytes
}
