//! The site as read: what the other rooms are given.

use std::collections::BTreeMap;
use std::net::{Ipv4Addr, SocketAddr};
use std::path::PathBuf;
use std::time::Duration;

use borewake_model::ground::Ground;
use borewake_model::lagged::{Driver, Embankment};
use borewake_model::units::UnitSystem;

use super::{
    ChannelSettings, MqttEndpoint, Note, SecretFile, SourceConfig, SourceSettings, TopicPattern,
};
use crate::record::{AlarmId, ChannelId, Holds, Names, Priority, SourceName, Stamp};

/// A site file that holds: every reference resolved, every quantity in SI.
#[derive(Debug, Clone)]
pub struct Site {
    /// The file it was read from.
    pub path: PathBuf,
    /// The file's text as read.
    pub text: String,
    /// Name in topics and file names: lower-case letters, digits and hyphens.
    pub id: String,
    /// Name for people.
    pub name: String,
    /// How numbers are shown.
    pub units: UnitSystem,
    /// Latitude and longitude of the local origin \[degrees\], where stated.
    pub origin: Option<(f64, f64)>,
    /// Where state lives.
    pub store: StoreSettings,
    /// What is under the site.
    pub ground: Ground,
    /// Wells, in the order of [`Ground::wells`].
    pub wells: Vec<WellSettings>,
    /// Open water that drives the ground: stages, in the order of [`Ground::stages`], then the edge where it is driven.
    pub waters: Vec<WaterSettings>,
    /// Gauges, in the order of [`Ground::gauges`].
    pub gauges: Vec<GaugeSettings>,
    /// What an embankment answers to; `None` for a field of wells.
    pub embankment: Option<EmbankmentSettings>,
    /// Channels known by name, those that wells and gauges take from a pattern included.
    pub channels: BTreeMap<ChannelId, ChannelSettings>,
    /// Channels whose names have placeholders, filled in from the topic at run time.
    pub patterns: Vec<PatternChannel>,
    /// Sources, in file order.
    pub sources: Vec<SourceSettings>,
    /// What is asked of the watch.
    pub watch: WatchConfig,
    /// Limits, one a side, in file order.
    pub limits: Vec<LimitSettings>,
    /// Where events go, in file order.
    pub publish: Vec<PublishSettings>,
    /// What the wall clock brings about for alarms.
    pub care: AlarmCare,
    /// Where the page and its data are served.
    pub http: HttpSettings,
    /// What was accepted but is not acted on, or looks odd.
    pub notes: Vec<Note>,
}

/// A channel whose name has placeholders.
#[derive(Debug, Clone, PartialEq)]
pub struct PatternChannel {
    /// Name with placeholders, such as `{gauge}.pressure`.
    pub id: TopicPattern,
    /// Settings of every channel so named; their `id` is the pattern's text.
    pub settings: ChannelSettings,
}

impl Site {
    /// Settings of a channel, by its name or by the pattern its name fits.
    #[must_use]
    pub fn channel(&self, id: &ChannelId) -> Option<ChannelSettings> {
        self.channels.get(id).cloned().or_else(|| {
            let pattern = self.patterns.iter().find(|p| p.id.fits(&id.0))?;
            Some(ChannelSettings {
                id: id.clone(),
                ..pattern.settings.clone()
            })
        })
    }

    /// Names of what findings know by number, in the ground's order.
    #[must_use]
    pub fn names(&self) -> Names {
        let ground = &self.ground;
        Names {
            site: self.id.clone(),
            units: self.units,
            gauges: ground.gauges.iter().map(|g| g.name.clone()).collect(),
            wells: ground.wells.iter().map(|w| w.name.clone()).collect(),
            neighbours: ground.neighbours.iter().map(|n| n.name.clone()).collect(),
            layers: ground.layers.iter().map(|l| l.name.clone()).collect(),
        }
    }

    /// A source by name.
    #[must_use]
    pub fn source(&self, name: &SourceName) -> Option<&SourceSettings> {
        self.sources.iter().find(|s| s.name == *name)
    }

