//! What a settled fit can tell people beside the calibration: what could be told from what, and what is left of readings.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over columns and rows laid out by the same code"
)]

use nalgebra::{Cholesky, DMatrix, DVector};
use serde::{Deserialize, Serialize};

use super::history::History;
use super::{GroundKind, Tried};
use crate::block::Block;
use crate::expect::columns::{Columns, Kind};
use crate::weak_form::Parameter;

/// What a fit tells; nothing of it enters the watch.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Account {
    /// The figures asked for, layers' and zones' first, then skins of wells with a gauge.
    pub known: Vec<Known>,
    /// How transmissivity varies from patch to patch, then storativity.
    pub patches: [Patchwork; 2],
    /// One a gauge, in the ground's order.
    pub gauges: Vec<GaugeFit>,
    /// Log marginal likelihood of the history, for comparing one ground with another on the same history.
    pub log_evidence: f64,
    /// Grounds that were tried, the one described first.
    pub tried: Vec<Tried>,
    /// Grounds that could not be tried, and why.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub untried: Vec<(GroundKind, String)>,
}

/// What a figure is about.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Figure {
    /// A parameter; its logarithm has the standard deviation told.
    Parameter(Parameter),
    /// The skin of a well, by order.
    Skin(usize),
}

/// A fitted figure: how well it is known, and what it cannot be told from.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Known {
    /// Which.
    pub figure: Figure,
    /// Standard deviation after history.
    pub sd: f64,
    /// Before it.
    pub prior_sd: f64,
    /// What else would have to be known, and the share of this figure's variance that would go; largest first.
    pub mixed: Vec<(Rival, f64)>,
}

/// What a figure can be mixed up with.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Rival {
    /// Another figure.
    Figure(Figure),
    /// Transmissivity that differs from patch to patch.
    PatchTransmissivity,
    /// Storativity that does.
    PatchStorativity,
    /// The meters' biases and gains.
    Meters,
    /// Offsets, drift and settling of the gauges.
    Gauges,
    /// What flowed before the record.
    Past,
    /// Responses unlike any ground of the kind described.
    Unlike,
}

/// What history says of how one property varies from patch to patch.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Patchwork {
    /// Spread of its logarithm.
    pub spread: f64,
    /// Number of patches.
    pub count: usize,
    /// How many of their differences history determines (MacKay 1992): zero where it says nothing of them.
    pub determined: f64,
}

/// A gauge through the history.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct GaugeFit {
    /// Number of each block with a reading, mean of the readings and the fitted model, nuisances included \[Pa\].
    pub series: Vec<(i64, f64, f64)>,
    /// Blocks without a reading.
    pub missing: usize,
    /// Blocks whose mean stood out and was set aside, with how far it lies from the model \[Pa\].
    pub outliers: Vec<(i64, f64)>,
}

/// Least share of a figure's variance that makes something its rival.
const MIXED: f64 = 0.5;

impl Account {
    /// Readings that were set aside, as [`super::CommissionSettings::aside`] takes them.
    #[must_use]
    pub fn aside(&self) -> Vec<(i64, usize)> {
        let gauges = self.gauges.iter().enumerate();
        gauges
            .flat_map(|(gauge, fit)| fit.outliers.iter().map(move |&(block, _)| (block, gauge)))
            .collect()
    }

    /// Draws up the account from the covariance of the standardised coefficients.
    pub(super) fn of(
        columns: &Columns,
        figures: &[(Figure, usize, f64)],
        inverse: &DMatrix<f64>,
        spread: &DVector<f64>,
    ) -> (Vec<Known>, [Patchwork; 2]) {
        let rivals = rivals(columns, figures, inverse.nrows());
        let known = figures
            .iter()
            .map(|&(figure, column, unit)| {
                let variance = inverse[(column, column)].max(0.0);
                let mut mixed: Vec<(Rival, f64)> = rivals
                    .iter()
                    .filter(|(rival, _)| *rival != Rival::Figure(figure))
                    .map(|(rival, members)| (*rival, explained(inverse, column, members)))
                    .filter(|(_, share)| *share >= MIXED)
                    .collect();
                mixed.sort_by(|a, b| b.1.total_cmp(&a.1));
                Known {
                    figure,
                    sd: unit * variance.sqrt(),
                    prior_sd: unit,
                    mixed,
                }
            })
            .collect();
        let patches = [Rival::PatchTransmissivity, Rival::PatchStorativity].map(|side| {
            let members = rivals.iter().find(|(rival, _)| *rival == side);
            let members = members.map_or(&[][..], |(_, m)| m.as_slice());
            Patchwork {
                spread: members.first().map_or(0.0, |&c| spread[c]),
                count: members.len(),
                determined: members
                    .iter()
                    .map(|&c| (1.0 - inverse[(c, c)] / spread[c].powi(2)).max(0.0))
                    .sum(),
            }
        });
        (known, patches)
    }
}

