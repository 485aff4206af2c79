//! Calibration of an embankment on its history: each gauge by itself, scales and noise by marginal likelihood.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges and columns laid out by the same code"
)]

use nalgebra::{DMatrix, DVector};

use super::columns::{AGES, Lagged, Term, YEAR};
use super::history::Single;
use super::input::{LAGS, Scaling};
use super::{Answer, Calibration, Embankment, laid_out, path};
use crate::ModelError;
use crate::block::Block;
use crate::commission::history::{Regression, Solved};
use crate::commission::longest_unchanged;
use crate::commission::rates::{spread_and_correlation, typical_count};
use crate::commission::relevance::{Group, learn};
use crate::expect::Noise;
use crate::expect::columns::{Columns, Kind};
use crate::expect::whitener::Whitener;
use crate::ground::Ground;

/// Least history \[s\]: with less than a year the season cannot be told from the pool.
const LEAST_HISTORY: f64 = 300.0 * 86_400.0;
/// Unit of a scale, in spreads of the gauge: an answer that begins late is a difference of large ones.
const WIDE: f64 = 20.0;
/// Scale that a group is thought to have before history is asked: a tenth of the gauge's spread.
const TYPICAL: f64 = 0.1 / WIDE;
/// Memories of the gauges' wander that are tried \[s\].
const MEMORIES: [f64; 4] = [86_400.0, 3.0 * 86_400.0, 10.0 * 86_400.0, 30.0 * 86_400.0];
/// Factors by which noise and wander are tried larger and smaller.
const STRIDES: [f64; 3] = [3.0, 1.6, 1.2];
/// Beyond the range of its history a gauge may answer by this much more or less than it did.
const UNPROVEN: f64 = 0.5;

/// Calibrates an embankment on quiet history; the paths of its blocks are the drives.
///
/// `progress` is told the share done, 0 to 1.
///
/// # Errors
/// [`ModelError::History`] where history is too short, the pool never moves or a gauge is silent, others where the
/// mathematics fails.
pub fn commission(
    ground: &Ground,
    embankment: &Embankment,
    history: &[Block],
    progress: &mut dyn FnMut(f64),
) -> Result<Calibration, ModelError> {
    let (Some(first), Some(last)) = (history.first(), history.last()) else {
        return Err(ModelError::History("there is none".to_owned()));
    };
    let block = first.length;
    let length = history.len() as f64 * block;
    if length < LEAST_HISTORY {
        return Err(ModelError::History(format!(
            "it lasts {:.0} days, but an embankment needs at least {:.0}, better two years or more: the season must be told from the pool",
            length / 86_400.0,
            LEAST_HISTORY / 86_400.0
        )));
    }
    let gauges = ground.gauges.len();
    let mut scaling = Scaling::of(embankment, history)?;
    scaling.gauge = vec![1.0; gauges];
    let lagged = Lagged::new(embankment, &scaling, gauges, block)?;
    let groups = lagged.groups.len();
    let mut columns = laid_out(ground, lagged.clone());
    let singles = Single::all(&mut columns, history)?;
    let count = typical_count(history, gauges);
    let mut fits = Vec::with_capacity(gauges);
    for (gauge, single) in singles.iter().enumerate() {
        let stated = ground.gauges[gauge].noise.max(1e-3) / count[gauge].sqrt();
        fits.push(Fit::new(&columns, &lagged, gauge, single, block, stated));
    }
    // One memory for all: the likeliest of a few.
    let mut best = (f64::NEG_INFINITY, fits);
    for (tried, memory) in MEMORIES.into_iter().enumerate() {
        let mut next = best.1.clone();
        let mut total = 0.0;
        for (gauge, fit) in next.iter_mut().enumerate() {
            fit.memory = memory;
            total += fit.settle()?;
            let done = (tried * gauges + gauge + 1) as f64;
            progress(done / (MEMORIES.len() * gauges) as f64);
        }
        if total > best.0 {
            best = (total, next);
        }
    }
    let fits = best.1;
    scaling.gauge = fits.iter().map(|f| f.single.spread).collect();
    scaling.share = Vec::with_capacity(gauges * groups);
    let mut calibration = Calibration {
        scaling,
        answers: Vec::new(),
        noise: Vec::new(),
        left: Vec::new(),
        block,
        blocks: (first.index, last.index),
        reference: fits.iter().map(|f| f.single.reference).collect(),
        stochastic: Noise {
            gauge: fits.iter().map(|f| f.noise).collect(),
            wander: fits.iter().map(|f| f.wander).collect(),
            wander_memory: fits.first().map_or(MEMORIES[0], |f| f.memory),
            meter: Vec::new(),
            meter_memory: 86_400.0,
            meter_fresh: Vec::new(),
        },
        inflate: Vec::new(),
        longest_unchanged: longest_unchanged(history, gauges),
    };
    for fit in &fits {
        let (whitener, regression, solved) = fit.solved()?;
        let left = fit
            .single
            .read(regression.left(&solved.mean).iter().copied());
        let (sd, lag) = spread_and_correlation(&left);
        let inflate = sd.max(0.7);
        calibration.left.push((sd / inflate, lag));
        calibration.inflate.push(inflate);
        calibration
            .noise
            .push(whitener.innovation()[(0, 0)].sqrt() * inflate);
        let answer = fit.answer(&solved, block);
        calibration
            .scaling
            .beyond
            .push(UNPROVEN * answer.response.0.abs());
        calibration.answers.push(answer);
        let shares = fit.groups.iter().map(|g| WIDE * g.scale);
        calibration.scaling.share.extend(shares);
    }
    Ok(calibration)
}

