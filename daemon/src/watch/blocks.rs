//! Builds a closed block from the readings that fall into it.
//!
//! A block is a function of readings in sample order and of nothing else, so that it comes out the same
//! live, after a restart, and from a log.

use std::collections::BTreeMap;

use crate::record::{Block, ChannelId, GaugeBlock, Holds, RateKnown, RatePath, Reading, Stamp};

/// Sample instants closer than this share one evaluation of the model \[µs\].
const CELL: i64 = 60 * Stamp::SECOND;

/// Which channel feeds an input of the ground, a well or open water, or drives an embankment, and how.
#[derive(Debug, Clone, PartialEq)]
pub struct WellFeed {
    /// Its rate channel, or that of its level or pressure.
    pub channel: ChannelId,
    /// Share of a meter that several wells have in common; of open water the pressure per unit of its channel.
    pub share: f64,
    /// How values stand to their instants.
    pub holds: Holds,
    /// What its silence does.
    pub feeds: Feeds,
}

/// What a channel is to the model: what its silence does, and what stands before its first reading.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Feeds {
    /// A rate: gauges are blind while it is too old, and before it was read nothing flowed.
    Rate,
    /// A level: gauges are blind while it is too old, and before it was read there is nothing to say.
    Level,
    /// What only colours an embankment's answer: it is held however old.
    Colour,
    /// Rain: too old it counts as its mean, for no rain lasts.
    Rain,
}

impl Feeds {
    /// How a path is known whose last reading is too old, or absent.
    fn known(self, read: bool) -> RateKnown {
        match self {
            Self::Colour if read => RateKnown::Read,
            Self::Rain => RateKnown::Lapsed,
            _ => RateKnown::Stale,
        }
    }
}

/// What a block is built for: the channels of wells and gauges in the ground's order, and the tier's times.
#[derive(Debug, Clone, PartialEq)]
pub struct BlockPlan {
    /// Length of a block \[µs\].
    pub length: i64,
    /// How long a rate holds without being read again \[µs\].
    pub hold_rate: i64,
    /// One per input of the ground, in its order: wells, then open water; or one per drive of an embankment.
    pub wells: Vec<WellFeed>,
    /// Pressure channel of each gauge.
    pub gauges: Vec<ChannelId>,
}

impl BlockPlan {
    /// Number of the block that holds an instant.
    #[must_use]
    pub fn index_of(&self, at: Stamp) -> i64 {
        at.0.div_euclid(self.length)
    }

    /// Length of a block \[s\].
    #[must_use]
    pub fn seconds(&self) -> f64 {
        seconds(self.length)
    }

    /// First instant of a block.
    #[must_use]
    pub fn start_of(&self, block: i64) -> Stamp {
        Stamp(block.saturating_mul(self.length))
    }

    /// All channels a block is built from, each once.
    #[must_use]
    pub fn channels(&self) -> Vec<ChannelId> {
        let mut all: Vec<ChannelId> = self
            .wells
            .iter()
            .map(|w| w.channel.clone())
            .chain(self.gauges.iter().cloned())
            .collect();
        all.sort();
        all.dedup();
        all
    }

    /// The first block that a reading has a part in; `None` where no block is built from its channel. A rate that is
    /// the mean up to its instant belongs to the block that ends there too.
    #[must_use]
    pub fn first_block_of(&self, reading: &Reading) -> Option<i64> {
        let block = self.index_of(reading.sampled);
        let mut wells = self.wells.iter().filter(|w| w.channel == reading.channel);
        let up_to =
            wells.any(|w| w.holds == Holds::Before) && self.start_of(block) == reading.sampled;
        if up_to {
            return Some(block.saturating_sub(1));
        }
        let feeds = self.gauges.contains(&reading.channel)
            || self.wells.iter().any(|w| w.channel == reading.channel);
        feeds.then_some(block)
    }