/// Columns of all that can be mixed up.
fn rivals(
    columns: &Columns,
    figures: &[(Figure, usize, f64)],
    width: usize,
) -> Vec<(Rival, Vec<usize>)> {
    let mut rivals: Vec<(Rival, Vec<usize>)> = figures
        .iter()
        .map(|&(figure, column, _)| (Rival::Figure(figure), vec![column]))
        .collect();
    let groups = [
        Rival::PatchTransmissivity,
        Rival::PatchStorativity,
        Rival::Meters,
        Rival::Gauges,
        Rival::Past,
        Rival::Unlike,
    ];
    for group in groups {
        let members = (0..width).filter(|&index| match columns.kinds.get(index) {
            // Beyond the fixed columns stand the gains of rate epochs and the jumps of meters.
            None => group == Rival::Meters,
            Some(kind) => of_kind(columns, *kind) == Some(group),
        });
        let members: Vec<usize> = members.collect();
        if !members.is_empty() {
            rivals.push((group, members));
        }
    }
    rivals
}

fn of_kind(columns: &Columns, kind: Kind) -> Option<Rival> {
    match kind {
        Kind::Offset(_) | Kind::Drift(_) | Kind::Settling(_) => Some(Rival::Gauges),
        Kind::Bias(_) => Some(Rival::Meters),
        Kind::Past { .. } => Some(Rival::Past),
        Kind::Discrepancy { .. } | Kind::Far { .. } => Some(Rival::Unlike),
        Kind::Patch(index) => match columns.patch(index)? {
            Parameter::PatchStorativity(..) => Some(Rival::PatchStorativity),
            _ => Some(Rival::PatchTransmissivity),
        },
        Kind::Skin(_) | Kind::Parameter(_) | Kind::Lagged(_) => None,
    }
}

/// Share of a coefficient's variance that would go if others were known: the square of its multiple correlation with them.
fn explained(covariance: &DMatrix<f64>, column: usize, others: &[usize]) -> f64 {
    let variance = covariance[(column, column)];
    let among = covariance.select_rows(others).select_columns(others);
    let with = DVector::from_iterator(
        others.len(),
        others.iter().map(|&o| covariance[(o, column)]),
    );
    match Cholesky::new(among) {
        Some(factor) if variance > 0.0 => {
            (with.dot(&factor.solve(&with)) / variance).clamp(0.0, 1.0)
        }
        _ => 0.0,
    }
}

impl GaugeFit {
    /// Every gauge through the history, under fitted coefficients.
    pub(super) fn all(blocks: &[Block], history: &History, mean: &DVector<f64>) -> Vec<Self> {
        let mut left = history.raw.column(0) - history.raw.columns(1, mean.len()) * mean;
        for &(row, was) in &history.aside {
            left[row] += was - history.raw[(row, 0)];
        }
        (0..history.gauges)
            .map(|gauge| {
                let mut fit = Self {
                    series: Vec::new(),
                    missing: 0,
                    outliers: Vec::new(),
                };
                for (index, block) in blocks.iter().enumerate() {
                    let row = index * history.gauges + gauge;
                    match block.gauges.get(gauge).and_then(Option::as_ref) {
                        Some(_) if !history.was_read(row) => {
                            fit.outliers.push((block.index, left[row]));
                        }
                        Some(read) => {
                            fit.series
                                .push((block.index, read.mean, read.mean - left[row]));
                        }
                        None => fit.missing += 1,
                    }
                }
                fit
            })
            .collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_would_make_a_figure_known_is_its_multiple_correlation() {
        // Correlation 0.8 with one, none with the other: 0.64 of the variance would go.
        let covariance =
            DMatrix::from_row_slice(3, 3, &[4.0, 1.6, 0.0, 1.6, 1.0, 0.0, 0.0, 0.0, 9.0]);
        assert!((explained(&covariance, 0, &[1]) - 0.64).abs() < 1e-12);
        assert!((explained(&covariance, 0, &[1, 2]) - 0.64).abs() < 1e-12);
        assert_eq!(explained(&covariance, 2, &[0, 1]), 0.0);
    }
}
