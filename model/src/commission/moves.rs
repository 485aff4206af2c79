//! One step of the fit: what Gauss-Newton would move, and how much of it is taken.
//!
//! Far from the best the linear answer overshoots, so a step is cut, as a whole so that it keeps its direction, to a radius that
//! shrinks where a step has made the evidence worse and grows where it has made it better (a trust region: Levenberg 1944,
//! Marquardt 1963, from memory).

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over the columns that the step was made from"
)]

use nalgebra::DVector;

use super::fit::State;
use crate::expect::columns::{Columns, Kind, Priors};
use crate::expect::frame::{factor, with_factor};
use crate::weak_form::Parameter;

/// Share of a patch's move that counts when the fit is asked whether it still moves: one patch alone changes little.
const PATCH_COUNTS: f64 = 0.1;

/// What a solved regression would move.
#[derive(Debug, Clone)]
pub(super) struct Move {
    /// Column, parameter, change of its logarithm, and change of its column's coefficient.
    parameters: Vec<(usize, Parameter, f64, f64)>,
    /// Column, well, change of its skin.
    skins: Vec<(usize, usize, f64)>,
    /// The coefficients of all columns.
    mean: DVector<f64>,
}

impl Move {
    /// The full step that the coefficients `mean` ask for.
    pub(super) fn of(columns: &Columns, priors: &Priors, mean: DVector<f64>) -> Self {
        let mut parameters = Vec::new();
        let mut skins = Vec::new();
        for (index, kind) in columns.kinds.iter().enumerate() {
            let coefficient = mean[index];
            match *kind {
                Kind::Parameter(i) => {
                    if let Some(tilted) = columns.frame.tilted.get(i) {
                        let step = coefficient * priors.parameter;
                        parameters.push((index, tilted.parameter, step, coefficient));
                    }
                }
                Kind::Patch(i) => {
                    if let Some(parameter) = columns.patch(i) {
                        parameters.push((index, parameter, coefficient, coefficient));
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i) {
                        skins.push((index, well, coefficient * priors.skin));
                    }
                }
                _ => {}
            }
        }
        Self {
            parameters,
            skins,
            mean,
        }
    }

    /// Share of the step that stays within `radius`, the longest change of a logarithm.
    pub(super) fn share_within(&self, radius: f64) -> f64 {
        let longest = self
            .parameters
            .iter()
            .map(|(_, _, step, _)| step.abs())
            .fold(0.0, f64::max);
        if longest > radius {
            radius / longest
        } else {
            1.0
        }
    }

    /// How far the whole step would move the ground.
    pub(super) fn length(&self) -> f64 {
        let each = self
            .parameters
            .iter()
            .map(|(_, parameter, step, _)| match parameter {
                Parameter::PatchTransmissivity(..) | Parameter::PatchStorativity(..) => {
                    PATCH_COUNTS * step.abs()
                }
                _ => step.abs(),
            });
        each.fold(0.0, f64::max)
    }

    /// Takes a share of the step. Skins are linear, so they are taken whole.
    pub(super) fn take(&self, state: &mut State, share: f64) {
        let mut rest = self.mean.clone();
        for &(index, parameter, step, coefficient) in &self.parameters {
            let value = factor(&state.factors, parameter) * (share * step).exp();
            state.factors = with_factor(&state.factors, parameter, value);
            rest[index] -= share * coefficient;
        }
        for &(index, well, step) in &self.skins {
            if let Some(skin) = state.skins.get_mut(well) {
                *skin += step;
                rest[index] = 0.0;
            }
        }
        state.factors.sort_by_key(|(p, _)| *p);
        state.rest = Some(rest);
    }
}
