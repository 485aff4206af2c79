//! Calibration on quiet history: parameters, their spread, noise and model discrepancy.

use serde::{Deserialize, Serialize};

use crate::ground::Ground;
use crate::reduce::{Factors, Reduced};

/// A ground as commissioned: all that the watch needs, as the ground file keeps it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Commissioned {
    /// The ground as described.
    pub ground: Ground,
    /// Its reduced form.
    pub reduced: Reduced,
    /// What history said.
    pub calibration: Calibration,
}

/// What history said about the parameters. Standard deviations are of the natural logarithm where a parameter is positive.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Calibration {
    /// Fitted factors on the described parameters.
    pub factors: Factors,
    /// Standard deviation of the log of each factor, in the same order.
    pub factor_sd: Vec<f64>,
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
}
