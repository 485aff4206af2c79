//! The smallest leak that would be noticed, from the cleared energy of its signature alone.
//!
//! A leak of size q gives a cleared sum `c ~ N(q n, n)` (per unit of outflow). It is noticed when the mixture over places,
//! paces and sizes that the watch would then hold passes the threshold. With 90 % probability c is at least
//! `q n - 1.28 sqrt(n)`, and given c at the leak's own place the sums at all others are known on average; so the mixture is
//! asked for at the amplitude `a = q - 1.28 / sqrt(n)`, the `a` that just passes is sought, and q follows. The sum over
//! onsets near the true one is left out, which errs to the safe side.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over sources of the bank and columns made from them"
)]

use nalgebra::{DMatrix, DVector};

use super::bank::COARSE;
use super::evidence::{log_bayes_positive, log_sum};
use super::verdict::Weights;

/// Quantile of the standard normal distribution that 90 % exceed.
pub(crate) const POWER: f64 = 1.281_551_6;
/// Log evidence by which a source may fall short of the best and still count.
const NEGLIGIBLE: f64 = 14.0;
/// Steps of the search.
const STEPS: usize = 40;
/// Relative accuracy of the search.
const CLOSE: f64 = 1e-4;

/// What the watch would weigh after some time: the sources asked for detection, with their energy.
pub(crate) struct Detection {
    /// Coefficients of all sources and paces (directions by sources).
    coefficients: DMatrix<f64>,
    /// Cleared energy of each.
    energy: Vec<f64>,
    /// Log prior weight of each.
    weight: Vec<f64>,
    /// Prior variances of a leak's size.
    variances: Vec<f64>,
    /// Log of what the mixture must pass, less the prior of a leak among causes.
    threshold: f64,
    /// Energy of the bank's directions.
    directions: DMatrix<f64>,
}

impl Detection {
    /// `directions` is the cleared energy of the bank's directions so far; `log_threshold` what the mixture of `kinds`
    /// kinds of cause is held against.
    pub(crate) fn new(
        weights: &Weights<'_>,
        directions: DMatrix<f64>,
        log_threshold: f64,
        kinds: f64,
    ) -> Self {
        let width = directions.nrows();
        let mut coefficients = DMatrix::zeros(width, 0);
        let mut weight = Vec::new();
        let of_place = weights.thinned_leak_weights();
        for growth in COARSE {
            let Some(thinned) = weights.bank.thinned.get(growth) else {
                continue;
            };
            let places = thinned.select_columns(of_place.iter().map(|(at, _)| at));
            let at = coefficients.ncols();
            coefficients = coefficients.resize_horizontally(at + places.ncols(), 0.0);
            coefficients
                .columns_mut(at, places.ncols())
                .copy_from(&places);
            weight.extend(of_place.iter().map(|(_, w)| w - (COARSE.len() as f64).ln()));
        }
        let turned = &directions * &coefficients;
        let energy = (0..coefficients.ncols())
            .map(|i| coefficients.column(i).dot(&turned.column(i)).max(0.0))
            .collect();
        Self {
            coefficients,
            energy,
            weight,
            variances: weights.scales.leak.clone(),
            threshold: log_threshold + kinds.ln(),
            directions,
        }
    }

    /// The smallest leak at a place of these coefficients that is noticed with 90 % probability \[m3/s\]; `None` where
    /// nothing of it would be seen at all.
    pub(crate) fn smallest(&self, place: &DVector<f64>) -> Option<f64> {
        let turned = &self.directions * place;
        let n = place.dot(&turned);
        if n.is_nan() || n <= 0.0 {
            return None;
        }
        let unit = self.coefficients.tr_mul(&turned);
        // The share of a source in the evidence is that of its correlation with the leak.
        let share = |i: usize| unit[i].max(0.0).powi(2) / self.energy[i].max(f64::MIN_POSITIVE);
        let best = (0..unit.len()).map(share).fold(0.0, f64::max);
        if best <= 0.0 {
            return None;
        }
        let first = (2.0 * (self.threshold + 8.0) / best).sqrt();
        let kept: Vec<usize> = (0..unit.len())
            .filter(|&i| unit[i] > 0.0 && 0.5 * first * first * (best - share(i)) < NEGLIGIBLE)
            .collect();
        let passes = |a: f64| {
            let mut logs = Vec::with_capacity(kept.len() * self.variances.len());
            for &i in &kept {
                for &variance in &self.variances {
                    logs.push(
                        log_bayes_positive(a * unit[i], self.energy[i], variance) + self.weight[i],
                    );
                }
            }
            log_sum(&logs) - (self.variances.len() as f64).ln() - self.threshold
        };
        let (mut low, mut high) = (0.0, first);
        let mut steps = 0;
        while passes(high) < 0.0 {
            (low, high) = (high, 2.0 * high);
            steps += 1;
            if steps > STEPS {
                return None;
            }
        }
        while high - low > CLOSE * high && steps < STEPS {
            let middle = f64::midpoint(low, high);
            if passes(middle) < 0.0 {
                low = middle;
            } else {
                high = middle;
            }
            steps += 1;
        }
        Some(high + POWER / n.sqrt())
    }
}
