//! Pressure under planned rates, and the time to each limit.
//!
//! From where the watch stands the calibrated ground is stepped on under planned rates. The mean is the model with the
//! nuisances as they are known now; adopted findings go on. The band holds what is not known: the coefficients' posterior
//! covariance (columns of rates to come with their prior), what they forget, and the errors of meters and gauges, which
//! grow from what the filter knows of them now to their full spread. Times to a limit come from draws of whole futures
//! with a fixed seed, so that errors that last are not taken for fresh chances at every block; a gauge's own noise is left out.

use nalgebra::{Cholesky, DMatrix, DVector};
use serde::{Deserialize, Serialize};

use crate::ModelError;
use crate::expect::drive::size;
use crate::finding::Expectation;
use crate::watch::{Coasting, Watch};

/// Futures drawn.
const DRAWS: usize = 400;
/// Seed of the draws.
const SEED: u64 = 0x9e37_79b9_7f4a_7c15;
/// Blocks after which drawn coefficients forget.
const FORGET: usize = 24;

/// Planned rates of every well.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct RatePlan {
    /// By well: instants \[s since the epoch\], ascending, and the rate from then on \[m3/s, injection positive\]. A well
    /// keeps its last rate until its first instant.
    pub wells: Vec<Vec<(f64, f64)>>,
}

impl RatePlan {
    /// Pieces of one well's rate in a block: until when \[s from its start\], and the rate.
    pub(crate) fn pieces(
        &self,
        well: usize,
        start: f64,
        length: f64,
        before: f64,
    ) -> Vec<(f64, f64)> {
        let steps = self.wells.get(well).map_or(&[][..], Vec::as_slice);
        let mut rate = before;
        let mut pieces = Vec::new();
        for &(at, next) in steps {
            let until = at - start;
            if until >= length {
                break;
            }
            if until > 0.0 && next.to_bits() != rate.to_bits() {
                pieces.push((until, rate));
            }
            rate = next;
        }
        pieces.push((length, rate));
        pieces
    }
}

/// How far to look, and at what.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct Horizon {
    /// Number of blocks.
    pub blocks: usize,
    /// Instants within a block at which gauges are read \[s from its start\], ascending; spread evenly where empty. A
    /// block mean after a change of rate depends on them.
    pub instants: Vec<f64>,
}

/// A limit to be reached.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Bound {
    /// Gauge, by its order in the ground.
    pub gauge: usize,
    /// Whether values above are beyond it, or values below.
    pub above: bool,
    /// The limit \[Pa\].
    pub value: f64,
}

/// When a limit is reached \[s since the epoch\]; `None` where not within the time looked at.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Passage {
    /// By the mean.
    pub mean: Option<f64>,
    /// By 5, 50 and 95 % of the futures drawn.
    pub spread: [Option<f64>; 3],
    /// Share of the futures that reach it within the time looked at.
    pub share: f64,
}

/// One block to come.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct BlockAhead {
    /// Number of the block.
    pub block: i64,
    /// Mean of every input: rates of wells \[m3/s\], then pressures of open water \[Pa\].
    pub rates: Vec<f64>,
    /// What each gauge is expected to show, as a block mean.
    pub gauges: Vec<Expectation>,
}

/// What lies ahead.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Forecast {
    /// Block after block.
    pub blocks: Vec<BlockAhead>,
    /// One a limit, in their order.
    pub passages: Vec<Passage>,
    /// What inputs keep until the plan says otherwise: rates of wells \[m3/s\], then pressures of open water \[Pa\].
    pub held: Vec<f64>,
}

