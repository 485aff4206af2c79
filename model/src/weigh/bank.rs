//! The bank: whitened signatures of a source at any place, kept by their leading directions.
//!
//! By reciprocity the response of every gauge to a source at any place follows from the modes. A source is constant from
//! its onset, or grows evenly over some days and then stays. Whitened and seen over all lags, signatures of all places
//! and shapes have a small numerical rank; the bank keeps a basis and each candidate's coefficients. Lags are weighted so
//! that early ones, when signatures are small, count as much as late ones.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over lags, directions and sources counted here"
)]

use nalgebra::{DMatrix, DVector};

use crate::expect::drive::gain;
use crate::expect::whitener::Whitener;
use crate::reduce::Modal;

/// Days over which a source may grow; zero is at once.
pub(crate) const GROWTHS: [f64; 7] = [0.0, 2.0, 4.0, 8.0, 12.0, 20.0, 40.0];
/// Which of [`GROWTHS`] are weighed for detection.
pub(crate) const COARSE: [usize; 4] = [0, 2, 4, 6];
/// Share of a signature that the basis may miss.
const MISSED: f64 = 2e-3;
/// Most directions kept.
const LIMIT: usize = 56;
/// Every how many candidate places one is weighed for detection.
const THINNED: usize = 3;

/// What a candidate is.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Source {
    /// A candidate place, by order.
    Place(usize),
    /// A neighbour, by order.
    Neighbour(usize),
}

/// Signatures of gauges' and ground's causes, by lag since the onset.
#[derive(Debug, Clone)]
pub(crate) struct Bank {
    /// Number of gauges.
    gauges: usize,
    /// Directions (lags times gauges, by directions).
    directions: DMatrix<f64>,
    /// Steps, impulses and ramps of each gauge (lags times gauges, by three times gauges); a ramp grows one unit a day.
    own: DMatrix<f64>,
    /// Coefficients by growth (directions by sources).
    pub(crate) coefficients: Vec<DMatrix<f64>>,
    /// The same for every few places and all neighbours, for detection.
    pub(crate) thinned: Vec<DMatrix<f64>>,
    /// Which sources those are.
    pub(crate) chosen: Vec<usize>,
    /// Sources in the order of the coefficients' columns.
    pub(crate) sources: Vec<Source>,
    /// Lags held.
    pub(crate) horizon: usize,
}

/// Integral of the unit response of a mode whose source grows evenly over `growth` seconds.
pub(crate) fn shape(lambda: f64, t: f64, growth: f64) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    if growth <= 0.0 {
        return gain(lambda, t);
    }
    (ramp(lambda, t) - ramp(lambda, (t - growth).max(0.0))) / growth
}

/// `(t - gain(t)) / lambda`: response to a source growing by one a second.
fn ramp(lambda: f64, t: f64) -> f64 {
    let z = lambda * t;
    if z > 1e-4 {
        (t - gain(lambda, t)) / lambda
    } else {
        t * t * (0.5 - z / 6.0)
    }
}

/// Block mean of a shape, `lag` blocks after an onset at a block's start.
fn block_shape(lambda: f64, lag: usize, block: f64, growth: f64) -> f64 {
    [0.125, 0.375, 0.625, 0.875]
        .iter()
        .map(|part| shape(lambda, (lag as f64 + part) * block, growth))
        .sum::<f64>()
        / 4.0
}

