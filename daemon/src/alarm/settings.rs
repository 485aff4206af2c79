//! What the desk is told of the site. SI throughout.

use crate::record::{AlarmId, Cause, ChannelId, ChannelKind, Finding, Names, Priority, SourceName};

/// All that the desk needs to know of a site.
#[derive(Debug, Clone, PartialEq)]
pub struct AlarmSettings {
    /// Names for summaries and events, and how numbers are shown.
    pub names: Names,
    /// Length of a block of the watch \[s\], above zero.
    pub block: f64,
    /// Readings sampled more than this after they were recorded are not judged \[s, 0+\].
    pub future: f64,
    /// Limits, in file order.
    pub limits: Vec<LimitSettings>,
    /// The alarm of the watch.
    pub watch: WatchAlarm,
    /// Alarms for what cannot be judged.
    pub blind: BlindSettings,
    /// Channels whose silence is told.
    pub channels: Vec<ChannelWatch>,
    /// What the wall clock brings about.
    pub care: Care,
}

impl AlarmSettings {
    /// Settings with the defaults of every part, no limits and no channels.
    #[must_use]
    pub fn new(names: Names, block: f64) -> Self {
        Self {
            names,
            block,
            future: 300.0,
            limits: Vec::new(),
            watch: WatchAlarm::default(),
            blind: BlindSettings::default(),
            channels: Vec::new(),
            care: Care::default(),
        }
    }
}

/// What the wall clock brings about, by the journal's ticks.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Care {
    /// Longest shelving \[s, above 0\].
    pub shelve_at_most: f64,
    /// An acknowledged alarm that stands for so long must be seen again \[s, above 0\]; `None` for never.
    pub realarm: Option<f64>,
    /// An alarm that nobody has acknowledged for so long is told again as escalated \[s, above 0\]; `None` for never.
    pub escalate: Option<f64>,
}

impl Default for Care {
    fn default() -> Self {
        Self {
            shelve_at_most: 7.0 * 86_400.0,
            realarm: None,
            escalate: None,
        }
    }
}

/// Which side of a limit is beyond it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Side {
    /// Values above.
    Above,
    /// Values below.
    Below,
}

/// One side of an operator's limit.
#[derive(Debug, Clone, PartialEq)]
pub struct LimitSettings {
    /// Name of its alarm.
    pub id: AlarmId,
    /// What people call the thing measured: the gauge's name.
    pub of: String,
    /// Channel judged.
    pub channel: ChannelId,
    /// What the channel measures, for showing numbers.
    pub kind: ChannelKind,
    /// Which side is beyond.
    pub side: Side,
    /// The limit, in the channel's SI unit. A value equal to it is not beyond.
    pub value: f64,
    /// A value must stay beyond for this long \[s of sample time, 0+\] ...
    pub on_delay: f64,
    /// ... and for this many samples in a row \[1+\].
    pub on_samples: u32,
    /// To return, values must stay back for this long \[s of sample time, 0+\] ...
    pub off_delay: f64,
    /// ... and for this many samples in a row \[1+\].
    pub off_samples: u32,
    /// How far back from the limit a value must be to count as returned \[SI, 0+\]; `None` takes it from noise and
    /// resolution.
    pub deadband: Option<f64>,
    /// Standard deviation of one reading \[SI, 0+\], where it was measured.
    pub noise: Option<f64>,
    /// Smallest step of the reading \[SI, 0+\], where it is known.
    pub resolution: Option<f64>,
    /// Whether it waits for a reset after the condition is gone.
    pub latching: bool,
    /// How soon to act.
    pub priority: Priority,
    /// What to do.
    pub response: String,
    /// Named preset of common practice.
    pub practice: Option<String>,
    /// Who set the number, and when.
    pub author: String,
}

impl LimitSettings {
    /// A limit judged at once on every reading, returning at once, with the deadband left to noise and resolution.
    #[must_use]
    pub fn new(id: AlarmId, of: &str, channel: ChannelId, side: Side, value: f64) -> Self {
        Self {
            id,
            of: of.to_owned(),
            channel,
            kind: ChannelKind::Pressure,
            side,
            value,
            on_delay: 0.0,
            on_samples: 1,
            off_delay: 0.0,
            off_samples: 1,
            deadband: None,
            noise: None,
            resolution: None,
            latching: false,
            priority: Priority::default(),
            response: String::new(),
            practice: None,
            author: String::new(),
        }
    }

    /// Deadband in force \[SI\]: as set, else the larger of four standard deviations of the noise and two steps of the
    /// resolution (common practice, no source), else none. A share of the range would be useless on a wide gauge.
    #[must_use]
    pub fn deadband(&self) -> f64 {
        let own = self.deadband.unwrap_or_else(|| {
            (4.0 * self.noise.unwrap_or(0.0)).max(2.0 * self.resolution.unwrap_or(0.0))
        });
        if own.is_finite() { own.max(0.0) } else { 0.0 }
    }