/// The fit of one gauge.
#[derive(Debug, Clone)]
struct Fit<'a> {
    lagged: &'a Lagged,
    single: &'a Single,
    block: f64,
    noise: f64,
    wander: f64,
    memory: f64,
    /// Spread that a column of unit scale stands for \[Pa\].
    unit: f64,
    /// Scales of the groups.
    groups: Vec<Group>,
    /// Which of the gauge's own columns each term is.
    at: Vec<usize>,
    width: usize,
}

impl<'a> Fit<'a> {
    fn new(
        columns: &Columns,
        lagged: &'a Lagged,
        gauge: usize,
        single: &'a Single,
        block: f64,
        stated: f64,
    ) -> Self {
        let own = columns.of_gauge(gauge);
        let at: Vec<usize> = own
            .iter()
            .enumerate()
            .filter(|(_, column)| matches!(columns.kinds[**column], Kind::Lagged(_)))
            .map(|(index, _)| index)
            .collect();
        let groups = (0..lagged.groups.len())
            .map(|group| Group {
                columns: at
                    .iter()
                    .zip(&lagged.group_of)
                    .filter(|(_, g)| **g == group)
                    .map(|(index, _)| *index)
                    .collect(),
                scale: TYPICAL,
                typical: TYPICAL,
                weight: 1.0,
                most: 1.0,
            })
            .collect();
        Self {
            lagged,
            single,
            block,
            noise: stated,
            wander: 0.1 * single.spread.max(stated),
            memory: MEMORIES[0],
            unit: WIDE * single.spread.max(f64::MIN_POSITIVE),
            groups,
            at,
            width: own.len(),
        }
    }

    fn whitener(&self, noise: f64, wander: f64) -> Result<Whitener, ModelError> {
        let noise = Noise {
            gauge: vec![noise],
            wander: vec![wander],
            wander_memory: self.memory,
            meter: Vec::new(),
            meter_memory: 86_400.0,
            meter_fresh: Vec::new(),
        };
        Whitener::new(&path(1), &noise, &[], self.block)
    }

    /// The history whitened, its columns in units of the gauge's spread.
    fn regression(&self, whitener: &Whitener) -> Regression {
        let mut regression = self.single.whiten(whitener);
        for &column in &self.at {
            regression.rows.column_mut(1 + column).scale_mut(self.unit);
        }
        Regression::of(regression.rows)
    }

    fn spread(&self) -> DVector<f64> {
        let mut spread = DVector::from_element(self.width, 1.0);
        for group in &self.groups {
            for &column in &group.columns {
                spread[column] = group.scale;
            }
        }
        spread
    }

