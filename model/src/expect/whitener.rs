//! The whitening filter: one time-invariant Kalman filter of the stochastic nuisances.
//!
//! `e = L^-1 (y - H x)`, `x <- F x + F K (y - H x)` with the steady gain (Kalman 1960; innovations are white when
//! the model is right, Kailath 1968). Readings, predictions and signatures all go through the same filter, so a
//! signature's shape depends only on the time since its onset.
//! States: the path from meters to gauges, the meters' remembered and fresh errors, the gauges' wander. A block mean
//! also feels what a rate does within its own block; the filter carries that as `inside`.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over states laid out by the same code"
)]

use nalgebra::{DMatrix, DVector};

use super::drive::gain;
use super::noise::{Noise, Path};
use super::riccati::steady;
use crate::ModelError;

/// The filter's constant matrices.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Whitener {
    /// Decay of each state over a block.
    decay: DVector<f64>,
    /// Drive of the path by the meters' states (path states by meter states).
    drive: DMatrix<f64>,
    /// Share of a block's fresh error that the memory keeps, by well.
    link: DVector<f64>,
    /// Fresh errors in one standard deviation of the remembered one, by well.
    per_fresh: DVector<f64>,
    /// Observation (gauges by states).
    observe: DMatrix<f64>,
    /// `F K` (states by gauges).
    feedback: DMatrix<f64>,
    /// `L^-1` of the innovations' covariance.
    scale: DMatrix<f64>,
    /// Sum of the logs of L's diagonal.
    log_scale: f64,
    /// Covariance of a block mean about the model when the filter has seen nothing lately \[Pa^2\].
    open: DVector<f64>,
    /// Covariance of the innovations \[Pa^2\].
    innovation: DMatrix<f64>,
    /// Covariance of the states before a reading, in the steady state.
    pub(crate) before: DMatrix<f64>,
    /// Covariance of what is new in the states after each block.
    pub(crate) fresh: DMatrix<f64>,
    /// Standard deviation of each gauge's own noise \[Pa\].
    pub(crate) noise: DVector<f64>,
}

