//! The watch over one tier: steps the model block by block, whitens departures, weighs causes.

use serde::{Deserialize, Serialize};

use crate::expect::columns::Memory;
use crate::expect::posterior::Posterior;
use crate::finding::{Cause, Expectation, Finding, Place, Size, Subject};
use crate::weigh::barrier::Barriers;
use crate::weigh::ladder::Ladder;

mod band;
mod step;
mod stuck;

pub use step::Watch;

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

/// A column that comes and goes.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub(crate) enum Live {
    /// A meter's gain in a rate epoch, by the epoch's id.
    Epoch(u32),
    /// A missing reading.
    Missing {
        /// Gauge, by order.
        gauge: usize,
        /// Block.
        block: i64,
    },
}

/// All that a watch remembers; with the same ground, settings and adoptions it goes on bit by bit as if never stopped.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct WatchState {
    /// Next block due; `None` before the first.
    next: Option<i64>,
    memory: Option<Memory>,
    /// Filter state of readings and columns.
    filter: nalgebra::DMatrix<f64>,
    /// Rows of the present batch: whitened readings, then columns.
    pending: nalgebra::DMatrix<f64>,
    live: Vec<Live>,
    posterior: Posterior,
    band: band::Band,
    stuck: stuck::Stuck,
    ladder: Ladder,
    barriers: Barriers,
    log_mixture: f64,
    finding: Option<Finding>,
}

impl WatchState {
    /// Number of the next block due; `None` before the first.
    #[must_use]
    pub fn next_block(&self) -> Option<i64> {
        self.next
    }
}
