//! Standard output, which a reader may close at any time.

use std::error::Error;
use std::fmt;
use std::io::{self, ErrorKind, Write};

/// Nobody reads standard output any more: a reason to end, and no fault.
#[derive(Debug)]
pub struct Unread;

impl fmt::Display for Unread {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("nobody reads the output any more")
    }
}

impl Error for Unread {}

/// Writes to standard output at once.
///
/// # Errors
///
/// [`Unread`] where it has been closed.
pub(super) fn print(text: impl AsRef<[u8]>) -> anyhow::Result<()> {
    let mut output = io::stdout().lock();
    let written = output
        .write_all(text.as_ref())
        .and_then(|()| output.flush());
    written.map_err(|error| match error.kind() {
        ErrorKind::BrokenPipe => Unread.into(),
        _ => error.into(),
    })
}