    /// Builds a block.
    ///
    /// `within` holds the readings of [`Self::channels`] with `start <= sampled < end` (a rate that holds
    /// before its instant may also stand at `end`), each channel in sample order; `before` the last usable
    /// reading of each channel before `start`.
    #[must_use]
    pub fn build(
        &self,
        index: i64,
        within: &BTreeMap<ChannelId, Vec<Reading>>,
        before: &BTreeMap<ChannelId, Reading>,
    ) -> Block {
        let start = self.start_of(index);
        let end = self.start_of(index + 1);
        let none = Vec::new();
        let of = |channel: &ChannelId| within.get(channel).unwrap_or(&none);
        let rates = self
            .wells
            .iter()
            .map(|w| self.rate(w, start, end, of(&w.channel), before.get(&w.channel)))
            .collect();
        let cells = Cells::of(start, end, self.gauges.iter().map(of));
        let gauges = self
            .gauges
            .iter()
            .map(|g| cells.gauge(start, end, of(g), before.get(g)))
            .collect();
        Block {
            index,
            length: seconds(self.length),
            instants: cells.instants(self.length),
            rates,
            gauges,
        }
    }

    fn rate(
        &self,
        well: &WellFeed,
        start: Stamp,
        end: Stamp,
        within: &[Reading],
        before: Option<&Reading>,
    ) -> RatePath {
        let mut known = before.filter(|r| usable(r).is_some());
        let mut value = known.and_then(usable).unwrap_or(0.0);
        let mut pieces: Vec<(f64, f64)> = Vec::new();
        let mut put = |until: Stamp, rate: f64| {
            let until = seconds(until.0 - start.0);
            match pieces.last_mut() {
                Some(last) if last.1.to_bits() == rate.to_bits() => last.0 = until,
                _ if until > 0.0 => pieces.push((until, rate)),
                _ => {}
            }
        };
        for reading in within {
            let Some(next) = usable(reading) else {
                continue;
            };
            let at = reading.sampled.min(end);
            match well.holds {
                Holds::After => {
                    if reading.sampled >= end {
                        break;
                    }
                    put(at, value * well.share);
                }
                Holds::Before => put(at, next * well.share),
            }
            value = next;
            known = Some(reading);
        }
        put(end, value * well.share);
        let fresh = known
            .is_some_and(|r| end.0 - r.sampled.0 <= self.hold_rate.saturating_add(self.length));
        RatePath {
            pieces,
            known: if fresh {
                RateKnown::Read
            } else {
                well.feeds.known(known.is_some())
            },
        }
    }
}

/// The minute cells of a block that hold gauge readings.
struct Cells {
    /// Cell number to (sum of offsets in µs, count).
    cells: BTreeMap<i64, (i64, i64)>,
}

impl Cells {
    fn of<'a>(start: Stamp, end: Stamp, gauges: impl Iterator<Item = &'a Vec<Reading>>) -> Self {
        let mut cells = BTreeMap::new();
        for reading in gauges.flatten().filter(|r| counts(r, start, end)) {
            let offset = reading.sampled.0 - start.0;
            let cell: &mut (i64, i64) = cells.entry(offset.div_euclid(CELL)).or_default();
            cell.0 += offset;
            cell.1 += 1;
        }
        Self { cells }
    }

    /// Mean instant of each cell \[s from the start\]; the middle of the block where nothing was read.
    fn instants(&self, length: i64) -> Vec<f64> {
        if self.cells.is_empty() {
            return vec![seconds(length) / 2.0];
        }
        self.cells
            .values()
            .map(|(sum, n)| seconds(sum.div_euclid(*n)))
            .collect()
    }

    fn gauge(
        &self,
        start: Stamp,
        end: Stamp,
        within: &[Reading],
        before: Option<&Reading>,
    ) -> Option<GaugeBlock> {
        let mut counts_of: BTreeMap<i64, u32> = BTreeMap::new();
        let (mut sum, mut count, mut changed) = (0.0, 0_u32, false);
        let mut last = before.and_then(|r| r.raw.or(r.value));
        for reading in within.iter().filter(|r| counts(r, start, end)) {
            let Some(value) = usable(reading) else {
                continue;
            };
            sum += value;
            count += 1;
            *counts_of
                .entry((reading.sampled.0 - start.0).div_euclid(CELL))
                .or_default() += 1;
            let raw = reading.raw.or(reading.value);
            changed |= raw.map(f64::to_bits) != last.map(f64::to_bits);
            last = raw;
        }
        if count == 0 {
            return None;
        }
        let share = 1.0 / f64::from(count);
        let weights = self
            .cells
            .keys()
            .map(|c| f64::from(counts_of.get(c).copied().unwrap_or(0)) * share)
            .collect();
        Some(GaugeBlock {
            mean: sum * share,
            count,
            weights,
            changed,
        })
    }
}

