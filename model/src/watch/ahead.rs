//! The watch stepped on without readings: what the gauges would show, and how sure that is.
//!
//! With coefficients b of mean m and covariance C, and the filter's states x of covariance P, a block mean is
//! `prediction + H x0 + (w - H X) b + H e + noise`, where x0 and X are the states of readings and columns carried on
//! without feedback and `e <- F e + fresh` grows from P. So the meters' and gauges' present errors fade from the mean
//! and their full spread comes into the variance as the lead time grows.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges and columns checked at construction"
)]

use nalgebra::{DMatrix, DVector};

use super::band::Band;
use super::step::{BATCH, Watch};
use crate::ModelError;
use crate::block::{Block, RateKnown, RatePath};
use crate::commission::calm;
use crate::expect::columns::Memory;
use crate::expect::posterior::Posterior;
use crate::expect::whitener::Whitener;
use crate::forecast::RatePlan;
use crate::weigh::ladder::Ladder;

/// Instants at which a block to come is looked at.
const INSTANTS: usize = 6;

/// A watch that goes on without readings.
pub(crate) struct Coasting {
    watch: Watch,
    memory: Memory,
    /// Covariance of the filter's states.
    errors: DMatrix<f64>,
}

/// One block to come.
pub(crate) struct Coasted {
    /// Mean of each gauge's block mean \[Pa\].
    pub(crate) mean: DVector<f64>,
    /// Variance of the same, by what is not known: coefficients, meters, wander, noise \[Pa^2\].
    pub(crate) variance: DVector<f64>,
    /// What each coefficient does (gauges by columns) \[Pa\].
    pub(crate) rows: DMatrix<f64>,
    /// Factor on the stochastic errors of each gauge, as commissioning and the present rates ask for.
    pub(crate) scale: Vec<f64>,
}

impl Watch {
    /// Last value of every input, wells \[m3/s\] before open water \[Pa\]; of an embankment that of every drive in its
    /// own unit, but the mean of rain, which no last value foretells. `None` before the first block.
    #[must_use]
    pub fn last_rates(&self) -> Option<Vec<f64>> {
        let memory = self.state.memory.as_ref()?;
        let drives = self.columns.last_drives(memory);
        Some(drives.unwrap_or_else(|| self.as_read(&memory.entering)))
    }

    /// Inputs as they are read, from what they are counted from.
    pub(super) fn as_read(&self, counted: &[f64]) -> Vec<f64> {
        let rest = &self.columns.priors.rest;
        let rest = rest.iter().copied().chain(std::iter::repeat(0.0));
        counted.iter().zip(rest).map(|(v, r)| v + r).collect()
    }

    /// Number of the next block due; `None` before the first.
    #[must_use]
    pub fn next_block(&self) -> Option<i64> {
        self.state.next
    }

    /// The same watch, which goes on learning but weighs no causes: all that looking ahead needs, at a fraction of the cost.
    #[must_use]
    pub fn only_expecting(mut self) -> Self {
        self.state.first_onset = i64::MAX;
        self.state.ladder = Ladder::new();
        self.state.finding = None;
        self
    }

    /// A block to come under planned rates, without readings but at the instants of readings.
    pub(crate) fn block_to_come(
        &self,
        index: i64,
        plan: &RatePlan,
        instants: &[f64],
        before: &[f64],
    ) -> Block {
        let start = index as f64 * self.block;
        Block {
            index,
            length: self.block,
            instants: if instants.is_empty() {
                (0..INSTANTS)
                    .map(|i| (i as f64 + 0.5) / INSTANTS as f64 * self.block)
                    .collect()
            } else {
                instants.to_vec()
            },
            rates: before
                .iter()
                .enumerate()
                .map(|(well, &before)| RatePath {
                    pieces: plan.pieces(well, start, self.block, before),
                    known: RateKnown::Read,
                })
                .collect(),
            gauges: vec![None; self.columns.frame.gauges],
        }
    }
}

impl Coasting {
    /// Takes the watch as it stands; what was read but not yet learned is learned.
    ///
    /// # Errors
    /// [`ModelError::History`] before the first block.
    pub(crate) fn new(watch: &Watch) -> Result<Self, ModelError> {
        let mut watch = watch.clone();
        let memory = watch.state.memory.take().ok_or_else(|| {
            ModelError::History("the watch has seen no block to go on from".to_owned())
        })?;
        watch.learn_pending()?;
        let errors = watch.whitener.before.clone();
        Ok(Self {
            watch,
            memory,
            errors,
        })
    }