    /// Every broker named, in file order.
    pub fn brokers(&self) -> impl Iterator<Item = &MqttEndpoint> {
        let sources = self.sources.iter().filter_map(|s| match &s.config {
            SourceConfig::Mqtt(source) => Some(&source.endpoint),
            _ => None,
        });
        let publish = self.publish.iter().map(|p| match p {
            PublishSettings::Mqtt(publish) => &publish.endpoint,
        });
        sources.chain(publish)
    }

    /// Every secret file named, in file order.
    pub fn secrets(&self) -> impl Iterator<Item = &SecretFile> {
        self.brokers().filter_map(|broker| broker.password.as_ref())
    }

    /// The command that renews the ground file, for messages.
    #[must_use]
    pub fn commission_command(&self) -> String {
        format!("borewake commission {}", self.path.display())
    }
}

/// Where state lives.
#[derive(Debug, Clone, PartialEq)]
pub struct StoreSettings {
    /// Database, ground file, checkpoints, socket; relative paths start at the site file's folder.
    pub folder: PathBuf,
    /// How long raw readings are kept; `None` for ever.
    pub keep_raw: Option<Duration>,
    /// Size the folder may grow to \[bytes\]; `None` without bound.
    pub max_size: Option<u64>,
}

/// A well's channel and meter.
#[derive(Debug, Clone, PartialEq)]
pub struct WellSettings {
    /// Name in the site file.
    pub name: String,
    /// Channel of its rate.
    pub rate: ChannelId,
    /// Share of the channel's rate that enters this well, above 0 and at most 1.
    pub share: f64,
    /// How the rate stands to its instant.
    pub holds: Holds,
    /// What is stated of the meter; `None` where it is left to the data.
    pub meter: Option<Meter>,
    /// Rates before the record, in order of time.
    pub past: Vec<PastRate>,
}

/// The channel of open water that drives the ground.
#[derive(Debug, Clone, PartialEq)]
pub struct WaterSettings {
    /// Name in the site file; `edge` for the edge.
    pub name: String,
    /// Channel of its level or pressure.
    pub channel: ChannelId,
    /// How values stand to their instants.
    pub holds: Holds,
    /// Pressure per unit of the channel: one, or that under a metre of water \[Pa/m\].
    pub weight: f64,
}

/// What is stated of a meter. Ratios are standard deviations as a share of the rate.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Meter {
    /// Constant error.
    pub bias: f64,
    /// Error that forgets itself over [`Meter::memory`].
    pub error: f64,
    /// Correlation time of [`Meter::error`].
    pub memory: Duration,
}

/// A rate before the record began; it holds until the next one, or until the record.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PastRate {
    /// When it began.
    pub from: Stamp,
    /// Rate into the ground \[m3/s\].
    pub rate: f64,
}

/// An embankment: what it answers to, in place of a ground with wells.
#[derive(Debug, Clone, PartialEq)]
pub struct EmbankmentSettings {
    /// What acts on it, the pool first.
    pub drives: Vec<DriveSettings>,
    /// Whether the year shows by itself.
    pub season: bool,
    /// Whether it still changes with age.
    pub ageing: bool,
}

impl EmbankmentSettings {
    /// The embankment as the model has it.
    #[must_use]
    pub fn model(&self) -> Embankment {
        Embankment {
            drives: self.drives.iter().map(|d| d.driver).collect(),
            season: self.season,
            ageing: self.ageing,
        }
    }
}

/// A channel that acts on an embankment.
#[derive(Debug, Clone, PartialEq)]
pub struct DriveSettings {
    /// What it is.
    pub driver: Driver,
    /// Its channel.
    pub channel: ChannelId,
    /// What the channel's values are multiplied by: levels \[m\] become pressures \[Pa\].
    pub factor: f64,
    /// How values stand to their instants.
    pub holds: Holds,
}