impl Whitener {
    /// Builds the filter of a path; `skin` is `(gauge, well, Pa per m3/s)` for gauges in wells.
    ///
    /// # Errors
    /// As [`steady`].
    pub(crate) fn new(
        path: &Path,
        noise: &Noise,
        skin: &[(usize, usize, f64)],
        block: f64,
    ) -> Result<Self, ModelError> {
        let modes = path.lambda.len();
        let wells = path.wells.ncols();
        let gauges = path.gauges.ncols();
        let states = modes + 2 * wells + gauges;
        let remembered = modes;
        let fresh = modes + wells;
        let wander = modes + 2 * wells;
        let keep = (-block / noise.meter_memory).exp();
        let keep_wander = (-block / noise.wander_memory).exp();
        let error = BlockMean::of(block / noise.meter_memory);
        let new: Vec<f64> = noise
            .meter
            .iter()
            .zip(&noise.meter_fresh)
            .map(|(sd, fresh)| (sd * sd * error.variance + fresh * fresh).sqrt())
            .collect();
        // What a unit state of each kind adds to the block mean of the rate.
        let unit: Vec<f64> = noise
            .meter
            .iter()
            .map(|sd| sd * error.carried)
            .chain(new.iter().copied())
            .collect();

        let mut decay = DVector::zeros(states);
        for mode in 0..modes {
            decay[mode] = (-path.lambda[mode] * block).exp();
        }
        decay.rows_mut(remembered, wells).fill(keep);
        decay.rows_mut(wander, gauges).fill(keep_wander);

        let mut drive = DMatrix::zeros(modes, 2 * wells);
        let mut observe = DMatrix::zeros(gauges, states);
        for mode in 0..modes {
            let lambda = path.lambda[mode];
            let full = gain(lambda, block);
            let z = lambda * block;
            // Mean over the block of the response to a unit rate that starts with it.
            let inside = if z > 1e-6 {
                (block - full) / z
            } else {
                block / 2.0
            };
            for gauge in 0..gauges {
                observe[(gauge, mode)] = path.gauges[(mode, gauge)] * full / block;
            }
            for (meter, scale) in unit.iter().enumerate() {
                let well = meter % wells;
                drive[(mode, meter)] = path.wells[(mode, well)] * full * scale;
                for gauge in 0..gauges {
                    observe[(gauge, modes + meter)] +=
                        path.gauges[(mode, gauge)] * path.wells[(mode, well)] * inside * scale;
                }
            }
        }
        for &(gauge, well, value) in skin {
            for (meter, scale) in unit.iter().enumerate() {
                if meter % wells == well {
                    observe[(gauge, modes + meter)] += value * scale;
                }
            }
        }
        let mut q = DMatrix::zeros(states, states);
        let mut link = DVector::zeros(wells);
        let mut per_fresh = DVector::zeros(wells);
        for well in 0..wells {
            q[(fresh + well, fresh + well)] = 1.0;
            let shared = match (noise.meter.get(well), new.get(well)) {
                (Some(sd), Some(new)) if *new > 0.0 => sd * error.with_end / new,
                _ => 0.0,
            };
            link[well] = shared;
            if let (Some(sd), Some(new)) = (noise.meter.get(well), new.get(well)) {
                per_fresh[well] = if *new > 0.0 { sd / new } else { 0.0 };
            }
            q[(remembered + well, remembered + well)] =
                (1.0 - keep * keep - shared * shared).max(0.0);
        }
        let mut r = DMatrix::zeros(gauges, gauges);
        for (gauge, (sd, walk)) in noise.gauge.iter().zip(&noise.wander).enumerate() {
            observe[(gauge, wander + gauge)] = *walk;
            q[(wander + gauge, wander + gauge)] = 1.0 - keep_wander * keep_wander;
            r[(gauge, gauge)] = sd * sd;
        }
        let mut f = DMatrix::from_diagonal(&decay);
        f.view_mut((0, modes), (modes, 2 * wells)).copy_from(&drive);
        for well in 0..wells {
            f[(remembered + well, fresh + well)] = link[well];
        }
        let p = steady(&f, &observe, &q, &r)?;
        let innovation = &observe * &p * observe.transpose() + &r;
        let factor = innovation
            .clone()
            .cholesky()
            .ok_or(ModelError::NotPositive {
                what: "the covariance of the innovations",
            })?;
        let feedback = &f * factor.solve(&(&observe * &p)).transpose();
        let lower = factor.l();
        let log_scale = lower.diagonal().map(f64::ln).sum();
        let identity = DMatrix::identity(gauges, gauges);
        let scale = lower
            .solve_lower_triangular(&identity)
            .ok_or(ModelError::NotPositive {
                what: "the covariance of the innovations",
            })?;
        let open = open_covariance(&f, &observe, &q, &r);
        Ok(Self {
            decay,
            drive,
            link,
            per_fresh,
            observe,
            feedback,
            scale,
            log_scale,
            open,
            innovation,
            before: p,
            fresh: q,
            noise: r.diagonal().map(f64::sqrt),
        })
    }

    /// Number of states.
    pub(crate) fn states(&self) -> usize {
        self.decay.len()
    }

    /// Sum of the logs of the innovations' scales: the filter's share of a log likelihood, per block.
    pub(crate) fn log_scale(&self) -> f64 {
        self.log_scale
    }

    /// Variance of a block mean about the model, of one gauge, when the filter has seen nothing lately \[Pa^2\].
    pub(crate) fn open_variance(&self, gauge: usize) -> f64 {
        self.open[gauge]
    }

    /// Covariance of the innovations \[Pa^2\].
    pub(crate) fn innovation(&self) -> &DMatrix<f64> {
        &self.innovation
    }

    /// Multiplies the innovations' scale of each gauge by `1 / inflate`.
    pub(crate) fn inflate(&mut self, inflate: &[f64]) {
        for (gauge, factor) in inflate.iter().enumerate() {
            self.scale.row_mut(gauge).unscale_mut(*factor);
            self.log_scale += factor.ln();
        }
    }

