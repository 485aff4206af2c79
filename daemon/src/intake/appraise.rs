//! What stands between a source and the store: conversions that need more than the number itself, and tests of quality.
//!
//! Readings pass in the order in which they are committed, live and from a log alike. A reading of an instrument comes in with
//! its number and no value (see `decode::reading`), so that a path which forgets this room delivers no value rather than a
//! wrong one.

use std::collections::BTreeMap;
use std::sync::Arc;

use super::instrument::{Beside, Memory, Outcome, Wanted, change};
use super::quality::{Candidate, History, judge};
use crate::config::{ChannelSettings, Companion, PatternChannel, Site};
use crate::record::{ChannelId, Delivery, DeviceStatus, Quality, Reading, Stamp};

/// Converts and judges readings.
#[derive(Debug, Default)]
pub struct Appraiser {
    named: BTreeMap<ChannelId, Arc<ChannelSettings>>,
    patterns: Vec<PatternChannel>,
    memories: BTreeMap<ChannelId, Memory>,
    histories: BTreeMap<ChannelId, History>,
    /// The newest of every channel that another one needs.
    latest: BTreeMap<ChannelId, Latest>,
}

/// The newest usable value of a channel, and the newest number, each with its instant.
#[derive(Debug, Clone, Copy, Default)]
struct Latest {
    value: Option<(Stamp, f64)>,
    number: Option<(Stamp, f64)>,
}

impl Appraiser {
    /// Of a site's channels.
    #[must_use]
    pub fn new(site: &Site) -> Self {
        let channels = site.channels.values();
        let all = channels.chain(site.patterns.iter().map(|p| &p.settings));
        let needed = all.flat_map(ChannelSettings::companions);
        let latest = needed
            .map(|c| (c.channel.clone(), Latest::default()))
            .collect();
        let named = site.channels.iter();
        let patterns = site.patterns.iter();
        Self {
            named: named
                .filter(|(_, c)| is_appraised(c))
                .map(|(id, c)| (id.clone(), Arc::new(c.clone())))
                .collect(),
            patterns: patterns
                .filter(|p| is_appraised(&p.settings))
                .cloned()
                .collect(),
            memories: BTreeMap::new(),
            histories: BTreeMap::new(),
            latest,
        }
    }

    /// Channels whose last values are to be [recalled](Self::recall) at a start.
    pub fn companions(&self) -> impl Iterator<Item = &ChannelId> {
        self.latest.keys()
    }

    /// Takes up a stored reading: a start must not leave an instrument without its companions until they report again, which
    /// may take as long as the barometer likes.
    pub fn recall(&mut self, reading: &Reading) {
        let settings = self.settings(&reading.channel);
        self.remember(settings.as_deref(), reading);
    }

    /// Gives every reading of an instrument its value, and every tested one its quality. The rest passes through untouched.
    pub fn appraise(&mut self, deliveries: &mut [Delivery]) {
        if self.named.is_empty() && self.patterns.is_empty() {
            return;
        }
        for delivery in deliveries {
            // Of one instant companions come first, in whatever order they stand; else everything goes in its order, so that
            // it makes no difference how readings are gathered into deliveries.
            let scans = delivery
                .readings
                .chunk_by_mut(|a, b| a.sampled == b.sampled);
            for scan in scans {
                for last in [false, true] {
                    for reading in scan.iter_mut() {
                        if self.waits(&reading.channel) == last {
                            self.one(reading);
                        }
                    }
                }
            }
        }
    }

    /// Whether a channel needs another's value.
    fn waits(&self, channel: &ChannelId) -> bool {
        let settings = self.settings(channel);
        settings.is_some_and(|s| s.companions().next().is_some())
    }

    fn settings(&self, channel: &ChannelId) -> Option<Arc<ChannelSettings>> {
        let fitting = || {
            let found = self.patterns.iter().find(|p| p.id.fits(&channel.0))?;
            Some(Arc::new(found.settings.clone()))
        };
        self.named.get(channel).cloned().or_else(fitting)
    }

