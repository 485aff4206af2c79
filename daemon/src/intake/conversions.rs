//! From the number a source delivers to the SI value of its channel.

use std::collections::BTreeMap;

use crate::config::{Conversion, TopicPattern};
use crate::record::ChannelId;

/// The conversion of every channel the site file knows.
#[derive(Debug, Clone, Default)]
pub struct Conversions {
    named: BTreeMap<ChannelId, Conversion>,
    patterns: Vec<(TopicPattern, Conversion)>,
}

impl Conversions {
    /// Conversions of channels known by name, and of those known by a pattern.
    #[must_use]
    pub fn new(
        named: impl IntoIterator<Item = (ChannelId, Conversion)>,
        patterns: impl IntoIterator<Item = (TopicPattern, Conversion)>,
    ) -> Self {
        Self {
            named: named.into_iter().collect(),
            patterns: patterns.into_iter().collect(),
        }
    }

    /// Conversion of a channel, by its name or by the first pattern that it fits; `None` for a channel the site does not know.
    #[must_use]
    pub fn of(&self, channel: &ChannelId) -> Option<Conversion> {
        self.named.get(channel).copied().or_else(|| {
            let fits = |(pattern, _): &&(TopicPattern, Conversion)| pattern.fits(&channel.0);
            self.patterns.iter().find(fits).map(|(_, c)| *c)
        })
    }
}