impl Watch {
    /// Forecasts blocks to come under planned rates.
    ///
    /// # Errors
    /// [`ModelError::History`] before the first block, [`ModelError::Size`] for a plan or limit that does not fit,
    /// [`ModelError::NotPositive`] where a covariance cannot be factorised.
    pub fn forecast(
        &self,
        plan: &RatePlan,
        horizon: &Horizon,
        limits: &[Bound],
    ) -> Result<Forecast, ModelError> {
        let mut ahead = Coasting::new(self)?;
        let held = self.last_rates().unwrap_or_default();
        if plan.wells.len() > held.len() {
            size("wells of the plan", plan.wells.len(), held.len())?;
        }
        let first_block = self
            .next_block()
            .ok_or_else(|| ModelError::History("the watch has seen no block".to_owned()))?;
        let mut draws = if limits.is_empty() {
            None
        } else {
            Some(Draws::new(&ahead)?)
        };
        let mut first: Vec<Vec<Option<f64>>> = vec![vec![None; DRAWS]; limits.len()];
        let mut mean_first: Vec<Option<f64>> = vec![None; limits.len()];
        let mut last: Option<(f64, DVector<f64>, DMatrix<f64>)> = None;
        let mut out = Vec::with_capacity(horizon.blocks);
        for (index, _) in (first_block..).zip(0..horizon.blocks) {
            let block = self.block_to_come(index, plan, &horizon.instants, &held);
            let coasted = ahead.step(&block)?;
            let at = block.start() + 0.5 * block.length;
            if let Some(draws) = &mut draws {
                let shown = draws.step(&ahead, &coasted.rows, &coasted.scale, &coasted.mean);
                for (limit, (times, mean)) in
                    limits.iter().zip(first.iter_mut().zip(&mut mean_first))
                {
                    let before = last.as_ref();
                    let of_mean = before.map(|(t, m, _)| (*t, m.get(limit.gauge)));
                    note(mean, limit, at, coasted.mean.get(limit.gauge), of_mean);
                    for (draw, time) in times.iter_mut().enumerate() {
                        let of_draw = before.map(|(t, _, s)| (*t, s.get((limit.gauge, draw))));
                        note(time, limit, at, shown.get((limit.gauge, draw)), of_draw);
                    }
                }
                last = Some((at, coasted.mean.clone(), shown));
            }
            out.push(BlockAhead {
                block: index,
                rates: block.rates.iter().map(|r| mean_rate(&r.pieces)).collect(),
                gauges: coasted
                    .mean
                    .iter()
                    .zip(coasted.variance.iter())
                    .map(|(&mean, variance)| Expectation {
                        mean,
                        sd: variance.sqrt(),
                    })
                    .collect(),
            });
        }
        let passages = first
            .into_iter()
            .zip(mean_first)
            .map(|(times, mean)| summary(times, mean))
            .collect();
        Ok(Forecast {
            blocks: out,
            passages,
            held,
        })
    }
}

/// Notes when a limit is first reached, between the middles of two blocks; at once where the first is beyond it.
fn note(
    time: &mut Option<f64>,
    limit: &Bound,
    at: f64,
    value: Option<&f64>,
    before: Option<(f64, Option<&f64>)>,
) {
    let Some(&value) = value else { return };
    let beyond = |v: f64| {
        if limit.above {
            v >= limit.value
        } else {
            v <= limit.value
        }
    };
    if time.is_some() || !beyond(value) {
        return;
    }
    *time = Some(match before {
        Some((then, Some(&old))) if !beyond(old) => {
            then + (at - then) * (limit.value - old) / (value - old)
        }
        _ => at,
    });
}

fn summary(times: Vec<Option<f64>>, mean: Option<f64>) -> Passage {
    let count = times.len();
    let mut reached: Vec<f64> = times.into_iter().flatten().collect();
    reached.sort_by(f64::total_cmp);
    let share = reached.len() as f64 / count.max(1) as f64;
    // Futures that never reach it come last.
    let part = |percent: usize| reached.get((count * percent / 100).max(1) - 1).copied();
    Passage {
        mean,
        spread: [part(5), part(50), part(95)],
        share,
    }
}

fn mean_rate(pieces: &[(f64, f64)]) -> f64 {
    let mut from = 0.0;
    let mut sum = 0.0;
    for &(until, rate) in pieces {
        sum += (until - from) * rate;
        from = until;
    }
    sum / f64::max(from, f64::MIN_POSITIVE)
}

/// Futures drawn together: coefficients and the filter's errors.
struct Draws {
    dice: Dice,
    /// Coefficients less their mean (columns by draws).
    coefficients: DMatrix<f64>,
    /// Errors of meters and gauges (states by draws).
    errors: DMatrix<f64>,
    blocks: usize,
}

impl Draws {
    fn new(ahead: &Coasting) -> Result<Self, ModelError> {
        let mut dice = Dice(SEED);
        let coefficients = drawn(&ahead.posterior().covariance, &mut dice)?;
        let errors = drawn(ahead.errors(), &mut dice)?;
        Ok(Self {
            dice,
            coefficients,
            errors,
            blocks: 0,
        })
    }

