//! Grounds held against each other on one history, by the evidence of each.
//!
//! Every ground is fitted whole, with its scales learned anew, and compared by marginal likelihood on the same readings.

use serde::{Deserialize, Serialize};

use super::{Account, Calibration, CommissionSettings, Places, commission};
use crate::ModelError;
use crate::block::Block;
use crate::expect::frame::factor;
use crate::ground::{EdgeKind, Ground};
use crate::reduce::{Factors, Reduced, ReducedBlock};
use crate::weak_form::Parameter;

/// A ground that was tried.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Tried {
    /// Which.
    pub kind: GroundKind,
    /// Log marginal likelihood of the history, the price of having searched paid.
    pub log_evidence: f64,
    /// Fitted factors on the described parameters.
    pub factors: Factors,
    /// Fitted leakance \[m/(Pa s)\], where it leaks.
    pub leakance: Option<f64>,
}

/// What is other about a ground that was tried.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum GroundKind {
    /// Nothing.
    AsDescribed,
    /// A straight barrier that nobody declared.
    Barrier,
    /// The lowest layer leaks, through its floor or its roof, to a bed that stays at rest (Hantush & Jacob 1955).
    Leaky,
    /// The edge behaves otherwise.
    Edge(EdgeKind),
}

/// Lengths `sqrt(T/L)` from which the fit of a leaking ground starts, in half-widths of the array.
const STARTS: [f64; 3] = [0.5, 2.0, 8.0];

impl Reduced {
    /// The same ground with an exchange of its lowest layer with a bed that stays at rest, `leakance` \[m/(Pa s)\].
    ///
    /// `int w L p` is the storage block times `L/S`, so nothing is projected anew; and the basis was made for
    /// `K + s M`, which a leak only moves to another `s`. The parameter is [`Parameter::Leakance`] of that layer.
    ///
    /// # Errors
    /// [`ModelError::Size`] where the reduced form has no storage block of that layer.
    pub fn leaking(&self, ground: &Ground, leakance: f64) -> Result<Self, ModelError> {
        let layer = ground.layers.len().saturating_sub(1);
        let storativity = |parameter: Parameter| match parameter {
            Parameter::Storativity(l) if l == layer => {
                ground.layers.get(l).map(|layer| layer.storativity)
            }
            Parameter::ZoneStorativity(z) => {
                let zone = ground.zones.get(z).filter(|zone| zone.layer == layer);
                zone.map(|zone| zone.storativity)
            }
            _ => None,
        };
        let parts = self
            .mass
            .iter()
            .filter_map(|b| Some(&b.matrix * (leakance / storativity(b.parameter)?)));
        let matrix = parts
            .reduce(|sum, part| sum + part)
            .ok_or(ModelError::Size {
                what: "storage blocks of the layer that leaks",
                found: 0,
                expected: 1,
            })?;
        let mut leaking = self.clone();
        leaking.stiffness.push(ReducedBlock {
            parameter: Parameter::Leakance(layer),
            matrix,
        });
        leaking.closed = 0;
        Ok(leaking)
    }
}

/// Calibrates the ground as if its lowest layer leaked to a bed at rest, from several starts; the best of them is told.
///
/// `aside` are the readings that the other grounds set aside. No undeclared barrier is looked for.
///
/// # Errors
/// As [`commission`].
pub fn commission_leaky(
    ground: &Ground,
    reduced: &Reduced,
    history: &[Block],
    settings: &CommissionSettings,
    progress: &mut dyn FnMut(f64),
) -> Result<(Tried, Calibration, Account), ModelError> {
    let half_width = Places::of(ground).half_width;
    let transmissivity = ground.layers.last().map_or(0.0, |l| l.transmissivity);
    let layer = ground.layers.len().saturating_sub(1);
    let settings = CommissionSettings {
        barrier: false,
        ..settings.clone()
    };
    let mut best: Option<(Tried, Calibration, Account)> = None;
    let mut failed = None;
    for (start, done) in STARTS.into_iter().zip(0_u32..) {
        let leakance = transmissivity / (start * half_width).powi(2);
        let leaking = reduced.leaking(ground, leakance)?;
        let share = f64::from(done) / STARTS.len() as f64;
        let fitted = commission(ground, &leaking, history, &settings, &mut |s| {
            progress(share + s / STARTS.len() as f64);
        });
        match fitted {
            Ok((calibration, account)) => {
                let log_evidence = account.log_evidence - (STARTS.len() as f64).ln();
                if best
                    .as_ref()
                    .is_none_or(|(known, _, _)| log_evidence > known.log_evidence)
                {
                    let fitted = factor(&calibration.factors, Parameter::Leakance(layer));
                    let tried = Tried {
                        kind: GroundKind::Leaky,
                        log_evidence,
                        factors: calibration.factors.clone(),
                        leakance: Some(leakance * fitted),
                    };
                    best = Some((tried, calibration, account));
                }
            }
            Err(why) => failed = Some(why),
        }
    }
    best.ok_or_else(|| failed.unwrap_or(ModelError::NotFinite("the evidence of a leaking ground")))
}
