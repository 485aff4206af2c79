//! History in memory: readings of a log or of the store, cut into blocks the same way the live edge is.

use std::collections::BTreeMap;

use super::blocks::{BlockPlan, Feeds};
use crate::record::{Block, ChannelId, Holds, Reading, Stamp};

/// Readings by channel, each in sample order and each key once.
#[derive(Debug, Clone, Default)]
pub struct History {
    series: BTreeMap<ChannelId, Vec<Reading>>,
}

impl History {
    /// Takes in readings in any order. Of two with one key the first stays, as in the store.
    pub fn add(&mut self, readings: impl IntoIterator<Item = Reading>) {
        for reading in readings {
            let series = self.series.entry(reading.channel.clone()).or_default();
            let key = (reading.sampled, reading.epoch);
            match series.last().map(|r| (r.sampled, r.epoch)) {
                None => series.push(reading),
                Some(last) if last < key => series.push(reading),
                Some(_) => {
                    if let Err(at) = series.binary_search_by_key(&key, |r| (r.sampled, r.epoch)) {
                        series.insert(at, reading);
                    }
                }
            }
        }
    }

    /// Readings of a channel, in sample order.
    #[must_use]
    pub fn of(&self, channel: &ChannelId) -> &[Reading] {
        self.series.get(channel).map_or(&[], Vec::as_slice)
    }

    /// First and last sample instant; `None` when nothing was read.
    #[must_use]
    pub fn span(&self) -> Option<(Stamp, Stamp)> {
        let first = self
            .series
            .values()
            .filter_map(|s| s.first())
            .map(|r| r.sampled)
            .min()?;
        let last = self
            .series
            .values()
            .filter_map(|s| s.last())
            .map(|r| r.sampled)
            .max()?;
        Some((first, last))
    }

    /// Number of readings.
    #[must_use]
    pub fn len(&self) -> usize {
        self.series.values().map(Vec::len).sum()
    }

    /// Whether nothing was read.
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.series.is_empty()
    }

    /// The block of one number.
    #[must_use]
    pub fn block(&self, plan: &BlockPlan, index: i64) -> Block {
        let (start, end) = (plan.start_of(index), plan.start_of(index + 1));
        let mut within = BTreeMap::new();
        let mut before = BTreeMap::new();
        for channel in plan.channels() {
            let Some(series) = self.series.get(&channel) else {
                continue;
            };
            let first = series.partition_point(|r| r.sampled < start);
            let last = series.partition_point(|r| r.sampled <= end);
            let earlier = series.get(..first).unwrap_or_default();
            if let Some(reading) = earlier.iter().rev().find(|r| r.is_usable()) {
                before.insert(channel.clone(), reading.clone());
            }
            if let Some(readings) = series.get(first..last) {
                within.insert(channel, readings.to_vec());
            }
        }
        plan.build(index, &within, &before)
    }

    /// From when on every level of a plan is known, and the channel that was read last of all; `None` where the plan has
    /// none. A level never read is no level of zero, so nothing can be learned before.
    ///
    /// # Errors
    /// The channel of a level that was never read.
    pub fn levels_known(&self, plan: &BlockPlan) -> Result<Option<LevelsKnown>, ChannelId> {
        let mut last: Option<LevelsKnown> = None;
        let levels = plan.wells.iter();
        for level in levels.filter(|w| matches!(w.feeds, Feeds::Level | Feeds::Colour)) {
            let first = self.of(&level.channel).iter().find(|r| r.is_usable());
            let read = first.ok_or_else(|| level.channel.clone())?.sampled;
            let from = match level.holds {
                Holds::After => read,
                // What holds up to its instant says what was in the whole block before it.
                Holds::Before => plan.start_of(plan.index_of(read.plus(-1))),
            };
            if last.as_ref().is_none_or(|l| l.from < from) {
                last = Some(LevelsKnown {
                    from,
                    channel: level.channel.clone(),
                    read,
                });
            }
        }
        Ok(last)
    }

    /// All whole blocks between two instants, in order.
    #[must_use]
    pub fn blocks(&self, plan: &BlockPlan, from: Stamp, to: Stamp) -> Vec<Block> {
        let first = plan.index_of(from.plus(plan.length - 1));
        let end = plan.index_of(to);
        (first..end).map(|index| self.block(plan, index)).collect()
    }
}

/// From when on the levels of a plan are known.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LevelsKnown {
    /// First instant at which all of them are.
    pub from: Stamp,
    /// The last of them to be read.
    pub channel: ChannelId,
    /// Its first reading.
    pub read: Stamp,
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::{ClockEpoch, ClockState, DeviceStatus, Quality};
    use crate::watch::blocks::WellFeed;

    fn reading(second: i64, value: f64) -> Reading {
        let at = Stamp(second * Stamp::SECOND);
        Reading {
            channel: "p".into(),
            sampled: at,
            received: at,
            epoch: ClockEpoch(0),
            value: Some(value),
            raw: None,
            quality: Quality::Good,
            device: DeviceStatus::Normal,
            clock: ClockState::Foreign,
        }
    }

    #[test]
    fn order_of_arrival_does_not_matter_and_the_first_of_a_key_stays() {
        let plan = BlockPlan {
            length: 100 * Stamp::SECOND,
            hold_rate: 0,
            wells: vec![WellFeed {
                channel: "q".into(),
                share: 1.0,
                holds: Holds::After,
                feeds: Feeds::Rate,
            }],
            gauges: vec!["p".into()],
        };
        let mut straight = History::default();
        straight.add([reading(10, 1.0), reading(20, 2.0), reading(130, 3.0)]);
        let mut mixed = History::default();
        mixed.add([
            reading(130, 3.0),
            reading(20, 2.0),
            reading(10, 1.0),
            reading(20, 9.0),
        ]);
        let span = straight.span().unwrap();
        assert_eq!(
            straight
                .blocks(&plan, Stamp(0), span.1.plus(100 * Stamp::SECOND))
                .len(),
            2
        );
        for index in 0..2 {
            assert_eq!(straight.block(&plan, index), mixed.block(&plan, index));
        }
        assert_eq!(mixed.len(), 3);
    }

    #[test]
    fn levels_are_known_from_the_last_one_first_read() {
        let feed = |channel: &str, feeds, holds| WellFeed {
            channel: channel.into(),
            share: 1.0,
            holds,
            feeds,
        };
        let mut plan = BlockPlan {
            length: 100 * Stamp::SECOND,
            hold_rate: 0,
            wells: vec![
                feed("q", Feeds::Rate, Holds::After),
                feed("p", Feeds::Level, Holds::After),
            ],
            gauges: Vec::new(),
        };
        let mut history = History::default();
        assert_eq!(history.levels_known(&plan), Err("p".into()));
        history.add([reading(130, 3.0)]);
        let from = |plan: &BlockPlan| {
            let known = history.levels_known(plan).unwrap();
            known.map(|k| (k.from, k.channel))
        };
        let second = |s: i64| Stamp(s * Stamp::SECOND);
        assert_eq!(from(&plan), Some((second(130), "p".into())));
        plan.wells[1].holds = Holds::Before;
        assert_eq!(from(&plan), Some((second(100), "p".into())));
        plan.wells.truncate(1);
        assert_eq!(from(&plan), None);
    }
}