    /// What the next block would feel of one column if its raw values ended here, whitened.
    pub(crate) fn echo(&self, state: &DMatrix<f64>, column: usize) -> f64 {
        (&self.scale * (&self.observe * state.column(column))).norm()
    }

    /// Lets a meter's error jump by `size` of its standard deviations in one column: within the coming block only, or from
    /// its start on. A meter's error goes with its rate, so it jumps when the rate does.
    pub(crate) fn renew(
        &self,
        state: &mut DMatrix<f64>,
        column: usize,
        well: usize,
        size: f64,
        within: bool,
    ) {
        let modes = self.drive.nrows();
        let wells = self.link.len();
        if within {
            state[(modes + wells + well, column)] += size * self.per_fresh[well];
        } else {
            state[(modes + well, column)] += size;
        }
    }

    /// Whitens one block of any number of columns (`values`: gauges by columns) and moves their states on.
    pub(crate) fn step(&self, state: &mut DMatrix<f64>, values: &DMatrix<f64>) -> DMatrix<f64> {
        let surprise = self.coast(state, values);
        state.gemm(1.0, &self.feedback, &surprise, 1.0);
        &self.scale * surprise
    }

    /// What is left of one block of columns (`values`: gauges by columns) beyond what their states foretell \[Pa\]; moves
    /// the states on as if nothing were read.
    pub(crate) fn coast(&self, state: &mut DMatrix<f64>, values: &DMatrix<f64>) -> DMatrix<f64> {
        let mut surprise = values.clone();
        surprise.gemm(-1.0, &self.observe, state, 1.0);
        let (modes, meters) = self.drive.shape();
        let errors = state.rows(modes, meters).into_owned();
        for mut column in state.column_iter_mut() {
            column.component_mul_assign(&self.decay);
        }
        state
            .rows_mut(0, modes)
            .gemm(1.0, &self.drive, &errors, 1.0);
        for (well, link) in self.link.iter().enumerate() {
            let fresh = errors.row(self.link.len() + well) * *link;
            let mut remembered = state.row_mut(modes + well);
            remembered += fresh;
        }
        surprise
    }

    /// What states show at the gauges \[Pa\] (gauges by columns).
    pub(crate) fn shown(&self, state: &DMatrix<f64>) -> DMatrix<f64> {
        &self.observe * state
    }
}

/// How a first-order Markov error of unit variance looks through block means (exact; averaging correlates successive
/// changes, Working 1960).
struct BlockMean {
    /// Share of the error at the block's start in the block's mean.
    carried: f64,
    /// Variance of the rest of the mean.
    variance: f64,
    /// Covariance of that rest with the error at the block's end.
    with_end: f64,
}

impl BlockMean {
    /// `ratio` is block length over memory.
    fn of(ratio: f64) -> Self {
        let lost = -(-ratio).exp_m1();
        let carried = lost / ratio;
        // 2 (ratio - lost) / ratio^2 - carried^2, in series where it cancels.
        let variance = if ratio < 0.02 {
            ratio * (2.0 / 3.0 - 0.5 * ratio)
        } else {
            2.0 * (ratio - lost) / (ratio * ratio) - carried * carried
        };
        Self {
            carried,
            variance,
            with_end: lost * lost / ratio,
        }
    }
}

/// Variance of a block mean without any feedback: the steady state of `P = F P F' + Q`, by doubling.
fn open_covariance(
    f: &DMatrix<f64>,
    h: &DMatrix<f64>,
    q: &DMatrix<f64>,
    r: &DMatrix<f64>,
) -> DVector<f64> {
    let mut p = q.clone();
    let mut a = f.clone();
    for _ in 0..18 {
        let step = &a * &p * a.transpose();
        let settled = step.amax() < 1e-9 * p.amax();
        p += step;
        a = &a * &a;
        if settled {
            break;
        }
    }
    (h * p * h.transpose() + r).diagonal()
}
