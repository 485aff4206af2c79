//! Rate epochs: stretches over which a well keeps one level.
//!
//! A meter's error is proportional to its rate and differs from level to level, so each epoch carries a gain of its
//! own; during a shut-in there is none. The oldest epoch of a well gives up its column when there are too many.

#![expect(
    clippy::indexing_slicing,
    reason = "gauges come from the frame the column was made for"
)]

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use super::columns::Priors;
use super::drive::{Sampled, Tables};
use super::frame::{Frame, seen};

/// A change of rate that opens an epoch, as a share of the well's largest rate.
const CHANGE: f64 = 0.1;
/// A level below this share of the largest rate is a shut-in.
const SHUT: f64 = 0.03;
/// Epochs with a column that one well may have.
const LIMIT: usize = 24;

/// One epoch with a column.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Epoch {
    /// Order of opening, over the whole record.
    pub(crate) id: u32,
    /// Its well.
    pub(crate) well: usize,
    /// Unit-port state of what flowed in it.
    state: DVector<f64>,
    /// Whether it is the well's present one.
    current: bool,
}

/// All epochs with a column, and the present level of each well.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Epochs {
    /// In order of opening.
    pub(crate) list: Vec<Epoch>,
    /// Level and age \[s\] of each well's present epoch.
    level: Vec<Option<(f64, f64)>>,
    /// Wells that changed level in the last step, with the change \[m3/s\].
    pub(crate) changes: Vec<(usize, f64)>,
    /// Epochs opened so far.
    opened: u32,
}

impl Epochs {
    pub(crate) fn new(wells: usize) -> Self {
        Self {
            list: Vec::new(),
            level: vec![None; wells],
            changes: Vec::new(),
            opened: 0,
        }
    }

    /// Steps all epochs through a block; returns their columns (gauges by epochs). New ones are at the end.
    pub(crate) fn step(
        &mut self,
        frame: &Frame,
        tables: &Tables,
        sampled: &Sampled,
        entering: &[f64],
        priors: &Priors,
        skin: &dyn Fn(usize) -> f64,
    ) -> DMatrix<f64> {
        self.changes.clear();
        // For every well: the epoch of each piece, as an index into the list.
        let mut owner: Vec<Vec<Option<usize>>> = Vec::with_capacity(sampled.rates.len());
        let mut owned_before: Vec<Option<usize>> = Vec::new();
        for (well, rates) in sampled.rates.iter().enumerate() {
            let scale = priors.rate.get(well).copied().unwrap_or(0.0);
            let mut now = self.list.iter().position(|e| e.well == well && e.current);
            owned_before.push(now);
            let mut from = 0.0;
            let mut pieces = Vec::with_capacity(rates.len());
            let cuts = sampled.geometry.cuts.get(well);
            for (index, &rate) in rates.iter().enumerate() {
                let until = cuts.and_then(|c| c.get(index)).copied().unwrap_or(from);
                let length = (until - from).max(0.0);
                from = until;
                let level = self.level.get(well).copied().flatten();
                let next = match level {
                    Some((level, age)) if (rate - level).abs() <= CHANGE * scale => {
                        let weight = length / (age + length).max(1.0);
                        (level + weight * (rate - level), age + length)
                    }
                    _ => {
                        if let Some(old) = now.and_then(|i| self.list.get_mut(i)) {
                            old.current = false;
                        }
                        if let Some((level, _)) = level.filter(|_| well < frame.meters) {
                            self.changes.push((well, rate - level));
                        }
                        now = None;
                        // The level of open water is no rate that a meter errs in proportion to.
                        if rate.abs() > SHUT * scale && well < frame.meters {
                            now = Some(self.list.len());
                            self.opened += 1;
                            self.list.push(Epoch {
                                id: self.opened,
                                well,
                                state: DVector::zeros(tables.decay.len()),
                                current: true,
                            });
                        }
                        (rate, length)
                    }
                };
                if let Some(slot) = self.level.get_mut(well) {
                    *slot = Some(next);
                }
                pieces.push(now);
            }
            owner.push(pieces);
        }
        let mut columns = DMatrix::zeros(frame.gauges, self.list.len());
        for (index, epoch) in self.list.iter_mut().enumerate() {
            let mine = |piece: usize| {
                owner
                    .get(epoch.well)
                    .and_then(|o| o.get(piece))
                    .is_some_and(|o| *o == Some(index))
            };
            let mut mean: Vec<DVector<f64>> = tables
                .mean_decay
                .iter()
                .map(|decay| epoch.state.component_mul(decay))
                .collect();
            epoch.state.component_mul_assign(&tables.decay);
            let was_mine = owned_before
                .get(epoch.well)
                .is_some_and(|o| *o == Some(index));
            let active = was_mine
                || owner
                    .get(epoch.well)
                    .is_some_and(|o| o.contains(&Some(index)));
            let mut skin_part = None;
            if active {
                let (end, add) = tables.drive_one(sampled, epoch.well, &mine);
                epoch.state += end;
                for (mean, add) in mean.iter_mut().zip(&add) {
                    *mean += add;
                }
                let entering = if was_mine {
                    entering.get(epoch.well).copied().unwrap_or(0.0)
                } else {
                    0.0
                };
                skin_part = Some(sampled.held(epoch.well, entering, &mine));
            }
            let mut column = seen(&frame.base, epoch.well, &mean, &sampled.class);
            if let Some(held) = skin_part {
                for &(gauge, well, unit) in &frame.in_wells {
                    let class = sampled.class.get(gauge).copied().unwrap_or(0);
                    if well == epoch.well
                        && let Some(rate) = held.get(class)
                    {
                        column[gauge] += unit * skin(well) * rate;
                    }
                }
            }
            columns.column_mut(index).axpy(priors.gain, &column, 0.0);
        }
        columns
    }

    /// Gives up the oldest epochs of wells that have too many; returns their ids.
    pub(crate) fn give_up(&mut self) -> Vec<u32> {
        let mut given = Vec::new();
        for well in 0..self.level.len() {
            let mine: Vec<u32> = self
                .list
                .iter()
                .filter(|e| e.well == well)
                .map(|e| e.id)
                .collect();
            given.extend(mine.iter().take(mine.len().saturating_sub(LIMIT)));
        }
        self.list.retain(|e| !given.contains(&e.id));
        given
    }
}
