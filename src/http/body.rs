//! Reading bodies: permits before bytes, and a limit on everything.
//!
//! A permit is taken before the first byte is read, so that overload costs
//! nothing. The bytes as sent and after decompression have the same limit; the
//! deadline is for the whole body, so that a client that drips is cut as surely
//! as one that stops. Decompression is ours because its memory has to be
//! bounded too: a zstd frame may ask for a window of any size, and gets 8 MiB
//! (RFC 9659).

use super::App;
use super::error::{Kind, Problem};
use axum::body::{Body, Bytes};
use axum::extract::{FromRequestParts, Request};
use axum::http::request::Parts;
use axum::http::{HeaderMap, header};
use http_body_util::BodyExt;
use std::io::Read;
use std::sync::Arc;
use tokio::sync::OwnedSemaphorePermit;

/// log2 of the largest zstd window: 8 MiB.
pub(super) const LARGEST_WINDOW: u32 = 23;

/// The right to be worked on; refused with 429 where too many have it.
pub(super) struct Permit {
    _held: OwnedSemaphorePermit,
}

impl FromRequestParts<App> for Permit {
    type Rejection = Problem;

    async fn from_request_parts(_: &mut Parts, app: &App) -> Result<Self, Problem> {
        match Arc::clone(&app.permits).try_acquire_owned() {
            Ok(held) => Ok(Permit { _held: held }),
            Err(_) => Err(Problem::new(
                Kind::Overloaded,
                "as many requests as can be are being worked on",
            )),
        }
    }
}

/// The media type of a body, without parameters.
pub(super) fn media_type(headers: &HeaderMap) -> String {
    let text = headers
        .get(header::CONTENT_TYPE)
        .and_then(|value| value.to_str().ok());
    let essence = text
        .unwrap_or_default()
        .split(';')
        .next()
        .unwrap_or_default();
    essence.trim().to_ascii_lowercase()
}

/// Reads a whole body of at most `limit` bytes.
///
/// # Errors
///
/// 408, 413, 415 or 400, as problems.
pub(super) async fn read(app: &App, request: Request, limit: usize) -> Result<Bytes, Problem> {
    let (parts, body) = request.into_parts();
    let coding = coding(&parts.headers)?;
    if declared_length(&parts.headers).is_some_and(|length| length > limit) {
        return Err(too_large(limit));
    }
    let deadline = app.limits.read_timeout;
    let sent = tokio::time::timeout(deadline, collect(body, limit))
        .await
        .map_err(|_| {
            Problem::new(
                Kind::Timeout,
                format!("the body did not come within {} s", deadline.as_secs_f64()),
            )
        })??;
    match coding {
        Coding::Identity => Ok(sent),
        coding => {
            let decompressed =
                tokio::task::spawn_blocking(move || decompress(coding, &sent, limit));
            decompressed
                .await
                .map_err(|_| Problem::new(Kind::Internal, "decompression"))?
        }
    }
}

/// The same as text.
pub(super) fn text(bytes: &Bytes) -> Result<&str, Problem> {
    std::str::from_utf8(bytes)
        .map_err(|_| Problem::new(Kind::Malformed, "the body is not text in UTF-8"))
}

async fn collect(mut body: Body, limit: usize) -> Result<Bytes, Problem> {
    let mut collected = Vec::new();
    while let Some(frame) = body.frame().await {
        let frame = frame.map_err(|error| {
            Problem::new(Kind::Malformed, format!("the body broke off: {error}"))
        })?;
        if let Ok(data) = frame.into_data() {
            if collected.len() + data.len() > limit {
                return Err(too_large(limit));
            }
            collected.extend_from_slice(&data);
        }
    }
    Ok(Bytes::from(collected))
}

fn declared_length(headers: &HeaderMap) -> Option<usize> {
    headers
        .get(header::CONTENT_LENGTH)?
        .to_str()
        .ok()?
        .parse()
        .ok()
}

fn too_large(limit: usize) -> Problem {
    Problem::new(
        Kind::TooLarge,
        format!("the body has more than {limit} bytes, as sent or after decompression"),
    )
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Coding {
    /// As it is.
    Identity,
    /// RFC 1952.
    Gzip,
    /// RFC 8878.
    Zstd,
}

/// The content coding of a body.
///
/// # Errors
///
/// 415 where it is not taken.
pub(super) fn coding(headers: &HeaderMap) -> Result<Coding, Problem> {
    let Some(value) = headers.get(header::CONTENT_ENCODING) else {
        return Ok(Coding::Identity);
    };
    match value.as_bytes().to_ascii_lowercase().trim_ascii() {
        b"identity" | b"" => Ok(Coding::Identity),
        b"gzip" | b"x-gzip" => Ok(Coding::Gzip),
        b"zstd" => Ok(Coding::Zstd),
        _ => Err(Problem::new(
            Kind::UnsupportedMediaType,
            "a content coding that is not taken here: use gzip, zstd or none",
        )
        .with_header(header::ACCEPT_ENCODING, "gzip, zstd")),
    }
}

fn decompress(coding: Coding, sent: &[u8], limit: usize) -> Result<Bytes, Problem> {
    let broken = |error: std::io::Error| {
        Problem::new(
            Kind::Malformed,
            format!("the body cannot be decompressed: {error}"),
        )
    };
    let mut decompressed = Vec::new();
    // One byte beyond the limit tells that there is more.
    let most = u64::try_from(limit).unwrap_or(u64::MAX).saturating_add(1);
    match coding {
        Coding::Identity => decompressed.extend_from_slice(sent),
        Coding::Gzip => {
            let decoder = flate2::read::MultiGzDecoder::new(sent);
            decoder
                .take(most)
                .read_to_end(&mut decompressed)
                .map_err(broken)?;
        }
        Coding::Zstd => {
            let mut decoder = zstd::Decoder::with_buffer(sent).map_err(broken)?;
            decoder.window_log_max(LARGEST_WINDOW).map_err(broken)?;
            decoder
                .take(most)
                .read_to_end(&mut decompressed)
                .map_err(broken)?;
        }
    }
    if decompressed.len() > limit {
        return Err(too_large(limit));
    }
    Ok(Bytes::from(decompressed))
}
