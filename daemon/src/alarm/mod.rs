//! Alarms: limits, findings of the watch and loss of sight, moved through one life cycle.
//!
//! [`Desk`] is a pure state machine over the journal: readings, judged blocks, ticks and people's commands go in,
//! [`crate::record::Transition`]s come out. It has no clock, no files and no threads, so that the alarm table is a
//! function of the journal: the same live, killed and restarted, and replayed.

mod blind;
mod book;
mod desk;
mod life;
mod limit;
mod notice;
mod settings;
mod spans;
mod watch;
mod words;

pub use desk::{Desk, DeskError, Outcome};
pub use life::{Event, Life, Refusal, step};
pub use notice::NOTICE;
pub use settings::{
    AlarmSettings, BlindSettings, Care, ChannelWatch, LimitSettings, Priorities, Side, WatchAlarm,
};
pub(crate) use words::{duration, minute, plain, size};
