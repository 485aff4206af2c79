//! How much noisier a well's gauge is while its well flows.
//!
//! A meter errs in proportion to its rate, so a gauge in a flowing well is less sure than in a shut one. The whitening
//! filter must not change with time, or signatures would lose their shape; instead whitened rows of such a gauge, in
//! readings and signatures alike, are divided by the scale that its innovations have at the present rate.

use serde::{Deserialize, Serialize};

use crate::expect::drive::Sampled;

/// Variance of a gauge's innovations as `still + flowing (q / q_max)^2`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Unsteady {
    /// The gauge, by order in the ground.
    pub gauge: usize,
    /// Its well, by order in the ground.
    pub well: usize,
    /// Variance while shut in.
    pub still: f64,
    /// Variance added at the well's largest rate.
    pub flowing: f64,
}

/// Least variance of a gauge's innovations, as a share of its mean.
const LEAST: f64 = 0.02;

impl Unsteady {
    /// Fits squared innovations to squared relative rates by least squares, reweighted by the fitted variance.
    pub(crate) fn fit(gauge: usize, well: usize, squares: &[(f64, f64)]) -> Self {
        let count = squares.len().max(1) as f64;
        let mean = squares.iter().map(|(_, e)| e).sum::<f64>() / count;
        let least = LEAST * mean;
        let (mut still, mut flowing) = (mean, 0.0);
        for _ in 0..10 {
            let mut sums = [0.0; 5];
            for &(q, e) in squares {
                // A large square is taken for its share only, or one outlier would rule the fit.
                let fitted = still + flowing * q;
                let e = e.min(9.0 * fitted);
                let w = 1.0 / (fitted * fitted);
                for (sum, term) in sums.iter_mut().zip([w, w * q, w * q * q, w * e, w * q * e]) {
                    *sum += term;
                }
            }
            let [w, wq, wqq, we, wqe] = sums;
            let determinant = w * wqq - wq * wq;
            if determinant > 1e-9 * w * wqq {
                still = ((wqq * we - wq * wqe) / determinant).max(least);
                flowing = ((wqe - wq * still) / wqq).max(0.0);
            }
        }
        Self {
            gauge,
            well,
            still,
            flowing,
        }
    }
}

/// Factor on the whitened row of every gauge in one block.
pub(crate) fn calm(
    unsteady: &[Unsteady],
    sampled: &Sampled,
    largest: &[f64],
    gauges: usize,
) -> Vec<f64> {
    let mut factors = vec![1.0; gauges];
    for one in unsteady {
        let variance = one.still + one.flowing * relative_square(sampled, one.well, largest);
        if let Some(factor) = factors.get_mut(one.gauge) {
            *factor = variance.sqrt().recip();
        }
    }
    factors
}

/// Mean square of a well's rate in a block, relative to its largest.
pub(crate) fn relative_square(sampled: &Sampled, well: usize, largest: &[f64]) -> f64 {
    let (Some(cuts), Some(rates)) = (sampled.geometry.cuts.get(well), sampled.rates.get(well))
    else {
        return 0.0;
    };
    let scale = largest
        .get(well)
        .copied()
        .unwrap_or(0.0)
        .max(f64::MIN_POSITIVE);
    let mut from = 0.0;
    let mut sum = 0.0;
    for (until, rate) in cuts.iter().zip(rates) {
        sum += (until - from) * (rate / scale).powi(2);
        from = *until;
    }
    sum / sampled.geometry.length
}
