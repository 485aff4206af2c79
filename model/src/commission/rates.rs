//! What rates and readings of the history are like.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over columns, gauges and wells laid out by the same code"
)]

use crate::block::{Block, RateKnown};
use crate::expect::columns::LAGS;
use crate::ground::Ground;

/// What the rates of the history are like.
pub(super) struct Rates {
    /// Root mean square rate of each well \[m3/s\].
    pub(super) rms: Vec<f64>,
    /// Largest rate of each well \[m3/s\].
    pub(super) largest: Vec<f64>,
    /// Spread of each well's lagged rate (lag by well) \[m3/s\].
    pub(super) lag_spread: Vec<f64>,
    /// Mean total injection \[m3/s\].
    pub(super) flow: f64,
    /// What each input is counted from: zero for a rate, the mean for the pressure of open water \[Pa\].
    pub(super) rest: Vec<f64>,
}

impl Rates {
    pub(super) fn of(history: &[Block], ground: &Ground) -> Self {
        let (wells, metered) = (ground.inputs(), ground.wells.len());
        let rest: Vec<f64> = (0..wells)
            .map(|well| {
                if well < metered {
                    0.0
                } else {
                    mean(history, well)
                }
            })
            .collect();
        let mut largest = vec![0.0_f64; wells];
        let mut lag_spread = vec![0.0; LAGS.len() * wells];
        let mut flow = 0.0;
        let mut rms = Vec::with_capacity(wells);
        for well in 0..wells {
            let mut series = Vec::with_capacity(history.len());
            for block in history {
                let mut from = 0.0;
                let mut sum = 0.0;
                for &(until, rate) in block.rates.get(well).map_or(&[][..], |p| &p.pieces) {
                    let rate = rate - rest.get(well).copied().unwrap_or(0.0);
                    sum += rate * (until - from);
                    from = until;
                    largest[well] = largest[well].max(rate.abs());
                }
                series.push(sum / block.length);
            }
            let length = history.first().map_or(1.0, |b| b.length);
            for (lag, time) in LAGS.iter().enumerate() {
                let keep = (-length / time).exp();
                let mut value = 0.0;
                let lagged: Vec<f64> = series
                    .iter()
                    .map(|rate| {
                        value = keep * value + (1.0 - keep) * rate;
                        value
                    })
                    .collect();
                lag_spread[lag * wells + well] = spread_and_correlation(&lagged).0;
            }
            rms.push(
                (series.iter().map(|q| q * q).sum::<f64>() / series.len().max(1) as f64).sqrt(),
            );
            if well < metered {
                flow += series.iter().map(|q| q.abs()).sum::<f64>() / series.len().max(1) as f64;
            }
        }
        Self {
            rms,
            largest,
            lag_spread,
            flow,
            rest,
        }
    }
}

/// Mean of an input over the blocks in which it was read.
fn mean(history: &[Block], input: usize) -> f64 {
    let (mut sum, mut time) = (0.0, 0.0);
    for path in history.iter().filter_map(|b| b.rates.get(input)) {
        if path.known == RateKnown::Stale {
            continue;
        }
        let mut from = 0.0;
        for &(until, value) in &path.pieces {
            sum += value * (until - from);
            time += until - from;
            from = until;
        }
    }
    if time > 0.0 { sum / time } else { 0.0 }
}

/// Readings in a block of each gauge, as a rule.
pub(crate) fn typical_count(history: &[Block], gauges: usize) -> Vec<f64> {
    (0..gauges)
        .map(|gauge| {
            let counts = history
                .iter()
                .filter_map(|b| b.gauges.get(gauge).and_then(Option::as_ref))
                .map(|g| f64::from(g.count))
                .collect();
            super::history::median(counts).max(1.0)
        })
        .collect()
}

/// Standard deviation and lag-1 correlation of a series.
pub(crate) fn spread_and_correlation(series: &[f64]) -> (f64, f64) {
    let count = series.len().max(2) as f64;
    let mean = series.iter().sum::<f64>() / count;
    let variance = series.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / count;
    let together: f64 = series
        .iter()
        .zip(series.iter().skip(1))
        .map(|(a, b)| (a - mean) * (b - mean))
        .sum::<f64>()
        / count;
    (
        variance.sqrt(),
        if variance > 0.0 {
            together / variance
        } else {
            0.0
        },
    )
}
