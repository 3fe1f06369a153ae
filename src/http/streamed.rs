//! Bodies without an end in sight: read piece by piece, decompressed on the way,
//! in memory that does not depend on their length.
//!
//! The body is pulled from a thread that may block: what is not asked for is not
//! read from the connection, so the client goes no faster than the store. A
//! client may take the read timeout for each piece, not for the whole.

use super::App;
use super::body::{Coding, LARGEST_WINDOW, coding};
use super::error::{Kind, Problem};
use axum::body::{Body, Bytes};
use axum::extract::Request;
use futures::{Stream, StreamExt};
use std::io::{self, BufReader, Read};
use std::pin::Pin;
use std::time::Duration;
use tokio_util::io::{StreamReader, SyncIoBridge};

/// Bytes of the body as sent that are buffered.
const BUFFER: usize = 64 << 10;

/// Why a body did not come to its end.
#[derive(Clone, Debug, thiserror::Error)]
pub(super) enum Cut {
    /// The client stopped sending.
    #[error("nothing came for {} s", .0.as_secs_f64())]
    Stalled(Duration),
    /// The connection broke off, or the body does not keep to HTTP.
    #[error("the body broke off: {0}")]
    Broken(String),
    /// The service ends, or the client would not be let in any more.
    #[error("the service is ending, or the token does not hold any more")]
    Over,
}

impl Cut {
    /// What an error of the reader stands for.
    pub fn problem(error: &io::Error) -> Problem {
        let cut = error
            .get_ref()
            .and_then(|inner| inner.downcast_ref::<Cut>());
        match cut {
            Some(cut @ Cut::Stalled(_)) => Problem::new(Kind::Timeout, cut.to_string()),
            Some(cut @ Cut::Broken(_)) => Problem::new(Kind::Malformed, cut.to_string()),
            Some(cut @ Cut::Over) => Problem::new(Kind::Unavailable, cut.to_string()),
            None => {
                let detail = format!("the body cannot be decompressed: {error}");
                Problem::new(Kind::Malformed, detail)
            }
        }
    }
}

/// A body that has not been read yet.
pub(super) struct Streamed {
    coding: Coding,
    pieces: Pin<Box<dyn Stream<Item = io::Result<Bytes>> + Send>>,
}

impl Streamed {
    /// The body of a request, until `over` says that nobody may send any more.
    ///
    /// # Errors
    ///
    /// Of a content coding that is not taken.
    pub fn new(
        app: &App,
        request: Request,
        over: impl Future<Output = ()> + Send + 'static,
    ) -> Result<Self, Problem> {
        Ok(Streamed {
            coding: coding(request.headers())?,
            pieces: Box::pin(pieces(request.into_body(), app.limits.read_timeout, over)),
        })
    }

    /// What it is after decompression. To be called, and read, on a thread of the
    /// runtime that may block.
    ///
    /// # Errors
    ///
    /// Where the decompression cannot begin.
    pub fn open(self) -> io::Result<Box<dyn Read>> {
        let sent = SyncIoBridge::new(StreamReader::new(self.pieces));
        let sent = BufReader::with_capacity(BUFFER, sent);
        Ok(match self.coding {
            Coding::Identity => Box::new(sent),
            Coding::Gzip => Box::new(flate2::bufread::MultiGzDecoder::new(sent)),
            Coding::Zstd => {
                let mut decoder = zstd::Decoder::with_buffer(sent)?;
                decoder.window_log_max(LARGEST_WINDOW)?;
                Box::new(decoder)
            }
        })
    }
}

/// The pieces of a body; the first error is the last of them.
fn pieces(
    body: Body,
    patience: Duration,
    over: impl Future<Output = ()> + Send + 'static,
) -> impl Stream<Item = io::Result<Bytes>> + Send {
    let state = Some((body.into_data_stream(), Box::pin(over)));
    futures::stream::unfold(state, move |state| async move {
        let (mut data, mut over) = state?;
        let next = tokio::select! {
            biased;
            () = &mut over => Err(Cut::Over),
            next = tokio::time::timeout(patience, data.next()) => match next {
                Err(_) => Err(Cut::Stalled(patience)),
                Ok(Some(Err(error))) => Err(Cut::Broken(error.to_string())),
                Ok(Some(Ok(piece))) => Ok(Some(piece)),
                Ok(None) => Ok(None),
            },
        };
        match next {
            Ok(piece) => Some((Ok(piece?), Some((data, over)))),
            Err(cut) => Some((Err(io::Error::other(cut)), None)),
        }
    })
}