fn counts(reading: &Reading, start: Stamp, end: Stamp) -> bool {
    reading.sampled >= start && reading.sampled < end && usable(reading).is_some()
}

fn usable(reading: &Reading) -> Option<f64> {
    reading.value.filter(|_| reading.is_usable())
}

#[expect(
    clippy::cast_precision_loss,
    reason = "spans within a block fit 53 bits of microseconds"
)]
fn seconds(micros: i64) -> f64 {
    micros as f64 / 1e6
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::{ClockEpoch, ClockState, DeviceStatus, Quality};

    fn reading(channel: &str, second: i64, value: f64) -> Reading {
        let at = Stamp(second * Stamp::SECOND);
        Reading {
            channel: channel.into(),
            sampled: at,
            received: at,
            epoch: ClockEpoch(0),
            value: Some(value),
            raw: Some(value),
            quality: Quality::Good,
            device: DeviceStatus::Normal,
            clock: ClockState::Foreign,
        }
    }

    fn plan(holds: Holds) -> BlockPlan {
        BlockPlan {
            length: 3600 * Stamp::SECOND,
            hold_rate: 3600 * Stamp::SECOND,
            wells: vec![WellFeed {
                channel: "q".into(),
                share: 0.5,
                holds,
                feeds: Feeds::Rate,
            }],
            gauges: vec!["p".into(), "o".into()],
        }
    }

    fn series(readings: &[Reading]) -> BTreeMap<ChannelId, Vec<Reading>> {
        let mut map: BTreeMap<ChannelId, Vec<Reading>> = BTreeMap::new();
        for r in readings {
            map.entry(r.channel.clone()).or_default().push(r.clone());
        }
        map
    }

    #[test]
    fn a_rate_holds_after_its_instant_and_from_before_the_block() {
        let within = series(&[reading("q", 3600 + 600, 4.0)]);
        let before = BTreeMap::from([("q".into(), reading("q", 3000, 2.0))]);
        let block = plan(Holds::After).build(1, &within, &before);
        assert_eq!(block.rates[0].pieces, vec![(600.0, 1.0), (3600.0, 2.0)]);
        assert_eq!(block.rates[0].known, RateKnown::Read);
    }

    #[test]
    fn a_mean_rate_holds_up_to_its_instant() {
        let within = series(&[reading("q", 3600 + 600, 4.0), reading("q", 7200, 8.0)]);
        let block = plan(Holds::Before).build(1, &within, &BTreeMap::new());
        assert_eq!(block.rates[0].pieces, vec![(600.0, 2.0), (3600.0, 4.0)]);
    }

    #[test]
    fn a_mean_rate_at_a_boundary_is_part_of_the_block_that_ends_there() {
        let at = |second| reading("q", second, 4.0);
        assert_eq!(plan(Holds::Before).first_block_of(&at(7200)), Some(1));
        assert_eq!(plan(Holds::Before).first_block_of(&at(7201)), Some(2));
        assert_eq!(plan(Holds::After).first_block_of(&at(7200)), Some(2));
        assert_eq!(
            plan(Holds::Before).first_block_of(&reading("p", 7200, 1.0)),
            Some(2)
        );
        assert_eq!(
            plan(Holds::After).first_block_of(&reading("x", 7200, 1.0)),
            None
        );
    }

    #[test]
    fn an_old_rate_is_stale_and_an_absent_one_too() {
        let before = BTreeMap::from([("q".into(), reading("q", 0, 2.0))]);
        let p = plan(Holds::After);
        assert_eq!(
            p.build(3, &BTreeMap::new(), &before).rates[0].known,
            RateKnown::Stale
        );
        assert_eq!(
            p.build(1, &BTreeMap::new(), &before).rates[0].known,
            RateKnown::Read
        );
        assert_eq!(
            p.build(0, &BTreeMap::new(), &BTreeMap::new()).rates[0].known,
            RateKnown::Stale
        );
    }

    #[test]
    fn silent_rain_lapses_and_what_only_colours_is_held() {
        let before = BTreeMap::from([("q".into(), reading("q", 0, 2.0))]);
        let mut plan = plan(Holds::After);
        let mut known = |feeds, index, before: &BTreeMap<ChannelId, Reading>| {
            plan.wells[0].feeds = feeds;
            plan.build(index, &BTreeMap::new(), before).rates[0].known
        };
        assert_eq!(known(Feeds::Rain, 1, &before), RateKnown::Read);
        assert_eq!(known(Feeds::Rain, 3, &before), RateKnown::Lapsed);
        assert_eq!(known(Feeds::Rain, 1, &BTreeMap::new()), RateKnown::Lapsed);
        assert_eq!(known(Feeds::Level, 3, &before), RateKnown::Stale);
        assert_eq!(known(Feeds::Colour, 3, &before), RateKnown::Read);
        assert_eq!(known(Feeds::Colour, 1, &BTreeMap::new()), RateKnown::Stale);
    }

    #[test]
    fn wells_on_one_meter_share_its_values_and_its_silence() {
        let mut plan = plan(Holds::After);
        let mut other = plan.wells[0].clone();
        other.share = 0.2;
        plan.wells.push(other);
        let before = BTreeMap::from([("q".into(), reading("q", 3000, 10.0))]);
        let block = plan.build(1, &BTreeMap::new(), &before);
        assert_eq!(block.rates[0].pieces, vec![(3600.0, 5.0)]);
        assert_eq!(block.rates[1].pieces, vec![(3600.0, 2.0)]);
        let known = |index| {
            let block = plan.build(index, &BTreeMap::new(), &before);
            block.rates.iter().map(|r| r.known).collect::<Vec<_>>()
        };
        assert_eq!(known(1), [RateKnown::Read; 2]);
        assert_eq!(known(3), [RateKnown::Stale; 2]);
    }

    #[test]
    fn gauges_keep_their_own_instants_and_bad_values_do_not_count() {
        let mut bad = reading("p", 1200, 99.0);
        bad.quality = Quality::Bad;
        let within = series(&[
            reading("p", 0, 1.0),
            reading("p", 600, 3.0),
            bad,
            reading("o", 600, 5.0),
        ]);
        let block = plan(Holds::After).build(0, &within, &BTreeMap::new());
        assert_eq!(block.instants, vec![0.0, 600.0]);
        let p = block.gauges[0].as_ref().unwrap();
        assert_eq!(
            (p.mean, p.count, p.weights.clone(), p.changed),
            (2.0, 2, vec![0.5, 0.5], true)
        );
        assert_eq!(block.gauges[1].as_ref().unwrap().weights, vec![0.0, 1.0]);
    }

    #[test]
    fn a_frozen_raw_value_is_seen_across_blocks() {
        let within = series(&[reading("p", 3600, 7.0), reading("p", 4200, 7.0)]);
        let before = BTreeMap::from([("p".into(), reading("p", 3000, 7.0))]);
        let block = plan(Holds::After).build(1, &within, &before);
        assert!(!block.gauges[0].as_ref().unwrap().changed);
        assert!(block.gauges[1].is_none());
    }
}
