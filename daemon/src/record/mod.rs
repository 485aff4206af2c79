//! The plain types that pass between rooms. Every room depends on this one; it depends on none.

mod alarm;
mod channel;
mod command;
mod journal;
mod names;
mod outgoing;
mod reading;
mod snapshot;
mod stamp;

pub use alarm::{
    Acknowledgement, Alarm, AlarmId, AlarmKind, AlarmState, Condition, Latch, Priority,
    Suppression, Transition, TransitionKind,
};
pub use borewake_model::block::{Block, GaugeBlock, RateKnown, RatePath};
pub use borewake_model::finding::{
    Cause, Expectation, Finding, Place, Size, SizeUnit, Subject, Weighed,
};
pub use borewake_model::units::UnitSystem;
pub use borewake_model::watch::{Adoption, Blind, Step};
pub use channel::{ChannelId, ChannelKind, Holds, SourceName};
pub use command::{Command, CommandKind, Reply};
pub use journal::{Entry, EntryKind};
pub use names::Names;
pub use outgoing::{Outgoing, OutgoingId};
pub use reading::{
    AckToken, ClockEpoch, ClockState, Delivery, DeviceStatus, Quality, Reading, RejectReason,
    Rejected,
};
pub use snapshot::{AlarmView, ChannelView, GaugeView, Health, Snapshot, SourceView};
pub use stamp::Stamp;
