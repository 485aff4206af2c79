//! Messages on their way out.

use std::fmt;

use serde::{Deserialize, Serialize};

/// Identity of an outgoing message, the same however often it is sent.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
pub struct OutgoingId {
    /// Alarm (or other subject) it is about.
    pub subject: String,
    /// Occurrence of the alarm.
    pub occurrence: u32,
    /// Sequence within the occurrence.
    pub sequence: u32,
}

impl fmt::Display for OutgoingId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}.{}.{}", self.subject, self.occurrence, self.sequence)
    }
}

/// A message in the outbox. Its row goes only when the far end has confirmed it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Outgoing {
    /// Identity, stable over re-sends.
    pub id: OutgoingId,
    /// Topic below the site's root, such as `alarm/limit-O-2`.
    pub topic: String,
    /// Whole payload (structured CloudEvents JSON); empty clears a retained topic.
    pub payload: String,
    /// Whether the broker keeps it.
    pub retain: bool,
}
