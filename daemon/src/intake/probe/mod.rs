//! One talk with every source, for a person who sets it up: what is delivered, and what the site file makes of it.
//!
//! Nothing is stored and nothing acknowledged. A serial port has one reader at a time, so a running daemon must be stopped for
//! its own lines; brokers are entered under a name of their own.

mod listen;
mod modbus;
mod sdi12;

use std::sync::Arc;
use std::time::Duration;

use tokio::sync::watch;

use super::clock::SystemClock;
use super::{Appraiser, Conversions, Surroundings};
use crate::config::{Site, SourceConfig};
use crate::record::{ChannelId, ClockEpoch, Delivery, Reading, SourceName};

/// What a source said.
#[derive(Debug, Clone, PartialEq)]
pub struct SourceProbe {
    /// The source.
    pub name: SourceName,
    /// Why it could not be talked to.
    pub trouble: Option<String>,
    /// Its channels.
    pub channels: Vec<ChannelProbe>,
    /// What else it said.
    pub notes: Vec<String>,
}

/// What a channel delivered.
#[derive(Debug, Clone, PartialEq)]
pub struct ChannelProbe {
    /// The channel; a pattern where no message named one.
    pub channel: String,
    /// Where its number is.
    pub place: String,
    /// What came, as it came.
    pub raw: String,
    /// What the site file makes of it.
    pub reading: Option<Reading>,
    /// Why there is no value.
    pub why: Option<String>,
    /// What the same registers would be in every order of bytes: a wrong order shows.
    pub orders: Vec<(&'static str, f64)>,
}

impl ChannelProbe {
    /// A channel that delivered nothing.
    fn silent(channel: &ChannelId, place: String, why: impl Into<String>) -> Self {
        Self {
            channel: channel.to_string(),
            place,
            raw: String::new(),
            reading: None,
            why: Some(why.into()),
            orders: Vec::new(),
        }
    }

    /// Whether it has a value.
    #[must_use]
    pub fn has_value(&self) -> bool {
        self.reading.as_ref().is_some_and(|r| r.value.is_some())
    }
}

impl SourceProbe {
    /// Whether every channel has a value.
    #[must_use]
    pub fn holds(&self) -> bool {
        self.trouble.is_none() && self.channels.iter().all(ChannelProbe::has_value)
    }

    fn of(name: &SourceName, channels: Vec<ChannelProbe>) -> Self {
        Self {
            name: name.clone(),
            trouble: None,
            channels,
            notes: Vec::new(),
        }
    }

    fn failed(name: &SourceName, why: impl Into<String>) -> Self {
        Self {
            trouble: Some(why.into()),
            ..Self::of(name, Vec::new())
        }
    }
}

/// Talks to every source, in file order; one that speaks by itself is listened to for `wait`.
pub async fn probe(site: &Site, wait: Duration) -> Vec<SourceProbe> {
    let (_running, shutdown) = watch::channel(false);
    let around = Surroundings {
        site: site.id.clone(),
        clock: Arc::new(SystemClock::new(ClockEpoch(0))),
        conversions: Arc::new(Conversions::from(site)),
        shutdown,
    };
    let mut probes = Vec::new();
    for source in &site.sources {
        let name = &source.name;
        probes.push(match &source.config {
            SourceConfig::ModbusRtu(settings) => modbus::rtu(name, settings, &around).await,
            SourceConfig::ModbusTcp(settings) => modbus::tcp(name, settings, &around).await,
            SourceConfig::Sdi12(settings) => sdi12::probe(name, settings, &around).await,
            SourceConfig::TextLine(settings) => {
                listen::lines(source, settings, &around, wait).await
            }
            SourceConfig::Mqtt(settings) => listen::topics(name, settings, &around, wait).await,
            SourceConfig::Log(settings) => listen::log(name, settings),
        });
    }
    appraise(site, &mut probes);
    probes
}

/// Gives the readings of instruments their values, those of all sources together: one may need another's.
fn appraise(site: &Site, probes: &mut [SourceProbe]) {
    let slots = || probes.iter().flat_map(|p| &p.channels);
    let came: Vec<Reading> = slots().filter_map(|c| c.reading.clone()).collect();
    let mut appraiser = Appraiser::new(site);
    let mut valued = |readings: Vec<Reading>| {
        let mut delivery = [Delivery {
            source: "probe".into(),
            readings,
            rejected: Vec::new(),
            ack: None,
        }];
        appraiser.appraise(&mut delivery);
        let [delivery] = delivery;
        delivery.readings
    };
    let mut readings = valued(came.clone());
    // What another needs may have been heard after it: once all have been heard, those without a value are asked again.
    for (reading, came) in readings.iter_mut().zip(came) {
        if reading.value.is_none()
            && let Some(again) = valued(vec![came]).pop()
        {
            *reading = again;
        }
    }
    let all = probes.iter_mut().flat_map(|p| &mut p.channels);
    let with = all.filter(|c| c.reading.is_some());
    for (channel, reading) in with.zip(readings) {
        if reading.value.is_none() && channel.why.is_none() {
            let flag = reading.quality.flag();
            channel.why = Some(format!(
                "no value (quality {flag}): a fault, or another channel it needs has none"
            ));
        }
        channel.reading = Some(reading);
    }
}
