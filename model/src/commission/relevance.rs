//! How large the nuisances are, learned from history by marginal likelihood.
//!
//! Columns with a like origin share a scale. The scale that maximises the evidence is the fixed point of
//! `s^2 = (sum m_i^2 + w t^2) / (gamma + w)` with `gamma = sum 1 - C_ii / s^2` the number of coefficients the data
//! determine (MacKay 1992, Neural Computation 4), where a weak prior of weight w about t keeps a group nobody excited
//! from vanishing.

#![expect(
    clippy::indexing_slicing,
    reason = "groups name columns of the regression they were made for"
)]

use nalgebra::{DMatrix, DVector};

use super::history::{Regression, Solved};
use crate::ModelError;

/// A group of columns with one scale.
#[derive(Debug, Clone)]
pub(crate) struct Group {
    /// Columns by order.
    pub(crate) columns: Vec<usize>,
    /// Scale, relative to the columns as laid out.
    pub(crate) scale: f64,
    /// Where the prior of the scale is centred.
    pub(crate) typical: f64,
    /// Weight of that prior, in columns.
    pub(crate) weight: f64,
    /// No scale beyond this.
    pub(crate) most: f64,
}

/// Rounds of the fixed point.
const ROUNDS: usize = 12;

/// Learns the scales of the groups; the rest of the columns keep `spread`.
///
/// # Errors
/// As [`Regression::solve`].
pub(crate) fn learn(
    regression: &Regression,
    groups: &mut [Group],
    spread: &mut DVector<f64>,
    centre: &DVector<f64>,
) -> Result<Solved, ModelError> {
    let width = spread.len();
    for _ in 0..ROUNDS {
        let solved = regression.solve(spread, centre)?;
        let mut lower = DMatrix::identity(width, width);
        solved
            .factor
            .l_dirty()
            .solve_lower_triangular_mut(&mut lower);
        let mut moved = 0.0_f64;
        for group in &mut *groups {
            let mut sum = group.weight * group.typical * group.typical;
            let mut determined = group.weight;
            for &column in &group.columns {
                // The diagonal of the inverse is the squared length of a column of L^-1.
                let variance = lower.column(column).norm_squared();
                sum += (solved.mean[column] - centre[column]).powi(2);
                determined += (1.0 - variance / group.scale.powi(2)).max(0.0);
            }
            let next = (sum / determined).sqrt().min(group.most);
            moved = moved.max((next / group.scale).ln().abs());
            group.scale = next;
            for &column in &group.columns {
                spread[column] = next;
            }
        }
        if moved < 0.02 {
            break;
        }
    }
    regression.solve(spread, centre)
}
