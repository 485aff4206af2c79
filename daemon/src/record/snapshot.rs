//! All that is observable, in one struct: page, commands and metrics read it and nothing else.

use std::collections::BTreeMap;

use serde::{Deserialize, Serialize};

use super::{Alarm, AlarmState, Blind, Expectation, Stamp};

/// The state of the daemon at one moment.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct Snapshot {
    /// The site's id.
    pub site: String,
    /// When this was taken.
    pub taken: Stamp,
    /// Last journal entry processed.
    pub position: i64,
    /// Last block judged, if any.
    pub block: Option<i64>,
    /// Alarms that are not normal, and those that lately were.
    pub alarms: Vec<AlarmView>,
    /// Gauges by name.
    pub gauges: BTreeMap<String, GaugeView>,
    /// Channels by name.
    pub channels: BTreeMap<String, ChannelView>,
    /// Sources by name.
    pub sources: BTreeMap<String, SourceView>,
    /// The daemon's own state.
    pub health: Health,
}

/// An alarm with its derived state.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct AlarmView {
    /// State in full words.
    pub state: AlarmState,
    /// The alarm.
    #[serde(flatten)]
    pub alarm: Alarm,
}

/// A gauge as the watch sees it.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct GaugeView {
    /// Last block mean \[Pa\].
    pub reading: Option<f64>,
    /// Expectation of that block.
    pub expectation: Option<Expectation>,
    /// Why it cannot be judged.
    pub blind: Option<Blind>,
}

/// A channel's last reading.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct ChannelView {
    /// Last committed value, SI.
    pub value: Option<f64>,
    /// Its instant.
    pub sampled: Option<Stamp>,
    /// Readings committed since start.
    pub readings: u64,
}

/// A source's state.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct SourceView {
    /// Connected, waiting, or what is wrong.
    pub state: String,
    /// Deliveries since start.
    pub deliveries: u64,
    /// Refusals since start, by reason.
    pub rejected: BTreeMap<String, u64>,
    /// Reconnections since start.
    pub reconnects: u64,
    /// Readings a poller could not take because its queue was full.
    pub gaps: u64,
}

/// The daemon's own state.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct Health {
    /// Why every gauge is blind, where the watch does not run.
    pub watch: Option<String>,
    /// Readings committed since start.
    pub committed: u64,
    /// Readings dropped as exact duplicates since start.
    pub duplicates: u64,
    /// Readings older than the newest of their channel since start (kept).
    pub late: u64,
    /// Conflicts since start (kept among the rejected).
    pub conflicts: u64,
    /// Messages waiting in the outbox.
    pub outbox: u64,
}
