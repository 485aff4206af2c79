//! Calibration on quiet history: parameters, their spread, noise and model discrepancy.

use serde::{Deserialize, Serialize};

use crate::ModelError;
use crate::expect::{Noise, Patched, Priors};
use crate::ground::Ground;
use crate::reduce::{Factors, Reduced};

mod account;
mod aside;
mod choose;
mod finish;
mod fit;
pub(crate) mod history;
mod moves;
mod numerics;
pub(crate) mod places;
pub(crate) mod rates;
mod refuse;
pub(crate) mod relevance;
mod scales;
mod stochastic;
mod suspect;
mod trace;
mod tried;
mod unsteady;

pub use account::{Account, Figure, GaugeFit, Known, Patchwork, Rival};
pub use choose::commission;
pub(crate) use finish::longest_unchanged;
pub use numerics::Numerics;
pub use places::{Line, Places, places};
pub use refuse::check_history;
pub use suspect::Suspect;
pub use tried::{GroundKind, Tried, commission_leaky};
pub use unsteady::Unsteady;
pub(crate) use unsteady::calm;

/// A ground as commissioned: all that the watch needs, as the ground file keeps it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Commissioned {
    /// The ground as described.
    pub ground: Ground,
    /// Its reduced form.
    pub reduced: Reduced,
    /// What history said.
    pub calibration: Calibration,
    /// What the numbers behind it may be off, where that was found; the calibration makes room for it.
    pub numerics: Option<Numerics>,
}

impl Commissioned {
    /// A calibrated ground. What was learned of its patches becomes part of its reduced form.
    ///
    /// # Errors
    /// As [`Reduced::modal`].
    pub fn new(
        ground: Ground,
        reduced: &Reduced,
        calibration: Calibration,
    ) -> Result<Self, ModelError> {
        Ok(Self {
            ground,
            reduced: reduced.settled(&calibration.patches)?,
            calibration,
            numerics: None,
        })
    }

    /// The same with room for the error of the numbers, which it keeps.
    #[must_use]
    pub fn allowing_for(mut self, numerics: Numerics) -> Self {
        self.calibration.allow_for(&numerics);
        self.numerics = Some(numerics);
        self
    }
}

/// What commissioning may assume and how far it goes.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct CommissionSettings {
    /// Standard deviation of the logarithm of a described parameter about the truth.
    pub parameter_sd: f64,
    /// Standard deviation of a well's skin about the described one.
    pub skin_sd: f64,
    /// Bias a meter may have, as a share (common practice for flow meters in the field, no source).
    pub meter_bias: f64,
    /// Rounds of Gauss-Newton at most.
    pub rounds: usize,
    /// Declared rates before the record, one list a well: when each began \[s since the epoch\] and its rate \[m3/s\]; it
    /// holds until the next one or the record. Empty where nothing is declared.
    pub past: Vec<Vec<(f64, f64)>>,
    /// Readings to set aside, as block and gauge by order; `None` where those that stand out are to be found. Grounds are
    /// compared by evidence on the same readings only.
    pub aside: Option<Vec<(i64, usize)>>,
    /// Whether a ground that looks uneven is held against an even one with a barrier nobody declared.
    pub barrier: bool,
}

impl Default for CommissionSettings {
    fn default() -> Self {
        Self {
            parameter_sd: 0.5,
            skin_sd: 5.0,
            meter_bias: 0.01,
            rounds: 16,
            past: Vec::new(),
            aside: None,
            barrier: true,
        }
    }
}

/// What history said about the parameters. Standard deviations are of the natural logarithm where a parameter is positive.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Calibration {
    /// Fitted factors on the described parameters.
    pub factors: Factors,
    /// Standard deviation of the log of each factor, in the same order.
    pub factor_sd: Vec<f64>,
    /// Fitted factors of the patches, on top of their layers'.
    pub patches: Factors,
    /// What a further change of each patch does to every pair.
    pub patched: Patched,
    /// A barrier that history already asks for; the watch has it to report.
    pub suspect: Option<Suspect>,
    /// Fitted skin of each well (`NaN`-free; the described skin where no gauge sees it).
    pub skins: Vec<f64>,
    /// Standard deviation of each skin.
    pub skin_sd: Vec<f64>,
    /// Standard deviation of a block mean at each gauge, estimated \[Pa\].
    pub noise: Vec<f64>,
    /// Share of each pair's response (gauge by well, row-major by gauge) that is model discrepancy.
    pub discrepancy: Vec<f64>,
    /// Block length \[s\].
    pub block: f64,
    /// First and last block used.
    pub blocks: (i64, i64),
    /// Standard deviation and lag-1 correlation of the whitened departures left at each gauge.
    pub left: Vec<(f64, f64)>,
    /// Pressure of each gauge at rest, about which its offset is learned \[Pa\].
    pub reference: Vec<f64>,
    /// The stochastic nuisances.
    pub stochastic: Noise,
    /// Priors of the nuisances' coefficients.
    pub priors: Priors,
    /// Factor on the innovations' scale of each gauge that history asks for.
    pub inflate: Vec<f64>,
    /// How innovations of gauges in wells grow with the rate.
    pub unsteady: Vec<Unsteady>,
    /// Longest run of blocks in which the raw value of each gauge never changed.
    pub longest_unchanged: Vec<u32>,
    /// Mean total injection \[m3/s\].
    pub flow: f64,
}
