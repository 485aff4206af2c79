//! Readings that stand out and are set aside: spikes, and gross readings that were flagged good.
//!
//! One such block mean among thousands outweighs all others under least squares, and the whitening filter carries it on
//! into the blocks after it. So a block mean that lies too far from what the fit says is treated as if it had not been
//! read. What is too far is told by median and median deviation, which outliers cannot move (Hampel's identifier: Hampel
//! 1974, JASA 69; Davies & Gather 1993, JASA 88). Which ones they are is asked anew while the fit settles, so that a
//! reading can come back.

#![expect(
    clippy::indexing_slicing,
    reason = "rows are blocks by gauges, laid out by the same code"
)]

use nalgebra::DVector;

use super::fit::Fit;
use super::history::{History, median};
use super::unsteady::{Unsteady, calm, relative_square};
use crate::ModelError;
use crate::expect::columns::Columns;
use crate::expect::drive::Sampled;
use crate::expect::whitener::Whitener;

/// Robust standard deviations from which a reading stands out, once the fit has settled.
const FAR: f64 = 7.0;
/// How much further it may lie while the fit is on its way, or where the rate of its own well has just changed: there the
/// ground as fitted is least like the true one.
const LENIENT: f64 = 3.0;
/// Share of a gauge's readings that may be set aside; more is no outlier but a ground that does not fit.
const MOST: f64 = 0.02;
/// A reading is gross from so many times the range of the middle nine tenths on.
const GROSS: f64 = 5.0;
/// Standard deviation over median deviation of a normal distribution.
const NORMAL: f64 = 1.482_602;
/// Change of rate that counts, as a share of the well's largest.
const CHANGE: f64 = 0.1;

impl Fit<'_> {
    /// How innovations of gauges in wells grow with the rate.
    pub(super) fn unsteady(
        &self,
        columns: &Columns,
        history: &History,
        sampled: &[Sampled],
        left: &DVector<f64>,
    ) -> Vec<Unsteady> {
        let gauges = history.gauges;
        columns
            .frame
            .in_wells
            .iter()
            .map(|&(gauge, well, _)| {
                let squares: Vec<(f64, f64)> = sampled
                    .iter()
                    .enumerate()
                    // What was filled in has no innovation of its own.
                    .filter(|(block, _)| history.was_read(block * gauges + gauge))
                    .map(|(block, s)| {
                        (
                            relative_square(s, well, &self.priors.rate),
                            left[block * gauges + gauge].powi(2),
                        )
                    })
                    .collect();
                Unsteady::fit(gauge, well, &squares)
            })
            .collect()
    }

    /// Blocks as the columns use them.
    pub(super) fn sampled(&self, columns: &Columns) -> Result<Vec<Sampled>, ModelError> {
        self.history.iter().map(|b| columns.sample(b)).collect()
    }

    /// Rows that stand out of what a fit leaves, whitened; rows already set aside by what they were before.
    pub(super) fn standing_out(
        &self,
        columns: &Columns,
        history: &History,
        whitener: &Whitener,
        left: &DVector<f64>,
        settled: bool,
    ) -> Result<Vec<usize>, ModelError> {
        let gauges = history.gauges;
        let sampled = self.sampled(columns)?;
        let unsteady = self.unsteady(columns, history, &sampled, left);
        let innovation = whitener.innovation();
        let mut relative = left.clone();
        for &(row, was) in &history.aside {
            let gauge = row % gauges;
            relative[row] = (was - history.raw[(row, 0)]) / innovation[(gauge, gauge)].sqrt();
        }
        for (block, s) in sampled.iter().enumerate() {
            let factors = calm(&unsteady, s, &self.priors.rate, gauges);
            for (gauge, factor) in factors.into_iter().enumerate() {
                relative[block * gauges + gauge] *= factor;
            }
        }
        let mut found = Vec::new();
        for gauge in 0..gauges {
            let own = columns.frame.well_of(gauge).map(|(well, _)| well);
            let read: Vec<usize> = (0..sampled.len())
                .filter(|&b| !history.absent(b * gauges + gauge))
                .collect();
            let sizes: Vec<f64> = read
                .iter()
                .map(|&b| relative[b * gauges + gauge].abs())
                .collect();
            let scale = NORMAL * median(sizes).max(f64::MIN_POSITIVE);
            let mut far: Vec<(f64, usize)> = read
                .iter()
                .filter_map(|&block| {
                    let row = block * gauges + gauge;
                    let changed = own.is_some_and(|well| {
                        let before = block.checked_sub(1).and_then(|b| sampled.get(b));
                        self.changes(well, before, &sampled[block])
                    });
                    let lenient = f64::from(u8::from(changed) + u8::from(!settled));
                    let size = relative[row].abs() / scale;
                    (size > FAR * LENIENT.powf(lenient)).then_some((size, row))
                })
                .collect();
            far.sort_by(|a, b| b.0.total_cmp(&a.0));
            let most = (MOST * read.len() as f64).ceil();
            far.retain(|(size, _)| size.is_finite());
            found.extend(
                far.into_iter()
                    .zip(1..)
                    .take_while(|(_, order)| f64::from(*order) <= most)
                    .map(|((_, row), _)| row),
            );
        }
        found.sort_unstable();
        Ok(found)
    }

    /// Whether a well's rate changed in a block or the one before.
    fn changes(&self, well: usize, before: Option<&Sampled>, now: &Sampled) -> bool {
        let largest = self.priors.rate.get(well).copied().unwrap_or(0.0);
        let rates = before
            .into_iter()
            .chain([now])
            .filter_map(|s| s.rates.get(well))
            .flatten();
        let (low, high) = rates.fold((f64::INFINITY, f64::NEG_INFINITY), |(a, b), &r| {
            (a.min(r), b.max(r))
        });
        high - low > CHANGE * largest
    }
}

/// Rows so far out that no ground explains them: before anything is fitted.
pub(super) fn gross(history: &History) -> Vec<usize> {
    let gauges = history.gauges;
    let blocks = history.raw.nrows() / gauges.max(1);
    let mut found = Vec::new();
    for gauge in 0..gauges {
        let rows: Vec<usize> = (0..blocks)
            .map(|b| b * gauges + gauge)
            .filter(|&row| !history.absent(row))
            .collect();
        let reading = |row: usize| history.raw[(row, 0)] + history.felt(row);
        let mut values: Vec<f64> = rows.iter().map(|&row| reading(row)).collect();
        values.sort_by(f64::total_cmp);
        let at = |share: usize| values.get(values.len() * share / 20).copied();
        let (Some(low), Some(middle), Some(high)) = (at(1), at(10), at(19)) else {
            continue;
        };
        let reach = GROSS * (high - low);
        let far = |row: &usize| reach > 0.0 && (reading(*row) - middle).abs() > reach;
        let far: Vec<usize> = rows.iter().copied().filter(far).collect();
        if far.len() as f64 <= MOST * rows.len() as f64 {
            found.extend(far);
        }
    }
    found.sort_unstable();
    found
}