    /// Learns scales and noise in turn; returns the log marginal likelihood.
    fn settle(&mut self) -> Result<f64, ModelError> {
        let centre = DVector::zeros(self.width);
        let mut best = f64::NEG_INFINITY;
        for stride in STRIDES {
            let regression = self.regression(&self.whitener(self.noise, self.wander)?);
            let mut spread = self.spread();
            learn(&regression, &mut self.groups, &mut spread, &centre)?;
            let likelihood = |noise: f64, wander: f64| -> Result<f64, ModelError> {
                let whitener = self.whitener(noise, wander)?;
                let solved = self.regression(&whitener).solve(&spread, &centre)?;
                Ok(solved.log_likelihood - whitener.log_scale() * self.single.len() as f64)
            };
            let (mut noise, mut wander) = (self.noise, self.wander);
            best = likelihood(noise, wander)?;
            for knob in [0, 1, 0, 1] {
                for factor in [stride, 1.0 / stride] {
                    let mut moved = false;
                    for _ in 0..6 {
                        let (n, w) = if knob == 0 {
                            (noise * factor, wander)
                        } else {
                            (noise, wander * factor)
                        };
                        let value = likelihood(n, w)?;
                        if value <= best + 0.1 {
                            break;
                        }
                        (best, noise, wander, moved) = (value, n, w, true);
                    }
                    if moved {
                        break;
                    }
                }
            }
            (self.noise, self.wander) = (noise, wander);
        }
        Ok(best)
    }

    fn solved(&self) -> Result<(Whitener, Regression, Solved), ModelError> {
        let whitener = self.whitener(self.noise, self.wander)?;
        let regression = self.regression(&whitener);
        let solved = regression.solve(&self.spread(), &DVector::zeros(self.width))?;
        Ok((whitener, regression, solved))
    }

    /// What the coefficients say of the gauge.
    fn answer(&self, solved: &Solved, block: f64) -> Answer {
        let covariance: DMatrix<f64> = solved.factor.inverse();
        let sd = |v: &DVector<f64>| v.dot(&(&covariance * v)).max(0.0).sqrt();
        let weights = |weigh: &dyn Fn(Term) -> f64| {
            let mut v = DVector::zeros(self.width);
            for (&column, &term) in self.at.iter().zip(&self.lagged.terms) {
                v[column] = weigh(term);
            }
            v
        };
        let pool = |term: Term| f64::from(u8::from(self.lagged.of_pool(term)));
        let delay = |term: Term| match term {
            Term::Lagged(_, lag) => LAGS[lag],
            _ => 0.0,
        };
        let per_pascal = self.unit / self.lagged.pool_spread();
        let all = weights(&pool);
        let total = all.dot(&solved.mean);
        let sure = total.abs().max(1e-9);
        let lag = weights(&|t| pool(t) * delay(t)).dot(&solved.mean) / sure * total.signum();
        let lag_sd = sd(&weights(&|t| pool(t) * (delay(t) - lag))) / sure;
        let wave = |which: usize| weights(&|t| f64::from(u8::from(t == Term::Wave(which))));
        let (sine, cosine) = (wave(0).dot(&solved.mean), wave(1).dot(&solved.mean));
        let season = sine.hypot(cosine);
        let along = (wave(0) * sine + wave(1) * cosine) / season.max(1e-12);
        let mut aged = DVector::zeros(self.width);
        let year = super::input::blocks(YEAR, block);
        for (&column, &term) in self.at.iter().zip(&self.lagged.terms) {
            if (0..AGES).any(|age| term == Term::Age(age)) {
                let from = self.single.len().saturating_sub(1 + year);
                aged[column] = self.single.change(column, from);
            }
        }
        let mut mean = solved.mean.clone();
        for &column in &self.at {
            mean[column] *= self.unit;
        }
        let (readings, rest) = self.single.readings_and_rest(&mean);
        let (all_sd, rest_sd) = (
            spread_and_correlation(&readings).0,
            spread_and_correlation(&rest).0,
        );
        Answer {
            response: (per_pascal * total, per_pascal * sd(&all)),
            lag: (lag, lag_sd),
            season: (self.unit * season, self.unit * sd(&along)),
            ageing: (self.unit * aged.dot(&solved.mean), self.unit * sd(&aged)),
            explained: 1.0 - (rest_sd / all_sd.max(f64::MIN_POSITIVE)).powi(2),
        }
    }
}
