//! The ladder of onsets: for each, running sums of every cause that begins there.
//!
//! Onsets are dense when young and thinned with age; an onset that explains much is kept. A dropped onset's weight
//! passes to its neighbour by `w_nb += w_drop exp(L_drop - L_nb)`, so that the sum over onsets, a Shiryaev-Roberts
//! statistic (Roberts 1966; Pollak 1985), neither gains nor loses by it. Under "nothing" that sum grows by one a block
//! on average, which bounds the mean time to a false alarm from below by the threshold.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges and wells of the frame"
)]

use nalgebra::DMatrix;
use serde::{Deserialize, Serialize};

use super::bank::Bank;
use crate::expect::drive::{Driven, Sampled, Tables};
use crate::expect::frame::{Frame, means};
use crate::expect::posterior::{Lesson, Sums, clear};
use crate::expect::whitener::Whitener;
use crate::finding::Cause;

/// Most onsets held.
const LIMIT: usize = 52;
/// Share of the leading evidence by which an onset may fall short and still be kept.
const NEARLY: f64 = 0.03;

/// Causes with an onset, in the order of [`Onset::weight`].
pub(crate) const CAUSES: [Cause; 6] = [
    Cause::Leak,
    Cause::Interference,
    Cause::GaugeStep,
    Cause::GaugeDrift,
    Cause::MeterScale,
    Cause::Unexplained,
];

/// One onset with its running sums.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Onset {
    /// First block it touches.
    pub(crate) block: i64,
    /// Which of the ladder's slots holds its regressions.
    slot: usize,
    /// Log of its weight in the mixture, by cause.
    pub(crate) weight: [f64; CAUSES.len()],
    /// Sources anywhere, by directions of the bank.
    pub(crate) sources: Sums,
    /// Steps, impulses and ramps of the gauges.
    pub(crate) own: Sums,
    /// Scale of each meter: from the block after the onset's, and within the onset's block.
    pub(crate) meters: Sums,
    /// Unit-port states of each well's rate: since the next block, and within the onset's block.
    since: DMatrix<f64>,
    within: DMatrix<f64>,
    /// Filter state of the meters' signatures.
    filter: DMatrix<f64>,
    /// Whitened meters' signatures not yet taken in.
    pending: DMatrix<f64>,
    /// Log evidence by cause when last asked.
    pub(crate) evidence: [f64; CAUSES.len()],
    /// Block after which it was last asked.
    pub(crate) asked: i64,
}

/// All onsets, oldest first.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Ladder {
    pub(crate) onsets: Vec<Onset>,
    /// Regressions of all onsets' signatures on the columns, side by side in slots, so that a batch is one product.
    regressions: DMatrix<f64>,
    /// Slots that no onset holds.
    free: Vec<usize>,
}

/// What the meters' signatures need of a block.
pub(crate) struct Meters<'a> {
    pub(crate) frame: &'a Frame,
    pub(crate) tables: &'a Tables,
    pub(crate) driven: &'a Driven,
    pub(crate) sampled: &'a Sampled,
    pub(crate) entering: &'a [f64],
    pub(crate) whitener: &'a Whitener,
    /// Pressure per rate through skin: gauge, well, Pa per m3/s.
    pub(crate) skins: &'a [(usize, usize, f64)],
}

impl Onset {
    fn new(block: i64, slot: usize, bank: &Bank, frame: &Frame, whitener: &Whitener) -> Self {
        let (gauges, wells) = (frame.gauges, frame.wells);
        let modes = frame.base.drive.len();
        Self {
            block,
            slot,
            weight: [0.0; CAUSES.len()],
            sources: Sums::new(bank.width()),
            own: Sums::new(3 * gauges),
            meters: Sums::new(2 * wells),
            since: DMatrix::zeros(modes, wells),
            within: DMatrix::zeros(modes, wells),
            filter: DMatrix::zeros(whitener.states(), 2 * wells),
            pending: DMatrix::zeros(0, 2 * wells),
            evidence: [f64::NEG_INFINITY; CAUSES.len()],
            asked: i64::MIN,
        }
    }

