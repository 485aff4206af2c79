//! What acts on an embankment as series: drives centred and scaled, the pool's square beside it, and their lags.

#![expect(
    clippy::indexing_slicing,
    reason = "inputs and drives are counted by the same code that lays them out"
)]

use crate::units::WATER_WEIGHT;
use serde::{Deserialize, Serialize};

use super::{Driver, Embankment};
use crate::ModelError;
use crate::block::{Block, RateKnown};
use crate::expect::drive::{Geometry, Sampled, size};

/// Time constants of the lags, two a decade \[s\]: three hours to four months.
pub(crate) const LAGS: [f64; 7] = [
    10_800.0,
    36_000.0,
    113_840.0,
    360_000.0,
    1_138_400.0,
    3_600_000.0,
    11_384_000.0,
];

/// One series that the columns are made of.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) struct Input {
    /// Drive, by order.
    pub(crate) drive: usize,
    /// What it is.
    pub(crate) driver: Driver,
    /// Its square: a free surface that rises widens the way of the water.
    pub(crate) square: bool,
}

impl Input {
    /// The series of an embankment.
    pub(crate) fn all(embankment: &Embankment) -> Vec<Self> {
        let mut all = Vec::new();
        for (drive, &driver) in embankment.drives.iter().enumerate() {
            let one = Self {
                drive,
                driver,
                square: false,
            };
            all.push(one);
            if driver == Driver::Pool {
                all.push(Self {
                    square: true,
                    ..one
                });
            }
        }
        all
    }

    /// Whether it acts at once.
    pub(crate) fn direct(&self) -> bool {
        self.driver != Driver::Rain
    }

    /// Which of [`LAGS`] it acts through, with blocks of a length.
    pub(crate) fn lags(&self, block: f64) -> Vec<usize> {
        let all: &[usize] = match (self.driver, self.square) {
            (Driver::Pool, false) => &[0, 1, 2, 3, 4, 5, 6],
            (Driver::Pool, true) => &[2, 3, 4, 5, 6],
            (Driver::Tailwater, _) => &[1, 3, 5],
            (Driver::Rain, _) => &[2, 3, 4, 5],
            (Driver::Temperature, _) => &[3, 5],
            (Driver::Barometer, _) => &[1],
        };
        // What is faster than half a block acts at once.
        all.iter()
            .copied()
            .filter(|&lag| LAGS[lag] > 0.5 * block)
            .collect()
    }
}

/// How drives and columns are scaled, as history had them.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Scaling {
    /// Mean of each drive over the history.
    pub centre: Vec<f64>,
    /// Its standard deviation.
    pub spread: Vec<f64>,
    /// Least and greatest block mean of each drive.
    pub range: Vec<(f64, f64)>,
    /// Spread of each gauge's readings over the history \[Pa\].
    pub gauge: Vec<f64>,
    /// Prior standard deviation of each group's coefficients at each gauge, as a share of that spread (learned; row-major
    /// by gauge).
    pub share: Vec<f64>,
    /// How far each gauge may be off for each Pascal of pool beyond the range.
    pub beyond: Vec<f64>,
}

impl Scaling {
    /// Of the drives in a history.
    ///
    /// # Errors
    /// [`ModelError::Size`] for blocks of another embankment, [`ModelError::History`] where the pool never moves.
    pub(crate) fn of(embankment: &Embankment, history: &[Block]) -> Result<Self, ModelError> {
        let drives = embankment.drives.len();
        let (mut centre, mut spread, mut range) = (Vec::new(), Vec::new(), Vec::new());
        for (drive, driver) in embankment.drives.iter().enumerate() {
            let mut series = Vec::with_capacity(history.len());
            for block in history {
                size("paths in a block", block.rates.len(), drives)?;
                // What was only held, or not read at all, says nothing of centre and range.
                if block.rates[drive].known == RateKnown::Read {
                    series.push(mean(block, drive));
                }
            }
            if series.is_empty() {
                return Err(ModelError::History(format!(
                    "the {} was not read in it; take it out of the site file or give a history that has it",
                    driver.name()
                )));
            }
            let count = series.len().max(1) as f64;
            let middle = series.iter().sum::<f64>() / count;
            let variance = series.iter().map(|v| (v - middle).powi(2)).sum::<f64>() / count;
            if !variance.is_finite() {
                return Err(ModelError::NotFinite("a drive of the embankment"));
            }
            let least = series.iter().copied().fold(f64::INFINITY, f64::min);
            let greatest = series.iter().copied().fold(f64::NEG_INFINITY, f64::max);
            if *driver == Driver::Pool && greatest - least < LEAST_RANGE {
                return Err(ModelError::History(format!(
                    "the pool moved by {:.3} m only, so that no answer to it can be learned; give a longer history",
                    (greatest - least) / WATER_WEIGHT
                )));
            }
            centre.push(middle);
            spread.push(if variance > 0.0 { variance.sqrt() } else { 1.0 });
            range.push((least, greatest));
        }
        Ok(Self {
            centre,
            spread,
            range,
            gauge: Vec::new(),
            share: Vec::new(),
            beyond: Vec::new(),
        })
    }
}

/// Least range of the pool from which an answer can be learned \[Pa\]: a tenth of a metre.
const LEAST_RANGE: f64 = 0.1 * WATER_WEIGHT;

/// Mean of a drive over a block.
pub(crate) fn mean(block: &Block, drive: usize) -> f64 {
    let (mut from, mut sum) = (0.0, 0.0);
    for &(until, value) in block.rates.get(drive).map_or(&[][..], |p| &p.pieces) {
        sum += value * (until - from);
        from = until;
    }
    sum / block.length
}

/// The drives of a block as inputs: the same pieces, centred and scaled.
pub(crate) fn inputs(drives: &Sampled, all: &[Input], scaling: &Scaling) -> Sampled {
    let scaled = |input: &Input| {
        let (centre, spread) = (scaling.centre[input.drive], scaling.spread[input.drive]);
        drives.rates[input.drive]
            .iter()
            .map(|value| {
                let unit = (value - centre) / spread;
                if input.square { unit * unit } else { unit }
            })
            .collect()
    };
    Sampled {
        geometry: Geometry {
            cuts: all
                .iter()
                .map(|i| drives.geometry.cuts[i.drive].clone())
                .collect(),
            ..drives.geometry.clone()
        },
        class: drives.class.clone(),
        rates: all.iter().map(scaled).collect(),
        start: drives.start,
        drives: None,
    }
}

/// Whole blocks in a time.
#[expect(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "a positive count far below 2^53"
)]
pub(crate) fn blocks(time: f64, block: f64) -> usize {
    (time / block).max(1.0).round() as usize
}