    /// What each future shows in a block (gauges by draws).
    fn step(
        &mut self,
        ahead: &Coasting,
        rows: &DMatrix<f64>,
        scale: &[f64],
        mean: &DVector<f64>,
    ) -> DMatrix<f64> {
        let had = self.coefficients.nrows();
        if rows.ncols() > had {
            // Columns that came with this block have their prior.
            self.coefficients.resize_vertically_mut(rows.ncols(), 0.0);
            for mut row in self.coefficients.row_iter_mut().skip(had) {
                row.iter_mut().for_each(|v| *v = self.dice.normal());
            }
        }
        let mut shown = ahead.whitener().shown(&self.errors);
        for (mut row, scale) in shown.row_iter_mut().zip(scale) {
            row *= *scale;
        }
        shown.gemm(1.0, rows, &self.coefficients, 1.0);
        for mut column in shown.column_iter_mut() {
            column += mean;
        }
        let nothing = DMatrix::zeros(rows.nrows(), self.errors.ncols());
        ahead.whitener().coast(&mut self.errors, &nothing);
        // What is new in the states is independent from state to state.
        for (mut row, variance) in self
            .errors
            .row_iter_mut()
            .zip(ahead.whitener().fresh.diagonal().iter())
        {
            if *variance > 0.0 {
                let sd = variance.sqrt();
                row.iter_mut().for_each(|v| *v += sd * self.dice.normal());
            }
        }
        self.blocks += 1;
        if self.blocks.is_multiple_of(FORGET) {
            for (mut row, lost) in self
                .coefficients
                .row_iter_mut()
                .zip(ahead.forgetting())
                .filter(|(_, lost)| *lost > 0.0)
            {
                let sd = (lost * FORGET as f64).sqrt();
                row.iter_mut().for_each(|v| *v += sd * self.dice.normal());
            }
        }
        shown
    }
}

/// Draws of a normal vector of this covariance (size by draws).
fn drawn(covariance: &DMatrix<f64>, dice: &mut Dice) -> Result<DMatrix<f64>, ModelError> {
    let count = covariance.nrows();
    let largest = covariance.diagonal().amax().max(f64::MIN_POSITIVE);
    // Rounding may leave a covariance that is singular a little below zero.
    let root = [0.0, 1e-14, 1e-12, 1e-10, 1e-8]
        .iter()
        .find_map(|share| {
            let lifted = covariance + DMatrix::identity(count, count) * (share * largest);
            Cholesky::new(lifted)
        })
        .ok_or(ModelError::NotPositive {
            what: "the covariance of what is not known of the future",
        })?
        .unpack();
    let mut normal = DMatrix::zeros(count, DRAWS);
    normal.iter_mut().for_each(|v| *v = dice.normal());
    Ok(root * normal)
}

/// A repeatable source of normal deviates (SplitMix64, Steele, Lea & Flood 2014; Box & Muller 1958).
struct Dice(u64);

impl Dice {
    fn uniform(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^= z >> 31;
        ((z >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }

    fn normal(&mut self) -> f64 {
        (-2.0 * self.uniform().ln()).sqrt() * (std::f64::consts::TAU * self.uniform()).cos()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_plan_is_cut_into_the_pieces_of_a_block() {
        let plan = RatePlan {
            wells: vec![
                vec![(50.0, 1.0), (130.0, 2.0), (160.0, 3.0), (900.0, 9.0)],
                vec![],
            ],
        };
        assert_eq!(
            plan.pieces(0, 0.0, 100.0, 7.0),
            vec![(50.0, 7.0), (100.0, 1.0)]
        );
        assert_eq!(
            plan.pieces(0, 100.0, 100.0, 7.0),
            vec![(30.0, 1.0), (60.0, 2.0), (100.0, 3.0)]
        );
        assert_eq!(plan.pieces(0, 200.0, 100.0, 7.0), vec![(100.0, 3.0)]);
        assert_eq!(plan.pieces(1, 200.0, 100.0, 7.0), vec![(100.0, 7.0)]);
    }

    #[test]
    fn futures_that_never_reach_a_limit_come_last() {
        let times: Vec<Option<f64>> = (0..100).map(|i| (i < 60).then_some(f64::from(i))).collect();
        let passage = summary(times, None);
        assert_eq!(passage.spread, [Some(4.0), Some(49.0), None]);
        assert!((passage.share - 0.6).abs() < 1e-12);
    }

    #[test]
    fn a_limit_is_reached_between_the_middles_of_blocks() {
        let limit = Bound {
            gauge: 0,
            above: false,
            value: 5.0,
        };
        let mut time = None;
        note(&mut time, &limit, 10.0, Some(&8.0), None);
        assert_eq!(time, None);
        note(
            &mut time,
            &limit,
            20.0,
            Some(&4.0),
            Some((10.0, Some(&8.0))),
        );
        assert_eq!(time, Some(17.5));
        note(
            &mut time,
            &limit,
            30.0,
            Some(&3.0),
            Some((20.0, Some(&4.0))),
        );
        assert_eq!(time, Some(17.5));
    }
}