impl Bank {
    /// Builds the bank over `horizon` lags for the first `places` places of the modal form and all neighbours.
    pub(crate) fn new(
        modal: &Modal,
        whitener: &Whitener,
        places: usize,
        block: f64,
        horizon: usize,
    ) -> Self {
        let gauges = modal.gauges.ncols();
        let modes = modal.lambda.len();
        let mut sources: Vec<Source> = (0..places).map(Source::Place).collect();
        sources.extend((0..modal.neighbours.ncols()).map(Source::Neighbour));
        if sources.is_empty() {
            return Self::of_gauges(whitener, gauges, block, horizon);
        }
        let mut ports = DMatrix::zeros(modes, sources.len());
        ports
            .columns_mut(0, places)
            .copy_from(&modal.places.columns(0, places));
        ports
            .columns_mut(places, modal.neighbours.ncols())
            .copy_from(&modal.neighbours);

        let seen = log_lags(horizon);
        let rows = seen.len() * gauges;
        let mut samples = DMatrix::zeros(rows, sources.len() * GROWTHS.len());
        for (index, growth) in GROWTHS.iter().enumerate() {
            let modal_samples =
                Self::modal_samples(modal, whitener, growth * 86_400.0, block, &seen);
            samples
                .columns_mut(index * sources.len(), sources.len())
                .gemm(1.0, &modal_samples, &ports, 0.0);
        }
        // Equal weight to every signature and to every lag.
        let norm: Vec<f64> = samples
            .column_iter()
            .map(|c| c.norm().max(f64::MIN_POSITIVE))
            .collect();
        let mut weighted = samples.clone();
        for (mut column, norm) in weighted.column_iter_mut().zip(&norm) {
            column /= *norm;
        }
        let mut weight = DVector::zeros(rows);
        for at in 0..seen.len() {
            let energy = weighted
                .rows(at * gauges, gauges)
                .norm()
                .max(f64::MIN_POSITIVE);
            weight.rows_mut(at * gauges, gauges).fill(1.0 / energy);
        }
        for mut column in weighted.column_iter_mut() {
            column.component_mul_assign(&weight);
            let norm = column.norm().max(f64::MIN_POSITIVE);
            column /= norm;
        }
        let eigen = (&weighted * weighted.transpose()).symmetric_eigen();
        let mut order: Vec<usize> = (0..rows).collect();
        order.sort_by(|&a, &b| eigen.eigenvalues[b].total_cmp(&eigen.eigenvalues[a]));
        let total = eigen.eigenvalues.sum();
        let mut left = total;
        let mut kept = Vec::new();
        for index in order {
            if left < MISSED * MISSED * total || kept.len() >= LIMIT {
                break;
            }
            left -= eigen.eigenvalues[index];
            kept.push(index);
        }
        let basis = eigen.eigenvectors.select_columns(kept.iter());
        // basis = weighted * mix, so directions are the same mix of true signatures.
        let mut mix = weighted.transpose() * &basis;
        for (column, &index) in kept.iter().enumerate() {
            mix.column_mut(column).unscale_mut(eigen.eigenvalues[index]);
        }
        let scales = DVector::from_iterator(
            weighted.ncols(),
            samples.column_iter().map(|c| {
                let lifted = c.component_mul(&weight).norm();
                1.0 / lifted.max(f64::MIN_POSITIVE)
            }),
        );
        let mut raw_mix = mix;
        for mut column in raw_mix.column_iter_mut() {
            column.component_mul_assign(&scales);
        }
        let lifted = DMatrix::from_fn(rows, samples.ncols(), |r, c| samples[(r, c)] * weight[r]);
        let all = basis.transpose() * lifted;
        let coefficients: Vec<DMatrix<f64>> = (0..GROWTHS.len())
            .map(|index| {
                all.columns(index * sources.len(), sources.len())
                    .into_owned()
            })
            .collect();
        let directions = Self::directions(modal, whitener, &ports, &raw_mix, block, horizon);
        let own = Self::own(whitener, gauges, block, horizon);
        let chosen: Vec<usize> = (0..sources.len())
            .filter(|&i| i % THINNED == 0 || matches!(sources.get(i), Some(Source::Neighbour(_))))
            .collect();
        let thinned = coefficients
            .iter()
            .map(|all| all.select_columns(chosen.iter()))
            .collect();
        Self {
            gauges,
            directions,
            own,
            thinned,
            chosen,
            coefficients,
            sources,
            horizon,
        }
    }

    /// The bank of a site where no source could be placed.
    fn of_gauges(whitener: &Whitener, gauges: usize, block: f64, horizon: usize) -> Self {
        Self {
            gauges,
            directions: DMatrix::zeros(horizon * gauges, 0),
            own: Self::own(whitener, gauges, block, horizon),
            coefficients: vec![DMatrix::zeros(0, 0); GROWTHS.len()],
            thinned: vec![DMatrix::zeros(0, 0); GROWTHS.len()],
            chosen: Vec::new(),
            sources: Vec::new(),
            horizon,
        }
    }

