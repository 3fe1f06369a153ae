//! Copies of a database file: made beside a running service, verified, and put
//! back.
//!
//! Everything is written under another name first, in the folder of the target,
//! fsynced and verified there, and only then given its name: whatever ends the
//! work, no half file ever stands under the final name. The functions wait for
//! the disk on the thread that they are called on: they are for commands, and
//! not for a service.

mod backup;
mod partial;
mod place;
mod restore;
mod verify;

pub use backup::backup;
pub use restore::restore;
pub use verify::verify;
