//! How large each cause may be: the prior variances of amplitudes.
//!
//! The size of a leak or a step is not known in advance, only its order: each prior is an even mixture of a few
//! scales, tied to what the site itself is like (its flow, its gauges' noise and drift).

use crate::ground::Gauge;

/// Variances of amplitudes by cause; every list is an even mixture.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Scales {
    /// Of a leak \[(m3/s)^2\].
    pub(crate) leak: Vec<f64>,
    /// Of a neighbour's rate \[(m3/s)^2\].
    pub(crate) interference: Vec<f64>,
    /// Of a step, by gauge \[Pa^2\].
    pub(crate) step: Vec<Vec<f64>>,
    /// Of a drift, by gauge \[(Pa/day)^2\].
    pub(crate) drift: Vec<Vec<f64>>,
    /// Of a meter's scale.
    pub(crate) meter: Vec<f64>,
    /// Of an image's strength.
    pub(crate) barrier: f64,
}

impl Scales {
    /// Of gauges with their noise, a mean total injection and the largest rate of each well.
    pub(crate) fn of(gauges: &[Gauge], noise: &[f64], flow: f64, rates: &[f64]) -> Self {
        let squares = |unit: f64, factors: [f64; 3]| {
            factors
                .iter()
                .map(|f| (f * unit).powi(2))
                .collect::<Vec<f64>>()
        };
        let largest = rates.iter().copied().fold(0.0, f64::max);
        let noise = |g: usize| noise.get(g).copied().unwrap_or(1.0);
        Self {
            leak: squares(flow.max(1e-12), [0.01, 0.05, 0.2]),
            interference: squares(largest.max(1e-12), [0.05, 0.25, 1.0]),
            step: (0..gauges.len())
                .map(|g| squares(noise(g), [5.0, 50.0, 500.0]))
                .collect(),
            drift: gauges
                .iter()
                .enumerate()
                .map(|(g, gauge)| {
                    // Without a specification: a noise's worth in a month.
                    let unit = (gauge.drift * 86_400.0).max(noise(g) / 30.0);
                    squares(unit, [5.0, 25.0, 125.0])
                })
                .collect(),
            meter: vec![0.02_f64.powi(2), 0.06_f64.powi(2), 0.2_f64.powi(2)],
            barrier: 0.3_f64.powi(2),
        }
    }
}
