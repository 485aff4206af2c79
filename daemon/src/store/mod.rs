//! The only code that speaks SQL: readings, journal, checkpoints, outbox.
//!
//! SQLite in WAL mode, synchronous FULL. One task owns the one connection that writes and is spoken to by
//! messages ([`Store`]); any number of readers share a pool of read-only connections ([`Reader`]), in this
//! process or in another beside it. What a call of [`Store`] has answered is on disk.

mod append;
mod apply;
mod channels;
mod checkpoint;
mod commit;
mod error;
mod handle;
mod lock;
mod many_rows;
mod open;
mod options;
mod outbox;
mod reader;
mod retention;
mod rows;
mod space;
mod sql;
#[cfg(test)]
mod tests;
mod verify;
mod writer;

pub use apply::Applied;
pub use checkpoint::{Checkpoint, CheckpointKind};
pub use commit::Committed;
pub use error::{Refused, Result, StoreError};
pub use handle::Store;
pub use open::{OpenReport, Opened, Outcome, SetAside};
pub use options::{Durability, StoreOptions};
pub use outbox::Waiting;
pub use reader::{Judged, Reader, Walk};
pub use retention::{Retained, Retention};
pub use verify::Problem;