    /// Steps the meters' signatures through a block.
    fn step_meters(&mut self, block: i64, with: &Meters<'_>) {
        let (gauges, wells) = (with.frame.gauges, with.frame.wells);
        let first = block == self.block;
        let driven = with.driven;
        let nothing: Vec<DMatrix<f64>> = driven.mean.iter().map(|m| m * 0.0).collect();
        let (to_since, to_within) = if first {
            (&nothing, &driven.mean)
        } else {
            (&driven.mean, &nothing)
        };
        let class = &with.sampled.class;
        let since = with
            .frame
            .base
            .pairs(&means(with.tables, &self.since, to_since), class);
        let within = with
            .frame
            .base
            .pairs(&means(with.tables, &self.within, to_within), class);
        let mut raw = DMatrix::zeros(gauges, 2 * wells);
        raw.columns_mut(0, wells).copy_from(&since);
        raw.columns_mut(wells, wells).copy_from(&within);
        for &(gauge, well, value) in with.skins {
            let class = class.get(gauge).copied().unwrap_or(0);
            let entering = with.entering.get(well).copied().unwrap_or(0.0);
            // A sample at a block's start still feels the rate of the block before.
            let (before, now) = if first {
                (0.0, 0.0)
            } else if block == self.block + 1 {
                (0.0, entering)
            } else {
                (entering, 0.0)
            };
            let rate = |entering: f64, keep: bool| {
                with.sampled
                    .held(well, entering, &|_| keep)
                    .get(class)
                    .copied()
                    .unwrap_or(0.0)
            };
            raw[(gauge, well)] += value * rate(before, !first);
            raw[(gauge, wells + well)] += value * rate(now, first);
        }
        for (state, add) in [(&mut self.since, !first), (&mut self.within, first)] {
            for mut column in state.column_iter_mut() {
                column.component_mul_assign(&with.tables.decay);
            }
            if add {
                *state += &driven.end;
            }
        }
        let white = with.whitener.step(&mut self.filter, &raw);
        let at = self.pending.nrows();
        self.pending.resize_vertically_mut(at + gauges, 0.0);
        self.pending.rows_mut(at, gauges).copy_from(&white);
    }
}

impl Ladder {
    pub(crate) fn new() -> Self {
        Self {
            onsets: Vec::new(),
            regressions: DMatrix::zeros(0, 0),
            free: Vec::new(),
        }
    }

    /// Opens an onset at a block.
    pub(crate) fn open(
        &mut self,
        block: i64,
        columns: usize,
        bank: &Bank,
        frame: &Frame,
        whitener: &Whitener,
    ) {
        let width = bank.width() + 3 * frame.gauges + 2 * frame.wells;
        if self.onsets.is_empty() {
            self.regressions = DMatrix::zeros(columns, 0);
            self.free.clear();
        }
        let slot = match self.free.pop() {
            Some(slot) => slot,
            None => {
                let held = self.regressions.ncols();
                self.regressions.resize_horizontally_mut(held + width, 0.0);
                held / width
            }
        };
        self.regressions.columns_mut(slot * width, width).fill(0.0);
        self.onsets
            .push(Onset::new(block, slot, bank, frame, whitener));
    }

    /// Steps the meters' signatures of all onsets through a block.
    pub(crate) fn step(&mut self, block: i64, with: &Meters<'_>) {
        for onset in &mut self.onsets {
            onset.step_meters(block, with);
        }
    }

    /// Columns were added at the end.
    pub(crate) fn append(&mut self, count: usize) {
        let from = self.regressions.nrows();
        self.regressions.resize_vertically_mut(from + count, 0.0);
    }

    /// Columns were struck out.
    pub(crate) fn strike(&mut self, columns: &[usize]) {
        if !self.onsets.is_empty() {
            let all = std::mem::replace(&mut self.regressions, DMatrix::zeros(0, 0));
            self.regressions = all.remove_rows_at(columns);
        }
    }

