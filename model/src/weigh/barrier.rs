//! Undeclared straight barriers, by the images of the wells in a fan of lines.
//!
//! A sealing barrier has always been there, so it has no onset: its signature is what the images of all wells would have
//! added since the record began, and its evidence a plain Bayes factor.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over lines of sums made here"
)]

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use super::evidence::{log_bayes_positive_about, log_sum};
use crate::commission::Line;
use crate::expect::posterior::{Cleared, Lesson};
use crate::expect::whitener::Whitener;
use crate::reduce::Modal;

/// Strength of an image behind a line that seals nearly or wholly.
pub(crate) const SEALING: f64 = 0.9;

/// Ports of the images, by well (modes by lines).
#[derive(Debug, Clone)]
pub(crate) struct Images {
    ports: Vec<DMatrix<f64>>,
}

/// Running sums of the lines.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Barriers {
    pub(crate) cleared: Cleared,
    filter: DMatrix<f64>,
    pending: DMatrix<f64>,
}

impl Images {
    pub(crate) fn new(modal: &Modal, wanted: &[Line]) -> Self {
        let modes = modal.lambda.len();
        let ports = (0..modal.wells.ncols())
            .map(|well| {
                let mut ports = DMatrix::zeros(modes, wanted.len());
                for (mut column, line) in ports.column_iter_mut().zip(wanted) {
                    for &(place, weight) in line.images.get(well).into_iter().flatten() {
                        if place < modal.places.ncols() {
                            column.axpy(weight, &modal.places.column(place), 1.0);
                        }
                    }
                }
                ports
            })
            .collect();
        Self { ports }
    }

    pub(crate) fn lines(&self) -> usize {
        self.ports.first().map_or(0, DMatrix::ncols)
    }

    /// Block means of all lines' signatures (gauges by lines) from the means of the unit-port states, by class.
    pub(crate) fn raw(
        &self,
        modal: &Modal,
        means: &[DMatrix<f64>],
        class: &[usize],
    ) -> DMatrix<f64> {
        let gauges = modal.gauges.ncols();
        let mut out = DMatrix::zeros(gauges, self.lines());
        for (well, ports) in self.ports.iter().enumerate() {
            let mut seen = modal.gauges.clone();
            for (gauge, mut column) in seen.column_iter_mut().enumerate() {
                if let Some(mean) = class.get(gauge).and_then(|&c| means.get(c)) {
                    column.component_mul_assign(&mean.column(well));
                }
            }
            out.gemm(1.0, &seen.transpose(), ports, 1.0);
        }
        out
    }
}

impl Barriers {
    pub(crate) fn new(columns: usize, lines: usize, whitener: &Whitener) -> Self {
        Self {
            cleared: Cleared::new(columns, lines),
            filter: DMatrix::zeros(whitener.states(), lines),
            pending: DMatrix::zeros(0, lines),
        }
    }

    pub(crate) fn step(&mut self, raw: &DMatrix<f64>, whitener: &Whitener) {
        let white = whitener.step(&mut self.filter, raw);
        let at = self.pending.nrows();
        self.pending.resize_vertically_mut(at + white.nrows(), 0.0);
        self.pending.rows_mut(at, white.nrows()).copy_from(&white);
    }

    /// Filter state of one line's signature.
    pub(crate) fn filter_of(&self, line: usize) -> DVector<f64> {
        self.filter.column(line).into_owned()
    }

    pub(crate) fn learn(&mut self, lesson: &Lesson, calm: &[f64]) {
        let mut rows = std::mem::replace(&mut self.pending, DMatrix::zeros(0, self.filter.ncols()));
        for (mut row, factor) in rows.row_iter_mut().zip(calm) {
            row *= *factor;
        }
        self.cleared.learn(lesson, rows);
    }

    /// Log evidence of a barrier anywhere in the fan, with the log evidence of each line.
    pub(crate) fn evidence(&self, variance: f64) -> (f64, DVector<f64>) {
        let each = DVector::from_fn(self.cleared.sums.c.len(), |line, _| {
            log_bayes_positive_about(
                self.cleared.sums.c[line],
                self.cleared.sums.n[(line, line)],
                SEALING,
                variance,
            )
        });
        // Without a line this is minus infinity: no barrier is thought of.
        (
            log_sum(each.as_slice()) - (each.len().max(1) as f64).ln(),
            each,
        )
    }
}
