//! Columns that come and go: rate epochs, jumps of meters' errors, adopted findings, missing readings.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges and columns checked at construction"
)]

use nalgebra::DMatrix;

use super::Live;
use super::step::Watch;
use crate::block::Block;
use crate::expect::columns::Raw;
use crate::expect::posterior::Cleared;
use crate::weigh::ladder::Ladder;

/// Prior standard deviation of a missing reading about its expectation \[Pa\].
const UNKNOWN: f64 = 1e5;

impl Watch {
    /// Appends columns for new epochs and missing readings.
    pub(super) fn add_columns(
        &mut self,
        epochs: &[u32],
        missing: &[usize],
        renewals: &[(usize, f64)],
        block: i64,
    ) {
        let before = self.state.live.len();
        for &id in epochs {
            if !self.state.live.contains(&Live::Epoch(id)) {
                self.state.live.push(Live::Epoch(id));
            }
        }
        for &(well, size) in renewals {
            for within in [true, false] {
                self.state.live.push(Live::Renewal {
                    well,
                    block,
                    size,
                    within,
                });
            }
        }
        let mut taken = Vec::new();
        for (index, one) in self.adopted.iter().enumerate() {
            let known = self
                .state
                .live
                .iter()
                .any(|l| matches!(l, Live::Adopted { adoption, .. } if *adoption == index));
            if block >= one.from && !known {
                let columns = one.columns(self.columns.frame.gauges);
                if let Some((lines, scale)) = one.lines() {
                    taken.push((self.state.live.len(), lines.to_vec(), scale));
                }
                self.state
                    .live
                    .extend((0..columns).map(|column| Live::Adopted {
                        adoption: index,
                        column,
                    }));
            }
            if block == one.judged {
                // What began before it is no news any more.
                self.state.ladder = Ladder::new();
                self.state.first_onset = self.state.first_onset.max(block);
                self.state.finding = None;
                self.state.log_mixture = 0.0;
                if one.anew {
                    self.state.barriers.cleared =
                        Cleared::new(self.state.posterior.len(), self.images.lines());
                }
            }
        }
        for &gauge in missing {
            self.state.live.push(Live::Missing { gauge, block });
        }
        let added = self.state.live.len() - before;
        if added > 0 {
            let state = &mut self.state;
            let width = state.filter.ncols() + added;
            state.filter.resize_horizontally_mut(width, 0.0);
            state.pending.resize_horizontally_mut(width, 0.0);
            state.posterior.append(added);
            state.ladder.append(added);
            state.barriers.cleared.append(added);
        }
        for (at, lines, scale) in taken {
            for (column, line) in lines.into_iter().enumerate() {
                let filter = self.state.barriers.filter_of(line) * scale;
                let to = 1 + self.columns.len() + at + column;
                self.state.filter.column_mut(to).copy_from(&filter);
            }
        }
    }

    /// Readings less prediction, then all columns, of one block (gauges by 1 + columns).
    pub(super) fn raw_row(
        &self,
        block: &Block,
        raw: &Raw,
        epochs: &[u32],
        missing: &[usize],
        adopted: &[DMatrix<f64>],
    ) -> DMatrix<f64> {
        let gauges = self.columns.frame.gauges;
        let fixed = self.columns.len();
        let mut row = DMatrix::zeros(gauges, 1 + fixed + self.state.live.len());
        for (gauge, read) in block.gauges.iter().enumerate() {
            if let Some(read) = read {
                row[(gauge, 0)] =
                    read.mean - raw.base[gauge] - self.reference.get(gauge).copied().unwrap_or(0.0);
            }
        }
        row.columns_mut(1, fixed).copy_from(&raw.fixed);
        for (index, live) in self.state.live.iter().enumerate() {
            match *live {
                Live::Epoch(id) => {
                    if let Some(at) = epochs.iter().position(|&e| e == id) {
                        row.column_mut(1 + fixed + index)
                            .copy_from(&raw.epochs.column(at));
                    }
                }
                Live::Adopted { adoption, column } => {
                    if let Some(rows) = adopted.get(adoption)
                        && column < rows.ncols()
                    {
                        row.column_mut(1 + fixed + index)
                            .copy_from(&rows.column(column));
                    }
                }
                Live::Renewal { .. } => {}
                Live::Missing { gauge, block: of } => {
                    if of == block.index {
                        row[(gauge, 1 + fixed + index)] = UNKNOWN;
                    }
                }
            }
        }
        for &gauge in missing {
            for column in 0..=fixed {
                row[(gauge, column)] = 0.0;
            }
            for (index, live) in self.state.live.iter().enumerate() {
                if !matches!(live, Live::Missing { .. }) {
                    row[(gauge, 1 + fixed + index)] = 0.0;
                }
            }
        }
        row
    }
}
