//! The stochastic nuisances, and a small model of how they reach the gauges.
//!
//! Meters err with a short memory (first-order Markov, Gelb 1974) and afresh in every block; gauges wander and have
//! noise. A meter's error reaches every gauge through the ground and its own well's gauge through skin as well. That
//! path needs no more than a few dozen states: the modes are projected on a rational Krylov space of the wells' and
//! gauges' ports (the same Galerkin projection as everywhere) and made diagonal again.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over modes and ports of one modal form"
)]

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use crate::reduce::Modal;

/// Standard deviations and memories of the stochastic nuisances, as estimated.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Noise {
    /// Noise of a block mean of each gauge \[Pa\].
    pub gauge: Vec<f64>,
    /// Wander of each gauge \[Pa\], of memory [`Noise::wander_memory`].
    pub wander: Vec<f64>,
    /// Memory of the wander \[s\].
    pub wander_memory: f64,
    /// Short-memory error of each meter \[m3/s\].
    pub meter: Vec<f64>,
    /// Its memory \[s\].
    pub meter_memory: f64,
    /// Error of each meter that is new in every block \[m3/s\].
    pub meter_fresh: Vec<f64>,
}

/// Diagonal model of the path from meters to gauges.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Path {
    /// Decay rates \[1/s\].
    pub(crate) lambda: DVector<f64>,
    /// Ports of the wells (states by wells).
    pub(crate) wells: DMatrix<f64>,
    /// Functionals of the gauges (states by gauges).
    pub(crate) gauges: DMatrix<f64>,
}

/// Shifts of the Krylov space.
const SHIFTS: u32 = 10;
/// Longest time it is asked for \[s\].
const LONGEST: f64 = 90.0 * 86_400.0;
/// Directions below this share of the largest are dropped.
const KEPT: f64 = 1e-3;

impl Path {
    /// Projects the modes on what matters between a block and a season.
    pub(crate) fn of(modal: &Modal, block: f64) -> Self {
        let modes = modal.lambda.len();
        let ports = modal.wells.ncols() + modal.gauges.ncols();
        let mut space = DMatrix::zeros(modes, 0);
        for step in 0..SHIFTS {
            let share = f64::from(step) / f64::from(SHIFTS - 1);
            let shift = (1.0 / block) * (block / LONGEST).powf(share);
            let mut part = DMatrix::zeros(modes, ports);
            for mode in 0..modes {
                let weight = 1.0 / (modal.lambda[mode] + shift);
                for (port, value) in modal
                    .wells
                    .row(mode)
                    .iter()
                    .chain(modal.gauges.row(mode).iter())
                    .enumerate()
                {
                    part[(mode, port)] = weight * value;
                }
            }
            for mut column in part.column_iter_mut() {
                let norm = column.norm();
                if norm > 0.0 {
                    column /= norm;
                }
            }
            let at = space.ncols();
            space = space.resize_horizontally(at + ports, 0.0);
            space.columns_mut(at, ports).copy_from(&part);
        }
        let gram = &space * space.transpose();
        let eigen = gram.symmetric_eigen();
        let largest = eigen.eigenvalues.max();
        let kept: Vec<usize> = (0..modes)
            .filter(|&i| {
                eigen
                    .eigenvalues
                    .get(i)
                    .is_some_and(|v| *v > KEPT * KEPT * largest)
            })
            .collect();
        let basis = eigen.eigenvectors.select_columns(kept.iter());
        let mut weighted = basis.clone();
        for (mode, mut row) in weighted.row_iter_mut().enumerate() {
            row *= modal.lambda[mode];
        }
        let small = (basis.transpose() * weighted).symmetric_eigen();
        let turn = basis * small.eigenvectors;
        Self {
            lambda: small.eigenvalues.map(|v| v.max(0.0)),
            wells: turn.transpose() * &modal.wells,
            gauges: turn.transpose() * &modal.gauges,
        }
    }
}
