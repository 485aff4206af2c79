//! The watch over one tier: steps the model block by block, whitens departures, weighs causes.

use serde::{Deserialize, Serialize};

use crate::finding::{Cause, Expectation, Finding, Place, Size, Subject};

/// What the site asks of the watch.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct WatchSettings {
    /// Mean time between false alarms asked for \[s\].
    pub false_alarm_interval: f64,
    /// First block that may hold an onset: the first after commissioning.
    pub first_onset: i64,
}

/// An accepted finding: from `block` on it is a nuisance and no news.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Adoption {
    /// The first block judged with the finding in the model.
    pub block: i64,
    /// Accepted cause.
    pub cause: Cause,
    /// What it is about.
    pub subject: Option<Subject>,
    /// Onset \[s since the epoch\].
    pub onset: f64,
    /// Size with its spread.
    pub size: Option<Size>,
    /// Place with its spread.
    pub place: Option<Place>,
}

/// What one block gave.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Step {
    /// Number of the block.
    pub block: i64,
    /// Expectation of each gauge; `None` where there is none.
    pub expectations: Vec<Option<Expectation>>,
    /// Reading minus expectation of each gauge \[Pa\].
    pub departures: Vec<Option<f64>>,
    /// Why a gauge cannot be judged now; `None` where it can.
    pub blind: Vec<Option<Blind>>,
    /// Log of the mixture of all causes, held against [`Step::log_threshold`].
    pub log_mixture: f64,
    /// Log of the threshold.
    pub log_threshold: f64,
    /// What was found, while the mixture stands above the threshold.
    pub finding: Option<Finding>,
}

/// Why a gauge cannot be judged.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Blind {
    /// Nothing usable was read.
    NoData,
    /// The rate of a well it feels is too old.
    StaleRate,
    /// No usable ground file.
    NoGround,
    /// The model does not describe this gauge.
    Model,
}
