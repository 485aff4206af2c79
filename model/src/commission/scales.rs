//! Scales of the nuisances that history is asked for: priors of the coefficients, and the groups that share a scale.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over columns, gauges and wells laid out by the same code"
)]

use nalgebra::DVector;

use super::fit::{Fit, TYPICAL_GAIN};
use super::history::{Regression, Solved};
use super::relevance::{Group, learn};
use super::suspect::STRENGTH_SD;
use crate::ModelError;
use crate::expect::columns::{Columns, Kind, LONG_LAGS};
use crate::expect::frame::factor;
use crate::weak_form::Parameter;
use crate::weigh::barrier::SEALING;

/// Share of a pair's response that its discrepancy is thought to be before history is asked.
const TYPICAL_DISCREPANCY: f64 = 0.001;
/// Spread between patches of a ground that history shows to be even.
const EVENLY: f64 = 0.02;
/// A nuisance is not larger than what it is a nuisance to.
const WHOLE: f64 = 1.0;
/// Discrepancy at lags of weeks, and of the ground beyond the array, as multiples of the share of a pair as a rule.
pub(super) const LONG: f64 = 1.0;
pub(super) const FAR: f64 = 1.0;

/// 1 for storage, 0 for conduction.
fn storage(parameter: Parameter) -> usize {
    usize::from(matches!(parameter, Parameter::PatchStorativity(..)))
}

impl Fit<'_> {
    /// Prior standard deviation and mean of every coefficient.
    pub(super) fn spread(
        &self,
        columns: &Columns,
        width: usize,
        tail: usize,
    ) -> (DVector<f64>, DVector<f64>) {
        let mut spread = DVector::from_element(width, 1.0);
        let mut centre = DVector::zeros(width);
        for (index, kind) in columns.kinds.iter().enumerate() {
            match *kind {
                Kind::Discrepancy { gauge, well, lag } => {
                    spread[index] = if lag < LONG_LAGS {
                        self.state.scales.share[gauge * columns.frame.wells + well]
                    } else {
                        LONG * self.usual_share()
                    };
                }
                Kind::Past { .. } => spread[index] = self.state.scales.past,
                Kind::Far { .. } => spread[index] = FAR * self.usual_share(),
                // The prior is about the described value, wherever the fit now stands.
                Kind::Parameter(i) => {
                    if let Some(tilted) = columns.frame.tilted.get(i) {
                        centre[index] = -factor(&self.state.factors, tilted.parameter).ln()
                            / self.priors.parameter;
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i)
                        && let (Some(skin), Some(described)) =
                            (self.state.skins.get(well), self.ground.wells.get(well))
                    {
                        centre[index] = (described.skin.max(0.0) - skin) / self.priors.skin;
                    }
                }
                Kind::Patch(i) => {
                    if let Some(parameter) = columns.patch(i) {
                        spread[index] = self.state.scales.patch[storage(parameter)];
                        centre[index] = -factor(&self.state.factors, parameter).ln();
                    }
                }
                _ => {}
            }
        }
        for index in columns.len()..width - tail {
            spread[index] = self.state.scales.gain;
        }
        if self.state.suspect.is_some() {
            centre[width - 1] = SEALING / STRENGTH_SD;
        }
        (spread, centre)
    }

    /// Discrepancy of a pair as a rule, as a share of its response.
    pub(super) fn usual_share(&self) -> f64 {
        let count = self.state.scales.share.len().max(1) as f64;
        (self.state.scales.share.iter().map(|s| s * s).sum::<f64>() / count).sqrt()
    }

    /// Groups of columns whose scale is learned.
    pub(super) fn groups(&self, columns: &Columns, width: usize, tail: usize) -> Vec<Group> {
        let (gauges, wells) = (columns.frame.gauges, columns.frame.wells);
        let mut groups: Vec<Group> = (0..gauges * wells)
            .map(|pair| Group {
                columns: Vec::new(),
                scale: self.state.scales.share[pair],
                typical: TYPICAL_DISCREPANCY,
                weight: 1.0,
                most: WHOLE,
            })
            .collect();
        let mut past = Group {
            columns: Vec::new(),
            scale: self.state.scales.past,
            typical: 0.003,
            weight: 1.0,
            most: WHOLE,
        };
        for (index, kind) in columns.kinds.iter().enumerate() {
            match *kind {
                // What history is too short to show is tied to the shares learned at shorter lags.
                Kind::Discrepancy { lag, .. } if lag >= LONG_LAGS => {}
                Kind::Discrepancy { gauge, well, .. } => {
                    if let Some(group) = groups.get_mut(gauge * wells + well) {
                        group.columns.push(index);
                    }
                }
                Kind::Past { .. } => past.columns.push(index),
                _ => {}
            }
        }
        groups.push(past);
        for side in [0, 1] {
            let members = columns
                .kinds
                .iter()
                .enumerate()
                .filter(|(_, kind)| match **kind {
                    Kind::Patch(i) => columns.patch(i).is_some_and(|p| storage(p) == side),
                    _ => false,
                });
            groups.push(Group {
                columns: members.map(|(index, _)| index).collect(),
                scale: self.state.scales.patch[side],
                typical: EVENLY,
                weight: 1.0,
                most: WHOLE,
            });
        }
        groups.push(Group {
            columns: (columns.len()..width - tail).collect(),
            scale: self.state.scales.gain,
            typical: TYPICAL_GAIN,
            weight: 4.0,
            // Without a bound a ground that is badly described would be explained by its meters.
            most: self.settings.meter_bias,
        });
        groups
    }

    pub(super) fn learn_scales(
        &mut self,
        columns: &Columns,
        regression: &Regression,
        tail: usize,
        round: usize,
    ) -> Result<Solved, ModelError> {
        let width = regression.z.len();
        let (mut spread, centre) = self.spread(columns, width, tail);
        if round < self.let_in() {
            return regression.solve(&spread, &centre);
        }
        let mut groups = self.groups(columns, width, tail);
        let solved = learn(regression, &mut groups, &mut spread, &centre)?;
        let pairs = self.state.scales.share.len();
        for (share, group) in self.state.scales.share.iter_mut().zip(&groups) {
            *share = group.scale;
        }
        if let Some([past, conduction, storage, gain]) = groups.get(pairs..) {
            self.state.scales.past = past.scale.min(1.0);
            self.state.scales.patch = [conduction.scale, storage.scale];
            self.state.scales.gain = gain.scale;
        }
        Ok(solved)
    }
}