    /// Mean and covariance of the coefficients; columns of later blocks are at the end.
    pub(crate) fn posterior(&self) -> &Posterior {
        &self.watch.state.posterior
    }

    /// The filter.
    pub(crate) fn whitener(&self) -> &Whitener {
        &self.watch.whitener
    }

    /// Covariance of the filter's states now.
    pub(crate) fn errors(&self) -> &DMatrix<f64> {
        &self.errors
    }

    /// Prior variance that each fixed column regains in a block.
    pub(crate) fn forgetting(&self) -> Vec<f64> {
        let block = self.watch.block;
        self.watch.forgetting.iter().map(|f| f * block).collect()
    }

    /// Steps on through a block to come.
    pub(crate) fn step(&mut self, block: &Block) -> Result<Coasted, ModelError> {
        let watch = &mut self.watch;
        let gauges = watch.columns.frame.gauges;
        let sampled = watch.columns.sample(block)?;
        let raw = watch.columns.step(&mut self.memory, &sampled)?;
        let row = watch.prepare(block, &sampled, &raw, &self.memory, &[]).row;
        let left = watch.whitener.coast(&mut watch.state.filter, &row);
        let rows = left.columns(1, left.ncols() - 1).into_owned();
        let largest = &watch.columns.priors.rate;
        let scale: Vec<f64> = calm(&watch.unsteady, &sampled, largest, gauges)
            .iter()
            .enumerate()
            .map(|(gauge, calm)| watch.inflate.get(gauge).copied().unwrap_or(1.0) / calm)
            .collect();
        let posterior = &watch.state.posterior;
        let known = &rows * &posterior.covariance;
        let shown = watch.whitener.shown(&self.errors);
        let seen = watch.whitener.shown(&shown.transpose());
        // How far an embankment's pool lies beyond what history has seen.
        let beyond = |gauge: usize| {
            let variance = raw.beyond.as_ref().and_then(|b| b.variance.get(gauge));
            variance.copied().unwrap_or(0.0)
        };
        let mut mean = &rows * &posterior.mean;
        let mut variance = DVector::zeros(gauges);
        for gauge in 0..gauges {
            mean[gauge] += raw.base[gauge] + watch.reference.get(gauge).copied().unwrap_or(0.0)
                - left[(gauge, 0)];
            let stochastic = seen[(gauge, gauge)] + watch.whitener.noise[gauge].powi(2);
            variance[gauge] = known.row(gauge).dot(&rows.row(gauge)).max(0.0)
                + stochastic * scale[gauge].powi(2)
                + beyond(gauge);
        }
        // P <- F P F' + Q.
        let nothing = DMatrix::zeros(gauges, self.errors.ncols());
        watch.whitener.coast(&mut self.errors, &nothing);
        let mut turned = self.errors.transpose();
        watch.whitener.coast(&mut turned, &nothing);
        self.errors = turned + &watch.whitener.fresh;
        let lost: Vec<f64> = watch.forgetting.iter().map(|f| f * watch.block).collect();
        watch.state.posterior.forget(&lost);
        Ok(Coasted {
            mean,
            variance,
            rows,
            scale,
        })
    }
}

impl Watch {
    /// Learns what is pending, and drops what only serves to weigh causes.
    pub(super) fn learn_pending(&mut self) -> Result<(), ModelError> {
        let state = &mut self.state;
        let width = state.pending.ncols();
        let pending = std::mem::replace(&mut state.pending, DMatrix::zeros(0, width));
        state.calm.clear();
        state.ladder = Ladder::new();
        state.band = Band::new();
        state.finding = None;
        if pending.nrows() == 0 {
            return Ok(());
        }
        let blocks = pending.nrows() / self.columns.frame.gauges.max(1);
        let elapsed = (blocks as f64).min(BATCH as f64) * self.block;
        let lost: Vec<f64> = self.forgetting.iter().map(|f| f * elapsed).collect();
        state.posterior.forget(&lost);
        let readings: DVector<f64> = pending.column(0).into_owned();
        state
            .posterior
            .learn(pending.columns(1, width - 1).into_owned(), &readings)?;
        Ok(())
    }
}
