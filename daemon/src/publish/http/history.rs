//! What the watch said of every block, in columns, for plots.
//!
//! Kept in memory for the newest blocks, so that years of one gauge are drawn with no more work than adding up columns.
//! Followed by the journal, so that a re-run's revisions take the place of what was said before.

use std::collections::VecDeque;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::time::Duration;

use tokio::time::sleep;

use super::asking::Asking;
use crate::record::{Blind, EntryKind, Step};
use crate::store::{Reader, StoreError};

/// Most values kept, over all gauges: 16 bytes each.
const MOST: usize = 1_200_000;
/// Blocks, or entries of the journal, read at a time.
const PIECE: i64 = 500;
/// How often the journal is looked at.
const EVERY: Duration = Duration::from_millis(700);

/// One gauge in one block \[Pa\]; NaN where there is none.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Cell {
    /// Mean of the expectation, as a double: small departures ride on large pressures.
    pub(super) mean: f64,
    /// Standard deviation of the block mean about it.
    pub(super) sd: f32,
    /// Reading less mean.
    pub(super) departure: f32,
}

impl Cell {
    const NONE: Self = Self {
        mean: f64::NAN,
        sd: f32::NAN,
        departure: f32::NAN,
    };

    /// The departure in its own standard deviations.
    pub(super) fn ratio(self) -> f64 {
        f64::from(self.departure) / f64::from(self.sd)
    }
}

/// All gauges in all blocks kept.
#[derive(Debug, Default)]
pub(super) struct Columns {
    /// Number of the first block.
    pub(super) first: i64,
    /// Blocks in order, none left out; in each, gauges by order in the ground.
    blocks: VecDeque<Box<[Cell]>>,
    /// Why gauges cannot be judged, as the newest block says.
    pub(super) blind: Vec<Option<Blind>>,
    /// Log of the mixture and of the threshold, of the newest block.
    pub(super) evidence: Option<(f64, f64)>,
}

impl Columns {
    /// Number of the block after the last.
    pub(super) fn end(&self) -> i64 {
        self.first
            .saturating_add(i64::try_from(self.blocks.len()).unwrap_or(i64::MAX))
    }

    /// One gauge in one block.
    pub(super) fn cell(&self, block: i64, gauge: usize) -> Cell {
        usize::try_from(block.saturating_sub(self.first))
            .ok()
            .and_then(|i| self.blocks.get(i))
            .and_then(|row| row.get(gauge))
            .copied()
            .unwrap_or(Cell::NONE)
    }

    fn take(&mut self, step: &Step, gauges: usize, most: usize) {
        let row: Box<[Cell]> = (0..gauges).map(|gauge| cell(step, gauge)).collect();
        if self.blocks.is_empty() {
            self.first = step.block;
        }
        if step.block < self.first {
            return;
        }
        if step.block >= self.end() {
            // A pause longer than all that is kept starts anew.
            let ahead =
                usize::try_from(step.block.saturating_sub(self.end())).unwrap_or(usize::MAX);
            if ahead > most {
                self.blocks.clear();
                self.first = step.block;
            }
            while self.end() < step.block {
                self.blocks.push_back(vec![Cell::NONE; gauges].into());
            }
            self.blocks.push_back(row);
            self.blind.clone_from(&step.blind);
            self.evidence = Some((step.log_mixture, step.log_threshold));
            while self.blocks.len() > most {
                self.blocks.pop_front();
                self.first = self.first.saturating_add(1);
            }
            return;
        }
        let place = usize::try_from(step.block.saturating_sub(self.first)).ok();
        if let Some(old) = place.and_then(|i| self.blocks.get_mut(i)) {
            *old = row;
        }
        if step.block.saturating_add(1) == self.end() {
            self.blind.clone_from(&step.blind);
            self.evidence = Some((step.log_mixture, step.log_threshold));
        }
    }
}

#[expect(
    clippy::cast_possible_truncation,
    reason = "departures and deviations are drawn, not computed with; out of range becomes infinite, as it should be shown"
)]
fn cell(step: &Step, gauge: usize) -> Cell {
    let Some(expectation) = step.expectations.get(gauge).copied().flatten() else {
        return Cell::NONE;
    };
    let departure = step.departures.get(gauge).copied().flatten();
    Cell {
        mean: expectation.mean,
        sd: expectation.sd as f32,
        departure: departure.map_or(f32::NAN, |d| d as f32),
    }
}

