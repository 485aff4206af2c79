//! An embankment's history, gauge by gauge: readings beside that gauge's own columns.

#![expect(
    clippy::indexing_slicing,
    reason = "rows and columns are counted by the same code that lays them out"
)]

use nalgebra::DMatrix;

use crate::ModelError;
use crate::block::{Block, RateKnown};
use crate::commission::history::{Regression, bridge, median};
use crate::expect::columns::Columns;
use crate::expect::whitener::Whitener;

/// The history of one gauge.
#[derive(Debug, Clone)]
pub(super) struct Single {
    /// Readings less the middle one, then the gauge's own columns (blocks by 1 + columns).
    raw: DMatrix<f64>,
    /// Blocks without a reading.
    missing: Vec<usize>,
    /// The middle reading \[Pa\].
    pub(super) reference: f64,
    /// Spread of the readings \[Pa\].
    pub(super) spread: f64,
}

impl Single {
    /// Runs the columns over a history and takes it apart by gauge.
    ///
    /// # Errors
    /// [`ModelError::History`] where a gauge is silent, others where a block does not fit.
    pub(super) fn all(columns: &mut Columns, history: &[Block]) -> Result<Vec<Self>, ModelError> {
        let gauges = columns.frame.gauges;
        let mine: Vec<Vec<usize>> = (0..gauges).map(|g| columns.of_gauge(g)).collect();
        let mut all: Vec<Self> = mine
            .iter()
            .map(|own| Self {
                raw: DMatrix::zeros(history.len(), 1 + own.len()),
                missing: Vec::new(),
                reference: 0.0,
                spread: 0.0,
            })
            .collect();
        let mut memory = columns.start();
        for (index, block) in history.iter().enumerate() {
            let sampled = columns.sample(block)?;
            let step = columns.step(&mut memory, &sampled)?;
            // As the watch is blind then, so the fit learns nothing of an answer to a level that was only held.
            let stale = block.rates.iter().any(|r| r.known == RateKnown::Stale);
            for ((gauge, one), own) in all.iter_mut().enumerate().zip(&mine) {
                match block.gauges.get(gauge).and_then(Option::as_ref) {
                    Some(read) if !stale => one.raw[(index, 0)] = read.mean,
                    _ => one.missing.push(index),
                }
                for (at, &column) in own.iter().enumerate() {
                    one.raw[(index, 1 + at)] = step.fixed[(gauge, column)];
                }
            }
        }
        for (gauge, one) in all.iter_mut().enumerate() {
            let read: Vec<f64> = (0..history.len())
                .filter(|b| one.missing.binary_search(b).is_err())
                .map(|b| one.raw[(b, 0)])
                .collect();
            if read.is_empty() {
                return Err(ModelError::History(format!(
                    "gauge {gauge} has no reading in the whole history beside a level that was read; take it out of the site file or give a longer history"
                )));
            }
            one.reference = median(read.clone());
            let square = read
                .iter()
                .map(|v| (v - one.reference).powi(2))
                .sum::<f64>();
            one.spread = (square / read.len() as f64).sqrt();
            let rows: Vec<usize> = (0..history.len()).collect();
            for &row in &rows {
                one.raw[(row, 0)] -= one.reference;
            }
            bridge(&mut one.raw, &rows, &one.missing);
        }
        Ok(all)
    }

    /// Whitens everything.
    pub(super) fn whiten(&self, whitener: &Whitener) -> Regression {
        let mut state = DMatrix::zeros(whitener.states(), self.raw.ncols());
        let mut rows = DMatrix::zeros(self.raw.nrows(), self.raw.ncols());
        for at in 0..self.raw.nrows() {
            let block = self.raw.rows(at, 1).into_owned();
            rows.rows_mut(at, 1)
                .copy_from(&whitener.step(&mut state, &block));
        }
        Regression::of(rows)
    }

    /// Of a series of one value a block, those where something was read.
    pub(super) fn read(&self, series: impl Iterator<Item = f64>) -> Vec<f64> {
        series
            .enumerate()
            .filter(|(block, _)| self.missing.binary_search(block).is_err())
            .map(|(_, value)| value)
            .collect()
    }

    /// Readings less the middle one, and less what coefficients say of them.
    pub(super) fn readings_and_rest(&self, mean: &nalgebra::DVector<f64>) -> (Vec<f64>, Vec<f64>) {
        let said = self.raw.columns(1, mean.len()) * mean;
        let readings = self.raw.column(0);
        (
            self.read(readings.iter().copied()),
            self.read((readings - said).iter().copied()),
        )
    }

    /// Change of what some columns say between two blocks, per unit coefficient.
    pub(super) fn change(&self, column: usize, from: usize) -> f64 {
        let last = self.raw.nrows().saturating_sub(1);
        self.raw[(last, 1 + column)] - self.raw[(from.min(last), 1 + column)]
    }

    /// Number of blocks.
    pub(super) fn len(&self) -> usize {
        self.raw.nrows()
    }
}
