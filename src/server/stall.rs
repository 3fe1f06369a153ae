//! A stream whose writes give up: a client that asks and never reads must not
//! hold its share of the service for ever.

use std::io;
use std::pin::Pin;
use std::task::{Context, Poll};
use std::time::Duration;
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
use tokio::time::{Instant, Sleep, sleep};

/// A stream with a limit on how long one write may wait.
pub(super) struct Stalling<S> {
    stream: S,
    patience: Duration,
    /// Ends when the write that waits has waited long enough.
    alarm: Pin<Box<Sleep>>,
    waits: bool,
}

impl<S> Stalling<S> {
    pub fn new(stream: S, patience: Duration) -> Self {
        Stalling {
            stream,
            patience,
            alarm: Box::pin(sleep(patience)),
            waits: false,
        }
    }

    /// What a write came to, or that it has waited long enough.
    fn judge<T>(
        &mut self,
        context: &mut Context<'_>,
        written: Poll<io::Result<T>>,
    ) -> Poll<io::Result<T>> {
        if written.is_ready() {
            self.waits = false;
            return written;
        }
        if !self.waits {
            self.waits = true;
            self.alarm.as_mut().reset(Instant::now() + self.patience);
        }
        match self.alarm.as_mut().poll(context) {
            Poll::Ready(()) => Poll::Ready(Err(io::ErrorKind::TimedOut.into())),
            Poll::Pending => Poll::Pending,
        }
    }
}

impl<S: AsyncRead + Unpin> AsyncRead for Stalling<S> {
    fn poll_read(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        buffer: &mut ReadBuf<'_>,
    ) -> Poll<io::Result<()>> {
        Pin::new(&mut self.stream).poll_read(context, buffer)
    }
}

impl<S: AsyncWrite + Unpin> AsyncWrite for Stalling<S> {
    fn poll_write(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        bytes: &[u8],
    ) -> Poll<io::Result<usize>> {
        let written = Pin::new(&mut self.stream).poll_write(context, bytes);
        self.judge(context, written)
    }

    fn poll_write_vectored(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        slices: &[io::IoSlice<'_>],
    ) -> Poll<io::Result<usize>> {
        let written = Pin::new(&mut self.stream).poll_write_vectored(context, slices);
        self.judge(context, written)
    }

    fn is_write_vectored(&self) -> bool {
        self.stream.is_write_vectored()
    }

    fn poll_flush(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        let flushed = Pin::new(&mut self.stream).poll_flush(context);
        self.judge(context, flushed)
    }

    fn poll_shutdown(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        let closed = Pin::new(&mut self.stream).poll_shutdown(context);
        self.judge(context, closed)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use tokio::io::{AsyncReadExt, AsyncWriteExt, duplex};

    #[tokio::test(start_paused = true)]
    async fn a_write_that_nobody_reads_gives_up() {
        let (ours, mut theirs) = duplex(8);
        let mut ours = Stalling::new(ours, Duration::from_secs(30));
        ours.write_all(b"12345678").await.expect("there is room");
        let started = Instant::now();
        let error = ours.write_all(b"9").await.expect_err("no room");
        assert_eq!(error.kind(), io::ErrorKind::TimedOut);
        assert_eq!(started.elapsed().as_secs(), 30);
        let mut read = [0; 8];
        theirs
            .read_exact(&mut read)
            .await
            .expect("what was written");
        ours.write_all(b"9").await.expect("there is room again");
    }
}
