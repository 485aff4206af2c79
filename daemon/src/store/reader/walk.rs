//! Going through a long record in sample order without holding it all.

use std::collections::VecDeque;

use super::super::error::Result;
use super::Reader;
use crate::record::{ChannelId, ClockEpoch, Reading, Stamp};

/// Readings fetched for one channel at a time.
const PIECE: i64 = 4096;

/// Readings of some channels one after another, ordered by sampled instant, channel name and clock epoch.
#[derive(Debug)]
pub struct Walk {
    reader: Reader,
    to: Stamp,
    lanes: Vec<Lane>,
}

/// What is fetched of one channel and not yet given.
#[derive(Debug)]
struct Lane {
    channel: ChannelId,
    waiting: VecDeque<Reading>,
    /// Where to fetch on; `None` once the channel is done.
    from: Option<(Stamp, ClockEpoch)>,
}

impl Reader {
    /// Goes through readings of some channels sampled from `from` up to but not at `to`. Readings committed
    /// meanwhile may or may not be met.
    #[must_use]
    pub fn walk(&self, channels: &[ChannelId], from: Stamp, to: Stamp) -> Walk {
        let mut channels = channels.to_vec();
        channels.sort();
        channels.dedup();
        Walk {
            reader: self.clone(),
            to,
            lanes: channels
                .into_iter()
                .map(|channel| Lane {
                    channel,
                    waiting: VecDeque::new(),
                    from: Some((from, ClockEpoch(0))),
                })
                .collect(),
        }
    }
}

impl Walk {
    /// The next reading; `None` at the end.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn next(&mut self) -> Result<Option<Reading>> {
        for lane in &mut self.lanes {
            lane.fetch(&self.reader, self.to).await?;
        }
        // Lanes are sorted by name, so the first of equals is the one due.
        let due = self
            .lanes
            .iter_mut()
            .filter(|lane| !lane.waiting.is_empty())
            .min_by_key(|lane| lane.waiting.front().map(|r| r.sampled));
        Ok(due.and_then(|lane| lane.waiting.pop_front()))
    }
}

impl Lane {
    async fn fetch(&mut self, reader: &Reader, to: Stamp) -> Result<()> {
        let Some(from) = self.from else {
            return Ok(());
        };
        if !self.waiting.is_empty() {
            return Ok(());
        }
        let page = reader.page(&self.channel, from, to, PIECE).await?;
        self.from = page
            .last()
            .map(|last| (last.sampled, ClockEpoch(last.epoch.0.saturating_add(1))));
        self.waiting = page.into();
        Ok(())
    }
}
