//! The life cycle of one alarm after IEC 62682 / ISA-18.2, as one pure function.
//!
//! Condition, acknowledgement, latch and suppression are separate fields; the state's name is derived from them by
//! [`Alarm::state`]. [`step`] is the whole table of transitions, also for events that no command gives yet.

use thiserror::Error;

use crate::record::{Acknowledgement, Alarm, Condition, Latch, Stamp, Suppression};

/// The fields of an alarm that the life cycle moves.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Life {
    /// Present or absent.
    pub condition: Condition,
    /// Seen or not.
    pub acknowledgement: Acknowledgement,
    /// Latch.
    pub latch: Latch,
    /// Suppression.
    pub suppression: Suppression,
    /// Number of times it has come.
    pub occurrence: u32,
}

/// What can happen to an alarm.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Event {
    /// The condition is present (its on-delay is over).
    Present,
    /// The condition is absent (its off-delay is over).
    Absent,
    /// What is known of it changed so much that it must be seen again.
    Changed,
    /// The re-alarm timer ran out.
    Realarm,
    /// A person has seen it.
    Acknowledge,
    /// A person resets a latched alarm.
    Reset,
    /// A person takes its finding into the model: the condition is explained, hence absent, and seen.
    Adopt,
    /// A person shelves it until an instant.
    Shelve {
        /// When shelving ends by itself.
        until: Stamp,
    },
    /// A rule of the design suppresses it.
    Suppress {
        /// Which rule.
        rule: String,
    },
    /// It is taken out of service.
    TakeOut,
    /// Shelving expired, the rule no longer holds, or it is back in service.
    Release,
}

/// Why an event was refused; nothing changed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Error)]
pub enum Refusal {
    /// There is nothing to acknowledge, reset or adopt.
    #[error("it is back to normal")]
    Normal,
    /// It was acknowledged before.
    #[error("it is acknowledged already")]
    AlreadyAcknowledged,
    /// It is shelved, suppressed or out of service: a person must first bring it back.
    #[error("it is shelved, suppressed or out of service; bring it back first")]
    HeldBack,
    /// A reset, or an adoption, that the condition does not allow.
    #[error("its condition is still present")]
    StillPresent,
    /// An adoption of what is no longer present.
    #[error("its condition is no longer present")]
    NotPresent,
    /// A reset before anybody acknowledged.
    #[error("it is not acknowledged yet; acknowledge it first")]
    NotAcknowledged,
    /// A reset of an alarm that does not latch.
    #[error("it does not latch, so there is nothing to reset")]
    NotLatched,
}

impl Life {
    /// An alarm that never came.
    #[must_use]
    pub fn new(latching: bool) -> Self {
        Self {
            condition: Condition::Absent,
            acknowledgement: Acknowledgement::Acknowledged,
            latch: if latching { Latch::Open } else { Latch::None },
            suppression: Suppression::None,
            occurrence: 0,
        }
    }

    /// The fields of an alarm.
    #[must_use]
    pub fn of(alarm: &Alarm) -> Self {
        Self {
            condition: alarm.condition,
            acknowledgement: alarm.acknowledgement,
            latch: alarm.latch,
            suppression: alarm.suppression.clone(),
            occurrence: alarm.occurrence,
        }
    }

    /// Puts the fields back into an alarm. A new occurrence starts its sequence again.
    pub fn apply(self, alarm: &mut Alarm) {
        if alarm.occurrence != self.occurrence {
            alarm.sequence = 0;
        }
        alarm.condition = self.condition;
        alarm.acknowledgement = self.acknowledgement;
        alarm.latch = self.latch;
        alarm.suppression = self.suppression;
        alarm.occurrence = self.occurrence;
    }

    fn held_back(&self) -> bool {
        self.suppression != Suppression::None
    }

    fn present(&self) -> bool {
        self.condition == Condition::Present
    }

    fn seen(&self) -> bool {
        self.acknowledgement == Acknowledgement::Acknowledged
    }

    /// Gone, unlatched and seen: the state `normal`.
    fn settle(&mut self) {
        self.condition = Condition::Absent;
        self.acknowledgement = Acknowledgement::Acknowledged;
        if self.latch == Latch::Set {
            self.latch = Latch::Open;
        }
    }
}

/// What an alarm becomes by an event. An event that changes nothing gives the same life back.
///
/// Held-back alarms (shelved, suppressed, out of service) go on being evaluated: their condition and occurrence follow,
/// and they come back as `normal` or `unacknowledged`, never straight to `acknowledged`.
///
/// # Errors
/// A person's act that the state does not allow, with the reason.
pub fn step(life: &Life, event: &Event) -> Result<Life, Refusal> {
    let mut next = life.clone();
    match event {
        Event::Present => {
            if !life.present() {
                next.condition = Condition::Present;
                next.acknowledgement = Acknowledgement::Unacknowledged;
                next.occurrence = life.occurrence.saturating_add(1);
                if life.latch == Latch::Open {
                    next.latch = Latch::Set;
                }
            }
        }
        Event::Absent => next.condition = Condition::Absent,
        Event::Changed | Event::Realarm => {
            if life.present() {
                next.acknowledgement = Acknowledgement::Unacknowledged;
            }
        }
        Event::Acknowledge => {
            if life.held_back() {
                return Err(Refusal::HeldBack);
            }
            if life.seen() {
                return Err(if life.present() || life.latch == Latch::Set {
                    Refusal::AlreadyAcknowledged
                } else {
                    Refusal::Normal
                });
            }
            next.acknowledgement = Acknowledgement::Acknowledged;
        }
        Event::Reset => {
            if life.held_back() {
                return Err(Refusal::HeldBack);
            }
            match life.latch {
                Latch::None => return Err(Refusal::NotLatched),
                Latch::Open => return Err(Refusal::Normal),
                Latch::Set if life.present() => return Err(Refusal::StillPresent),
                Latch::Set if !life.seen() => return Err(Refusal::NotAcknowledged),
                Latch::Set => next.settle(),
            }
        }
        Event::Adopt => {
            if life.held_back() {
                return Err(Refusal::HeldBack);
            }
            if !life.present() {
                return Err(Refusal::NotPresent);
            }
            next.settle();
        }
        Event::Shelve { until } => next.suppression = Suppression::Shelved { until: *until },
        Event::Suppress { rule } => next.suppression = Suppression::Design { rule: rule.clone() },
        Event::TakeOut => next.suppression = Suppression::OutOfService,
        Event::Release => {
            if life.held_back() {
                next.suppression = Suppression::None;
                if life.present() {
                    next.acknowledgement = Acknowledgement::Unacknowledged;
                } else {
                    next.settle();
                }
            }
        }
    }
    Ok(next)
}

#[cfg(test)]
mod tests;
