//! What people ask of the running daemon, and its answers.

use serde::{Deserialize, Serialize};

use super::{Adoption, AlarmId, Snapshot, Stamp};

/// A request from a person, by message.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Command {
    /// Who asks.
    pub by: String,
    /// Why, in the person's words.
    #[serde(default)]
    pub note: String,
    /// What is asked.
    #[serde(flatten)]
    pub kind: CommandKind,
}

/// What can be asked.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(tag = "ask", rename_all = "kebab-case")]
pub enum CommandKind {
    /// The present state; changes nothing and is not journalled.
    Show,
    /// Acknowledge one occurrence of one alarm.
    Acknowledge {
        /// Which alarm.
        alarm: AlarmId,
        /// Which occurrence was seen.
        occurrence: u32,
    },
    /// Hold back one alarm until an instant; it comes back by itself.
    Shelve {
        /// Which alarm.
        alarm: AlarmId,
        /// Which occurrence was seen.
        occurrence: u32,
        /// When it comes back.
        until: Stamp,
    },
    /// Bring a shelved alarm back before its time.
    Unshelve {
        /// Which alarm.
        alarm: AlarmId,
        /// Which occurrence was seen.
        occurrence: u32,
    },
    /// Take an alarm out of service for maintenance; it stays out until a person puts it back.
    TakeOut {
        /// Which alarm.
        alarm: AlarmId,
        /// Which occurrence was seen.
        occurrence: u32,
    },
    /// Put an alarm back into service.
    PutBack {
        /// Which alarm.
        alarm: AlarmId,
        /// Which occurrence was seen.
        occurrence: u32,
    },
    /// Reset a latched alarm whose condition is gone.
    Reset {
        /// Which alarm.
        alarm: AlarmId,
        /// Which occurrence was seen.
        occurrence: u32,
    },
    /// Take the finding of an alarm into the model.
    Adopt {
        /// Which alarm.
        alarm: AlarmId,
        /// Which occurrence was seen.
        occurrence: u32,
        /// The adoption as worked out when the command was taken (filled in by the daemon before journalling).
        #[serde(default)]
        adoption: Option<Adoption>,
    },
}

/// The daemon's answer to a [`Command`].
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(tag = "answer", rename_all = "kebab-case")]
pub enum Reply {
    /// Done, and on disk.
    Done {
        /// What changed, in words.
        text: String,
    },
    /// Refused; nothing changed.
    Refused {
        /// Why, and the mend.
        why: String,
    },
    /// The state asked for.
    State {
        /// All that is observable.
        snapshot: Box<Snapshot>,
    },
}
