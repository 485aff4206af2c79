//! From the number a source delivers to the SI value of its channel.

use std::collections::BTreeMap;
use std::sync::Arc;

use super::decode::{Refusal, cut};
use crate::config::{ChannelSettings, Conversion, Site, TopicPattern};
use crate::record::{ChannelId, RejectReason};

/// What the numbers of a channel mean.
#[derive(Debug, Clone, PartialEq)]
pub struct Meaning {
    /// From the delivered number to SI.
    pub conversion: Conversion,
    /// The unit that may stand behind the number, where the device writes it; any other is refused.
    pub unit: Option<Arc<str>>,
    /// The value needs more than the number: the [`Appraiser`](super::Appraiser) gives it.
    pub deferred: bool,
}

impl From<Conversion> for Meaning {
    /// Numbers with no unit behind them.
    fn from(conversion: Conversion) -> Self {
        Self {
            conversion,
            unit: None,
            deferred: false,
        }
    }
}

impl From<&ChannelSettings> for Meaning {
    fn from(settings: &ChannelSettings) -> Self {
        Self {
            conversion: settings.conversion,
            // Behind an instrument's own number stands no unit of what it measures.
            unit: settings
                .instrument
                .is_none()
                .then(|| settings.unit.as_str().into()),
            deferred: settings.is_instrument(),
        }
    }
}

/// The meaning of every channel the site file knows.
#[derive(Debug, Clone, Default)]
pub struct Conversions {
    named: BTreeMap<ChannelId, Meaning>,
    patterns: Vec<(TopicPattern, Meaning)>,
}

impl Conversions {
    /// Channels known by name, and those known by a pattern that their name fits.
    #[must_use]
    pub fn new<N: Into<Meaning>, P: Into<Meaning>>(
        named: impl IntoIterator<Item = (ChannelId, N)>,
        patterns: impl IntoIterator<Item = (TopicPattern, P)>,
    ) -> Self {
        let named = named.into_iter().map(|(id, m)| (id, m.into()));
        let patterns = patterns.into_iter().map(|(p, m)| (p, m.into()));
        Self {
            named: named.collect(),
            patterns: patterns.collect(),
        }
    }

    /// Meaning of a channel, by its name or by the first pattern that its name fits.
    ///
    /// # Errors
    /// The site does not know the channel.
    pub(crate) fn of(&self, channel: &ChannelId) -> Result<&Meaning, Refusal> {
        let fitting = || {
            let fits = |(pattern, _): &&(TopicPattern, Meaning)| pattern.fits(&channel.0);
            self.patterns.iter().find(fits).map(|(_, meaning)| meaning)
        };
        self.named.get(channel).or_else(fitting).ok_or_else(|| {
            let name = cut(&channel.0, 60);
            Refusal::new(
                RejectReason::UnknownChannel,
                format!("the site file does not know channel \"{name}\""),
            )
        })
    }
}

impl From<&Site> for Conversions {
    fn from(site: &Site) -> Self {
        let named = site.channels.iter().map(|(id, c)| (id.clone(), c));
        let patterns = site.patterns.iter().map(|p| (p.id.clone(), &p.settings));
        Self::new(named, patterns)
    }
}

/// For tests: thousands, in kPa.
#[cfg(test)]
pub(crate) fn kilo() -> Meaning {
    Meaning {
        conversion: Conversion {
            scale: 1e3,
            offset: 0.0,
        },
        unit: Some("kPa".into()),
        deferred: false,
    }
}