/// A gauge's channel and what its numbers refer to.
#[derive(Debug, Clone, PartialEq)]
pub struct GaugeSettings {
    /// Name in the site file.
    pub name: String,
    /// Channel of its pressure.
    pub channel: ChannelId,
    /// What its zero is.
    pub reference: Reference,
    /// Elevation of the sensor \[m\].
    pub elevation: Option<f64>,
    /// How it hangs.
    pub string: GaugeString,
    /// Whether the site file states its noise, or a default stands in [`Ground::gauges`].
    pub noise_stated: bool,
    /// Whether the site file states its drift, or a default stands in [`Ground::gauges`].
    pub drift_stated: bool,
}

/// What the zero of a gauge is.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Reference {
    /// Vacuum.
    #[default]
    Absolute,
    /// The atmosphere, through a vent.
    Vented,
    /// The air sealed in at the maker's.
    Sealed,
    /// Another pressure.
    Differential,
}

/// How a gauge hangs.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum GaugeString {
    /// In the bore near the layer.
    #[default]
    Downhole,
    /// At the wellhead.
    Surface,
    /// In a piezometer.
    Piezometer,
}

/// What is asked of the watch.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct WatchConfig {
    /// Mean time between false alarms asked for \[s\].
    pub false_alarm_interval: f64,
    /// How long a block waits for late readings.
    pub lateness: Duration,
    /// How long a missing rate is held before the gauges that feel it are blind.
    pub hold_rate: Duration,
    /// Length of a block; a whole number of seconds.
    pub block: Duration,
}

/// One side of a limit.
#[derive(Debug, Clone, PartialEq)]
pub struct LimitSettings {
    /// Name of its alarm, such as `limit-O-2-above`.
    pub alarm: AlarmId,
    /// Gauge, by its order in the ground.
    pub gauge: usize,
    /// The gauge's channel.
    pub channel: ChannelId,
    /// Which side is beyond.
    pub side: Side,
    /// The limit \[Pa\].
    pub value: f64,
    /// How long a value must stay beyond, on sample time; zero is at once.
    pub delay: Duration,
    /// How far back it must come to count as returned \[Pa\], from zero.
    pub deadband: f64,
    /// Named preset of common practice.
    pub practice: Option<String>,
    /// How soon to act.
    pub priority: Priority,
    /// What to do.
    pub response: String,
    /// Who set the number, and when.
    pub author: String,
}

/// Which side of a limit is beyond it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Side {
    /// Values above.
    Above,
    /// Values below.
    Below,
}

/// Where events go.
#[derive(Debug, Clone, PartialEq)]
pub enum PublishSettings {
    /// A broker.
    Mqtt(MqttPublish),
}

/// A broker that events go to.
#[derive(Debug, Clone, PartialEq)]
pub struct MqttPublish {
    /// The broker.
    pub endpoint: MqttEndpoint,
    /// Root of all topics, without slash at its end; the site's id follows.
    pub topic_root: String,
}

/// What the wall clock brings about for alarms.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct AlarmCare {
    /// Longest shelving.
    pub shelve_at_most: Duration,
    /// An acknowledged alarm that stands for so long must be seen again; `None` for never.
    pub realarm: Option<Duration>,
    /// An alarm that nobody has acknowledged for so long is told again as escalated; `None` for never.
    pub escalate: Option<Duration>,
}

impl Default for AlarmCare {
    fn default() -> Self {
        Self {
            shelve_at_most: Duration::from_secs(7 * 86_400),
            realarm: None,
            escalate: None,
        }
    }
}

/// Where the page and its data are served.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct HttpSettings {
    /// Address and port; `None` where nothing is to listen.
    pub listen: Option<SocketAddr>,
    /// Names under which browsers may ask, besides `localhost` and addresses: those of a proxy in front, say.
    pub hosts: Vec<String>,
}

impl HttpSettings {
    /// Port where the site file names none.
    pub const PORT: u16 = 8070;
}

impl Default for HttpSettings {
    fn default() -> Self {
        Self {
            listen: Some(SocketAddr::from((Ipv4Addr::LOCALHOST, Self::PORT))),
            hosts: Vec::new(),
        }
    }
}
