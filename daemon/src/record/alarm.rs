//! Alarms: condition, acknowledgement, latch and suppression kept apart; the state's name is derived.
//!
//! State names are those of IEC 62682 / ISA-18.2 in full words; letters differ between editions and are not used.

use std::fmt;

use serde::{Deserialize, Serialize};

use super::{Finding, Stamp};

/// Name of an alarm: what it is about, stable over occurrences (`limit-O-2-above`, `watch`, `blind-O-2`).
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct AlarmId(pub String);

impl fmt::Display for AlarmId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.0)
    }
}

/// Whether what the alarm is about is present.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Condition {
    /// Present.
    Present,
    /// Absent.
    Absent,
}

/// Whether a person has seen it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Acknowledgement {
    /// Seen.
    Acknowledged,
    /// Not yet seen.
    Unacknowledged,
}

/// Whether it waits for a reset after the condition is gone.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Latch {
    /// Not a latching alarm.
    None,
    /// Latching, and not set.
    Open,
    /// Latching, and set: waits for a reset.
    Set,
}

/// Whether annunciation is held back, and by whom.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(tag = "by", rename_all = "kebab-case")]
pub enum Suppression {
    /// Not held back.
    None,
    /// By a person, until an instant.
    Shelved {
        /// When it ends.
        until: Stamp,
    },
    /// By a rule of the design.
    Design {
        /// Which rule.
        rule: String,
    },
    /// Out of service for maintenance.
    OutOfService,
}

/// The state of an alarm, derived from its four fields.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum AlarmState {
    /// Normal.
    Normal,
    /// Unacknowledged alarm.
    Unacknowledged,
    /// Acknowledged alarm.
    Acknowledged,
    /// Returned to normal, unacknowledged.
    ReturnedUnacknowledged,
    /// Latched, unacknowledged.
    LatchedUnacknowledged,
    /// Latched, acknowledged.
    LatchedAcknowledged,
    /// Shelved.
    Shelved,
    /// Suppressed by design.
    Suppressed,
    /// Out of service.
    OutOfService,
}

impl AlarmState {
    /// The full words used on the wire.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Normal => "normal",
            Self::Unacknowledged => "unacknowledged",
            Self::Acknowledged => "acknowledged",
            Self::ReturnedUnacknowledged => "returned-unacknowledged",
            Self::LatchedUnacknowledged => "latched-unacknowledged",
            Self::LatchedAcknowledged => "latched-acknowledged",
            Self::Shelved => "shelved",
            Self::Suppressed => "suppressed",
            Self::OutOfService => "out-of-service",
        }
    }
}

/// How soon somebody must act.
#[derive(
    Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Default, Serialize, Deserialize,
)]
#[serde(rename_all = "kebab-case")]
pub enum Priority {
    /// When convenient.
    Low,
    /// Today.
    #[default]
    Medium,
    /// At once.
    High,
}

/// What raised an alarm.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum AlarmKind {
    /// A limit of the operator's.
    Limit,
    /// A finding of the watch.
    Watch,
    /// A gauge, source or site that cannot be judged.
    Blind,
}

/// An alarm as it stands.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Alarm {
    /// Its name.
    pub id: AlarmId,
    /// What raised it.
    pub kind: AlarmKind,
    /// Number of times it has come, from 1.
    pub occurrence: u32,
    /// Number of transitions within the occurrence.
    pub sequence: u32,
    /// Present or absent.
    pub condition: Condition,
    /// Seen or not.
    pub acknowledgement: Acknowledgement,
    /// Latch.
    pub latch: Latch,
    /// Suppression.
    pub suppression: Suppression,
    /// How soon to act.
    pub priority: Priority,
    /// Sample instant at which this occurrence began.
    pub since: Stamp,
    /// One line for people: what, where, how large, since when.
    pub summary: String,
    /// What the site file says to do.
    pub response: String,
    /// The finding, for an alarm of the watch.
    pub finding: Option<Finding>,
}

impl Alarm {
    /// The state's name under IEC 62682, from the four fields.
    #[must_use]
    pub fn state(&self) -> AlarmState {
        match self.suppression {
            Suppression::Shelved { .. } => return AlarmState::Shelved,
            Suppression::Design { .. } => return AlarmState::Suppressed,
            Suppression::OutOfService => return AlarmState::OutOfService,
            Suppression::None => {}
        }
        match (self.condition, self.acknowledgement, self.latch) {
            (Condition::Present, Acknowledgement::Unacknowledged, _) => AlarmState::Unacknowledged,
            (Condition::Present, Acknowledgement::Acknowledged, _) => AlarmState::Acknowledged,
            (Condition::Absent, Acknowledgement::Unacknowledged, Latch::Set) => {
                AlarmState::LatchedUnacknowledged
            }
            (Condition::Absent, Acknowledgement::Acknowledged, Latch::Set) => {
                AlarmState::LatchedAcknowledged
            }
            (Condition::Absent, Acknowledgement::Unacknowledged, _) => {
                AlarmState::ReturnedUnacknowledged
            }
            (Condition::Absent, Acknowledgement::Acknowledged, _) => AlarmState::Normal,
        }
    }
}

/// What moved an alarm.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum TransitionKind {
    /// The condition became present.
    Raised,
    /// A person acknowledged it.
    Acknowledged,
    /// The condition became absent.
    Returned,
    /// Its finding, size or priority changed so much that it must be seen again.
    Changed,
    /// Its finding was brought up to date; nobody need see it again.
    Updated,
    /// A re-run no longer supports what was said, or says it otherwise.
    Revised,
    /// Its finding was taken into the model.
    Adopted,
    /// A person shelved it.
    Shelved,
    /// It came back from the shelf, by itself or by a person.
    Unshelved,
    /// A person took it out of service.
    TakenOut,
    /// A person put it back into service.
    PutBack,
    /// A person reset it.
    Reset,
    /// It was acknowledged so long ago that it must be seen again.
    Realarmed,
    /// Nobody acknowledged it in time.
    Escalated,
}

/// One step in the life of an alarm; history is append-only.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Transition {
    /// The alarm just after the step.
    pub alarm: Alarm,
    /// What moved it.
    pub kind: TransitionKind,
    /// Sample instant at which it became so (wall-clock for a person's act).
    pub at: Stamp,
    /// When it was written.
    pub recorded: Stamp,
    /// Who, where a person acted.
    pub by: Option<String>,
    /// Why, where there is more to say.
    pub note: String,
}