/// The columns, shared by those who read and the one who fills.
#[derive(Debug)]
pub(super) struct History {
    gauges: usize,
    columns: Mutex<Columns>,
}

impl History {
    pub(super) fn new(gauges: usize) -> Self {
        Self {
            gauges,
            columns: Mutex::default(),
        }
    }

    /// The columns as they stand; held for as long as it takes to add some up.
    pub(super) fn columns(&self) -> MutexGuard<'_, Columns> {
        self.columns.lock().unwrap_or_else(PoisonError::into_inner)
    }

    fn most(&self) -> usize {
        MOST / self.gauges.max(1)
    }

    fn take(&self, step: &Step) {
        let most = self.most();
        self.columns().take(step, self.gauges, most);
    }

    /// Reads what is stored; gives the journal's number up to which it is in.
    pub(super) async fn load(&self, reader: &Reader) -> Result<i64, StoreError> {
        // Taken first: what is judged meanwhile is read twice rather than missed.
        let seq = reader.last_seq().await?;
        let Some(last) = reader.last_judged().await? else {
            return Ok(seq);
        };
        let kept = i64::try_from(self.most()).unwrap_or(i64::MAX);
        let mut from = last.saturating_sub(kept);
        loop {
            let page = reader.judged_page(from, i64::MAX, PIECE).await?;
            let Some(end) = page.last() else {
                return Ok(seq);
            };
            from = end.step.block.saturating_add(1);
            for judged in &page {
                self.take(&judged.step);
            }
        }
    }

    /// Takes in what the journal says after a number; gives the number it has come to.
    pub(super) async fn catch_up(&self, reader: &Reader, seq: i64) -> Result<i64, StoreError> {
        let mut seq = seq;
        loop {
            let page = reader.entries_after(seq, PIECE).await?;
            let Some(last) = page.last() else {
                return Ok(seq);
            };
            seq = last.seq;
            for entry in &page {
                if let EntryKind::Judged { step, .. } = &entry.kind {
                    self.take(step);
                }
            }
        }
    }
}

/// Keeps the columns in step with the store, for ever.
pub(super) async fn follow(asking: Arc<Asking>) {
    let (history, reader) = (&asking.history, &asking.reader);
    let mut seq = None;
    loop {
        let done = match seq {
            None => history.load(reader).await,
            Some(seq) => history.catch_up(reader, seq).await,
        };
        match done {
            Ok(now) => seq = Some(now),
            Err(why) => tracing::warn!(%why, "what the watch said cannot be read"),
        }
        sleep(EVERY).await;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::Expectation;

    fn step(block: i64, departure: f64) -> Step {
        Step {
            block,
            expectations: vec![
                Some(Expectation {
                    mean: 1e7,
                    sd: 50.0,
                }),
                None,
            ],
            departures: vec![Some(departure), None],
            blind: vec![None, Some(Blind::NoData)],
            log_mixture: 0.0,
            log_threshold: 1.0,
            finding: None,
        }
    }

    #[test]
    fn blocks_are_kept_in_order_with_gaps_and_revisions() {
        let mut columns = Columns::default();
        for block in [10, 11, 14] {
            columns.take(&step(block, 100.0), 2, 100);
        }
        assert_eq!((columns.first, columns.end()), (10, 15));
        assert!((columns.cell(11, 0).ratio() - 2.0).abs() < 1e-6);
        assert!(columns.cell(12, 0).mean.is_nan() && columns.cell(11, 1).mean.is_nan());
        columns.take(&step(11, -50.0), 2, 100);
        assert!((columns.cell(11, 0).ratio() + 1.0).abs() < 1e-6);
        assert_eq!(columns.end(), 15);
        assert_eq!(columns.blind, [None, Some(Blind::NoData)]);
        // Outside is none.
        assert!(columns.cell(9, 0).mean.is_nan() && columns.cell(99, 0).mean.is_nan());
    }

    #[test]
    fn only_the_newest_are_kept() {
        let mut columns = Columns::default();
        for block in 0..10 {
            columns.take(&step(block, 1.0), 2, 4);
        }
        assert_eq!((columns.first, columns.end()), (6, 10));
        columns.take(&step(2, 1.0), 2, 4);
        assert_eq!(columns.first, 6);
        columns.take(&step(1_000_000, 1.0), 2, 4);
        assert_eq!((columns.first, columns.end()), (1_000_000, 1_000_001));
    }
}