    fn one(&mut self, reading: &mut Reading) {
        let settings = self.settings(&reading.channel);
        if let Some(settings) = settings.as_ref().filter(|s| s.is_instrument()) {
            self.convert(settings, reading);
        }
        if let Some(tests) = settings.as_ref().and_then(|s| s.quality.as_deref())
            && let (Some(value), true) = (reading.value, reading.is_usable())
        {
            let history = self.histories.entry(reading.channel.clone()).or_default();
            let candidate = Candidate {
                sampled: reading.sampled,
                epoch: reading.epoch,
                value,
                raw: reading.raw.unwrap_or(value),
            };
            let found = judge(tests, history, candidate);
            reading.quality = reading.quality.max_concern(found);
        }
        self.remember(settings.as_deref(), reading);
    }

    /// Keeps what another channel may need.
    fn remember(&mut self, settings: Option<&ChannelSettings>, reading: &Reading) {
        let Some(latest) = self.latest.get_mut(&reading.channel) else {
            return;
        };
        let sampled = reading.sampled;
        let keep = |slot: &mut Option<(Stamp, f64)>, new: Option<f64>| {
            if let Some(new) = new
                && slot.is_none_or(|(at, _)| at <= sampled)
            {
                *slot = Some((sampled, new));
            }
        };
        let value = reading.value.filter(|_| reading.is_usable());
        let number = match settings.filter(|s| s.instrument.is_some()) {
            Some(settings) => reading.raw.map(|raw| settings.conversion.to_si(raw)),
            None => value,
        };
        keep(&mut latest.value, value);
        keep(&mut latest.number, number);
    }

    fn convert(&mut self, settings: &ChannelSettings, reading: &mut Reading) {
        // A gap stays a gap, and what is known of it stays too.
        let Some(raw) = reading.raw.filter(|_| reading.quality != Quality::Missing) else {
            return;
        };
        let latest = &self.latest;
        let sampled = reading.sampled;
        let beside = |companion: &Companion, wanted: Wanted| {
            let latest = latest.get(&companion.channel)?;
            let (at, value) = match wanted {
                Wanted::Value => latest.value,
                Wanted::Number => latest.number,
            }?;
            let apart = u128::from(at.0.abs_diff(sampled.0));
            Some(Beside {
                value,
                fresh: apart <= companion.within.as_micros(),
            })
        };
        let number = settings.conversion.to_si(raw);
        let mut outcome = match &settings.instrument {
            None => Outcome::of(Some(number), Quality::Good),
            Some(instrument) => {
                let memory = self.memories.entry(reading.channel.clone()).or_default();
                instrument.convert(number, sampled, reading.epoch, memory, beside)
            }
        };
        if let (Some(reference), Some(pressure)) = (&settings.reference, outcome.value) {
            let barometer = reference.barometer.as_ref();
            let barometer = barometer.and_then(|b| beside(b, Wanted::Value));
            let changed = change(reference, pressure, outcome.quality, barometer);
            outcome.value = changed.value;
            outcome.quality = changed.quality;
        }
        if let Some(column) = &settings.column {
            outcome.value = outcome.value.map(|p| column.at_datum(p));
        }
        let value = outcome.value.filter(|v| v.is_finite());
        let quality = if value.is_none() && outcome.value.is_some() {
            Quality::Bad
        } else {
            outcome.quality
        };
        reading.value = value;
        // What the sender said of it counts where it is worse: a deferred reading came in as not evaluated.
        reading.quality = match reading.quality {
            Quality::Good | Quality::NotEvaluated => quality,
            stated => stated.max_concern(quality),
        };
        if outcome.device != DeviceStatus::Normal {
            reading.device = outcome.device;
        }
    }
}

fn is_appraised(settings: &ChannelSettings) -> bool {
    settings.is_instrument() || settings.quality.is_some()
}

#[cfg(test)]
mod tests;
