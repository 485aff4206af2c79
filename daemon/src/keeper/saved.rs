//! What the keeper saves with its position in the journal.

use serde::{Deserialize, Serialize};

use crate::record::{Adoption, Stamp};
use crate::watch::closer::Closer;

/// The keeper's own state; together with the desk's it is a function of the journal up to the position.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct Saved {
    /// Where closing of blocks stands.
    pub closer: Closer,
    /// Findings taken into the model, in order.
    pub adoptions: Vec<Adoption>,
    /// A re-run that is due.
    pub due: Option<Due>,
    /// A re-run that is under way: after a crash it starts again.
    pub running: Option<Due>,
    /// Digest of the ground file last used.
    pub ground: Option<String>,
    /// Length of the blocks that the numbers here and in the journal count \[µs\].
    pub length: Option<i64>,
    /// The desk, in its own encoding.
    pub desk: Vec<u8>,
}

/// A re-run that is due.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Due {
    /// First block whose judgement may be wrong: checkpoints from here on are void.
    pub from: i64,
    /// First block whose judgement is compared and revised.
    pub compare_from: i64,
    /// Why, in words.
    pub reason: String,
    /// Wall clock of the first cause: gathering must end some time.
    pub first: Stamp,
    /// Wall clock of the last cause, so that trickling late data are gathered.
    pub since: Stamp,
    /// Whether the live edge must wait for it (a finding was taken into the model).
    pub replaces_live: bool,
}

impl Saved {
    /// Notes that a re-run is due; several causes are gathered into one.
    pub fn want_rerun(&mut self, more: Due) {
        self.due = Some(match self.due.take() {
            None => more,
            Some(old) => old.with(more),
        });
    }

    /// All that is due or was under way, as one re-run; it is under way afterwards.
    pub fn take_up(&mut self) -> Option<Due> {
        self.running = match (self.running.take(), self.due.take()) {
            (Some(running), Some(due)) => Some(running.with(due)),
            (one, other) => one.or(other),
        };
        self.running.clone()
    }
}

impl Due {
    fn with(self, more: Self) -> Self {
        let reason = if self.reason == more.reason {
            self.reason
        } else {
            format!("{}; {}", self.reason, more.reason)
        };
        Self {
            from: self.from.min(more.from),
            compare_from: self.compare_from.min(more.compare_from),
            reason,
            first: self.first.min(more.first),
            since: self.since.max(more.since),
            replaces_live: self.replaces_live || more.replaces_live,
        }
    }
}