    /// Takes a batch of blocks in, the last of which is `last`.
    pub(crate) fn learn(
        &mut self,
        lesson: &Lesson,
        last: i64,
        blocks: i64,
        bank: &Bank,
        gauges: usize,
        calm: &[f64],
    ) {
        let rows = lesson.rows.nrows();
        let mut signatures = DMatrix::zeros(rows, self.regressions.ncols());
        let sources = bank.width();
        for onset in &mut self.onsets {
            let meters = onset.pending.ncols();
            let width = sources + 3 * gauges + meters;
            let mut mine = signatures.columns_mut(onset.slot * width, width);
            let mut at = 0;
            for block in (last - blocks + 1)..=last {
                if let Ok(lag) = usize::try_from(block - onset.block)
                    && lag < bank.horizon
                {
                    mine.view_mut((at, 0), (gauges, sources))
                        .copy_from(&bank.directions_at(lag));
                    mine.view_mut((at, sources), (gauges, 3 * gauges))
                        .copy_from(&bank.own_at(lag));
                }
                at += gauges;
            }
            let held = onset.pending.nrows().min(rows);
            mine.view_mut((rows - held, sources + 3 * gauges), (held, meters))
                .copy_from(&onset.pending.rows(onset.pending.nrows() - held, held));
            onset.pending = DMatrix::zeros(0, meters);
        }
        for (mut row, factor) in signatures.row_iter_mut().zip(calm) {
            row *= *factor;
        }
        let scaled = clear(&mut self.regressions, lesson, signatures);
        for onset in &mut self.onsets {
            let meters = onset.meters.c.len();
            let width = sources + 3 * gauges + meters;
            let mine = scaled.columns(onset.slot * width, width);
            onset.sources.add(lesson, mine.columns(0, sources));
            onset.own.add(lesson, mine.columns(sources, 3 * gauges));
            onset
                .meters
                .add(lesson, mine.columns(sources + 3 * gauges, meters));
        }
    }

    /// Drops onsets beyond the bank's horizon and thins the rest to what may be held.
    pub(crate) fn thin(&mut self, now: i64, horizon: usize) {
        let horizon = i64::try_from(horizon).unwrap_or(i64::MAX);
        while self.onsets.len() > 1
            && self
                .onsets
                .first()
                .is_some_and(|o| now - o.block >= horizon)
        {
            self.drop(0);
        }
        while self.onsets.len() > LIMIT {
            let best = self
                .onsets
                .iter()
                .flat_map(|o| o.evidence.iter().zip(&o.weight).map(|(e, w)| e + w))
                .fold(f64::NEG_INFINITY, f64::max);
            let cheapest = self
                .onsets
                .windows(3)
                .enumerate()
                .map(|(index, three)| {
                    let (Some(before), Some(this), Some(after)) =
                        (three.first(), three.get(1), three.get(2))
                    else {
                        return (index, f64::INFINITY);
                    };
                    let gap = (after.block - before.block) as f64;
                    let age = (now - this.block) as f64 + 6.0;
                    let strength = this
                        .evidence
                        .iter()
                        .zip(&this.weight)
                        .map(|(e, w)| e + w)
                        .fold(f64::NEG_INFINITY, f64::max);
                    // Places and paces are weighed on a coarse grid here: onsets that explain nearly as much as the best
                    // are kept close together, or the true one might be gone when the finer grid asks for it.
                    let near = (strength - best) / (5.0 + NEARLY * best.max(0.0));
                    let dear = 40.0 * near.exp();
                    (
                        index + 1,
                        gap / age * (1.0 + if best > 3.0 { dear } else { 0.0 }),
                    )
                })
                .min_by(|a, b| a.1.total_cmp(&b.1));
            match cheapest {
                Some((index, _)) => self.drop(index),
                None => break,
            }
        }
    }

    /// Drops an onset and passes its weights to the nearer neighbour.
    fn drop(&mut self, index: usize) {
        let gone = self.onsets.remove(index);
        self.free.push(gone.slot);
        let heir = match index.checked_sub(1) {
            Some(before)
                if self.onsets.get(index).is_none_or(|after| {
                    self.onsets
                        .get(before)
                        .is_some_and(|b| gone.block - b.block < after.block - gone.block)
                }) =>
            {
                before
            }
            _ => index,
        };
        let Some(heir) = self.onsets.get_mut(heir) else {
            return;
        };
        for cause in 0..CAUSES.len() {
            let (Some(weight), Some(evidence)) =
                (heir.weight.get_mut(cause), heir.evidence.get(cause))
            else {
                continue;
            };
            let (Some(lost), Some(with)) = (gone.weight.get(cause), gone.evidence.get(cause))
            else {
                continue;
            };
            if with.is_finite() && evidence.is_finite() {
                *weight = super::evidence::log_sum(&[*weight, lost + with - evidence]);
            }
        }
    }

    /// Bytes held.
    pub(crate) fn bytes(&self) -> usize {
        8 * self.regressions.len()
            + self
                .onsets
                .iter()
                .map(|o| {
                    o.sources.bytes()
                        + o.own.bytes()
                        + o.meters.bytes()
                        + 8 * (o.since.len() + o.within.len() + o.filter.len())
                })
                .sum::<usize>()
    }
}
