//! Outgoing webhook: every event of alarms posted to another service, signed, in
//! order, and again until it is taken.
//!
//! A body is the event as JSON with its number (`id`), by which a receiver knows
//! one that comes twice: delivery is at least once. It carries a Content-Digest
//! (RFC 9530) and an HTTP message signature (RFC 9421) with HMAC-SHA256.
//!
//! To an `https:` address TLS is spoken. To an `http:` one what is sent can be
//! read on the way, and not changed unnoticed: that is for a trusted network. The
//! signature covers the address as written here.

mod http;
mod schedule;
mod sender;
mod signature;
mod target;
#[cfg(test)]
mod tests;

pub use http::Http;
pub use schedule::{LONGEST_RETRY_AFTER, Meaning, Schedule, meaning, retry_after};
pub use sender::{
    Answer, Full, Handle, Notice, Outcome, Post, Queue, Sender, Settled, Stopped, queue,
};
pub use signature::{Signed, content_digest, sign, signature_base};
pub use target::{Key, Target, Unusable};