    /// Whitened signature of each mode, at some lags.
    fn modal_samples(
        modal: &Modal,
        whitener: &Whitener,
        growth: f64,
        block: f64,
        seen: &[usize],
    ) -> DMatrix<f64> {
        let (modes, gauges) = (modal.lambda.len(), modal.gauges.ncols());
        let mut state = DMatrix::zeros(whitener.states(), modes);
        let mut out = DMatrix::zeros(seen.len() * gauges, modes);
        let last = seen.last().copied().unwrap_or(0);
        let mut next = 0;
        let mut raw = modal.gauges.transpose();
        for lag in 0..=last {
            for mode in 0..modes {
                let factor = block_shape(modal.lambda[mode], lag, block, growth);
                let mut column = raw.column_mut(mode);
                column.copy_from(&modal.gauges.row(mode).transpose());
                column *= factor;
            }
            let white = whitener.step(&mut state, &raw);
            if seen.get(next) == Some(&lag) {
                out.rows_mut(next * gauges, gauges).copy_from(&white);
                next += 1;
            }
        }
        out
    }

    fn directions(
        modal: &Modal,
        whitener: &Whitener,
        ports: &DMatrix<f64>,
        mix: &DMatrix<f64>,
        block: f64,
        horizon: usize,
    ) -> DMatrix<f64> {
        let (modes, gauges, kept) = (modal.lambda.len(), modal.gauges.ncols(), mix.ncols());
        let sources = ports.ncols();
        let modal_mix: Vec<DMatrix<f64>> = (0..GROWTHS.len())
            .map(|index| ports * mix.rows(index * sources, sources))
            .collect();
        let mut state = DMatrix::zeros(whitener.states(), kept);
        let mut out = DMatrix::zeros(horizon * gauges, kept);
        for lag in 0..horizon {
            let mut source = DMatrix::zeros(modes, kept);
            for (growth, part) in GROWTHS.iter().zip(&modal_mix) {
                for mode in 0..modes {
                    let factor = block_shape(modal.lambda[mode], lag, block, growth * 86_400.0);
                    let mut row = source.row_mut(mode);
                    row += part.row(mode) * factor;
                }
            }
            let raw = modal.gauges.tr_mul(&source);
            out.rows_mut(lag * gauges, gauges)
                .copy_from(&whitener.step(&mut state, &raw));
        }
        out
    }

    fn own(whitener: &Whitener, gauges: usize, block: f64, horizon: usize) -> DMatrix<f64> {
        let mut state = DMatrix::zeros(whitener.states(), 3 * gauges);
        let mut out = DMatrix::zeros(horizon * gauges, 3 * gauges);
        for lag in 0..horizon {
            let mut raw = DMatrix::zeros(gauges, 3 * gauges);
            for gauge in 0..gauges {
                raw[(gauge, gauge)] = 1.0;
                raw[(gauge, gauges + gauge)] = if lag == 0 { 1.0 } else { 0.0 };
                raw[(gauge, 2 * gauges + gauge)] = (lag as f64 + 0.5) * block / 86_400.0;
            }
            out.rows_mut(lag * gauges, gauges)
                .copy_from(&whitener.step(&mut state, &raw));
        }
        out
    }

    /// Number of neighbours.
    pub(crate) fn neighbours(&self) -> usize {
        let all = self.sources.iter();
        all.filter(|s| matches!(s, Source::Neighbour(_))).count()
    }

    /// Number of directions.
    pub(crate) fn width(&self) -> usize {
        self.directions.ncols()
    }

    /// Whitened directions `lag` blocks after the onset.
    pub(crate) fn directions_at(&self, lag: usize) -> nalgebra::DMatrixView<'_, f64> {
        self.directions.rows(lag * self.gauges, self.gauges)
    }

    /// Whitened own signatures of the gauges `lag` blocks after the onset: steps from the block after the onset's,
    /// impulses in the onset's block, ramps from its start.
    pub(crate) fn own_at(&self, lag: usize) -> DMatrix<f64> {
        let mut rows = self.own.rows(lag * self.gauges, self.gauges).into_owned();
        if lag == 0 {
            rows.columns_mut(0, self.gauges).fill(0.0);
        } else {
            let before = self
                .own
                .view(((lag - 1) * self.gauges, 0), (self.gauges, self.gauges));
            rows.columns_mut(0, self.gauges).copy_from(&before);
        }
        rows
    }
}

/// Lags evenly spaced in their logarithm.
fn log_lags(horizon: usize) -> Vec<usize> {
    let mut lags = Vec::new();
    let mut at = 0_usize;
    while at < horizon {
        lags.push(at);
        at += 1 + at / 12;
    }
    lags
}