    /// Whether a value is beyond the limit.
    #[must_use]
    pub(super) fn beyond(&self, value: f64) -> bool {
        match self.side {
            Side::Above => value > self.value,
            Side::Below => value < self.value,
        }
    }

    /// Whether a value is so far back that the deadband lets go.
    #[must_use]
    pub(super) fn back(&self, value: f64) -> bool {
        match self.side {
            Side::Above => value <= self.value - self.deadband(),
            Side::Below => value >= self.value + self.deadband(),
        }
    }
}

/// How soon each family of causes asks for action.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Priorities {
    /// Fluid goes where it should not: `leak`, `cross-layer`.
    pub fluid: Priority,
    /// The ground or its surroundings: `interference`, `barrier`, `support`, `well-skin`, `unexplained`.
    pub ground: Priority,
    /// A gauge or a meter.
    pub instrument: Priority,
}

impl Default for Priorities {
    fn default() -> Self {
        Self {
            fluid: Priority::High,
            ground: Priority::Medium,
            instrument: Priority::Low,
        }
    }
}

/// A rival with at least this share of belief still counts when an unnamed finding's priority is set.
const RIVAL: f64 = 0.2;

impl Priorities {
    /// Priority of one cause.
    #[must_use]
    pub fn of(&self, cause: Cause) -> Priority {
        match cause {
            Cause::Leak | Cause::CrossLayer => self.fluid,
            Cause::Interference
            | Cause::Barrier
            | Cause::Support
            | Cause::WellSkin
            | Cause::Unexplained => self.ground,
            Cause::GaugeStep
            | Cause::GaugeDrift
            | Cause::GaugeStuck
            | Cause::GaugeScale
            | Cause::GaugeClock
            | Cause::MeterScale => self.instrument,
        }
    }

    /// Priority of a finding: that of its leading cause; where none is named, the most urgent of the serious rivals,
    /// so that a likely leak is not played down by a slightly likelier gauge fault.
    #[must_use]
    pub fn of_finding(&self, finding: &Finding) -> Priority {
        let mut rivals = finding.causes.iter();
        let leading = rivals.next().map_or(self.ground, |w| self.of(w.cause));
        if finding.named {
            return leading;
        }
        rivals
            .filter(|w| w.probability >= RIVAL)
            .map(|w| self.of(w.cause))
            .fold(leading, Priority::max)
    }
}

/// The alarm of the watch.
#[derive(Debug, Clone, PartialEq)]
pub struct WatchAlarm {
    /// How soon each cause asks for action.
    pub priorities: Priorities,
    /// What to do.
    pub response: String,
    /// Fewest blocks between two publications of a changed finding \[1+\].
    pub every: i64,
    /// A finding must stay away for this long to count as returned \[s of judged blocks, above 0\].
    pub quiet: f64,
    /// A live alarm is published again at least this often \[s of sample time\].
    pub refresh: f64,
}

impl Default for WatchAlarm {
    fn default() -> Self {
        Self {
            priorities: Priorities::default(),
            response: "check the gauges and meters named by independent means; if fluid may be lost, follow the permit \
                       and the site's plan"
                .to_owned(),
            every: 6,
            quiet: 86_400.0,
            refresh: 86_400.0,
        }
    }
}

impl WatchAlarm {
    /// For an embankment: nothing that cannot be told there may wait, and people downstream have a plan of their own.
    #[must_use]
    pub fn of_embankment() -> Self {
        Self {
            priorities: Priorities {
                ground: Priority::High,
                ..Priorities::default()
            },
            response: "check the piezometers named by hand; walk crest, slopes, toe and abutments and look at weirs and \
                       drains for more or cloudy water; where anything is out of the ordinary follow the emergency action plan"
                .to_owned(),
            ..Self::default()
        }
    }
}

/// Alarms for what cannot be judged.
#[derive(Debug, Clone, PartialEq)]
pub struct BlindSettings {
    /// A gauge must be blind for this long before it is told, and seen for this long before it is normal again
    /// \[s of sample time, 0+\].
    pub delay: f64,
    /// How soon to act.
    pub priority: Priority,
    /// What to do.
    pub response: String,
}

impl Default for BlindSettings {
    fn default() -> Self {
        Self {
            delay: 7200.0,
            priority: Priority::Medium,
            response: "find out why, and watch by other means meanwhile".to_owned(),
        }
    }
}

/// A channel whose silence is told.
#[derive(Debug, Clone, PartialEq)]
pub struct ChannelWatch {
    /// Which channel.
    pub channel: ChannelId,
    /// Which source it comes from; silent together, its channels are one alarm.
    pub source: SourceName,
    /// Gauge it feeds, by order in the ground: its silence makes that gauge blind.
    pub gauge: Option<usize>,
    /// Longest time without a newer usable sample \[s, above 0\].
    pub silence: f64,
}
