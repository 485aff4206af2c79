//! The journal: the one ordered record of all that happened to the daemon.

use serde::{Deserialize, Serialize};

use super::{Command, Stamp, Step};

/// One entry of the journal.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Entry {
    /// Its number; entries are processed in this order.
    pub seq: i64,
    /// Wall-clock instant of writing.
    pub wall: Stamp,
    /// What happened.
    pub kind: EntryKind,
}

/// What an entry records. Readings of a batch are kept in the readings table under the entry's number.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(tag = "kind", rename_all = "kebab-case")]
pub enum EntryKind {
    /// The daemon started (a new clock epoch).
    Start {
        /// Version of the program.
        version: String,
        /// Digest of the ground file in use, if any.
        ground: Option<String>,
    },
    /// Readings were committed under this entry's number.
    Batch {
        /// How many rows.
        readings: u32,
    },
    /// Block `block` was closed: its readings are what the watch judges.
    BlockClosed {
        /// Number of the block since the epoch.
        block: i64,
    },
    /// What the watch said of a block; a later entry for the same block revises it.
    Judged {
        /// The whole step.
        step: Box<Step>,
        /// Why the block was judged again, where it was.
        rerun: Option<String>,
    },
    /// The watch gave up on a block after repeated failures, or has no usable ground.
    WatchBlind {
        /// First block not judged.
        from: i64,
        /// Why, with the command that mends it.
        why: String,
    },
    /// The watch can judge again.
    WatchSees,
    /// The wall clock passed this instant: shelving, re-alarm and loss of data run on these.
    Tick,
    /// A person asked for something.
    Person {
        /// What.
        command: Command,
    },
}
