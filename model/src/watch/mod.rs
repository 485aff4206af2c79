//! The watch over one tier: steps the model block by block, whitens departures, weighs causes.

use serde::{Deserialize, Serialize};

use crate::expect::columns::Memory;
use crate::expect::posterior::Posterior;
use crate::finding::{Cause, Expectation, Finding, Place, Size, Subject};
use crate::weigh::barrier::Barriers;
use crate::weigh::ladder::Ladder;

mod ahead;
mod band;
mod basis;
mod come_and_go;
mod conclude;
mod expected;
mod prepare;
mod reaching;
mod step;
mod stuck;

pub(crate) use ahead::Coasting;
pub use basis::{Basis, Foundation};
pub use reaching::{AddedGauge, PlaceReach, Reach, ReachDelay, WithGauge};
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
    /// Standard deviation of the onset \[s\].
    pub onset_sd: f64,
    /// Size with its spread.
    pub size: Option<Size>,
    /// Place with its spread.
    pub place: Option<Place>,
}

impl Adoption {
    /// How far before the stated onset the finding may have begun \[s\].
    pub(crate) fn doubt(&self) -> f64 {
        1.5 * self.spread()
    }

    /// Spread of the onset, never less than an hour \[s\].
    pub(crate) fn spread(&self) -> f64 {
        self.onset_sd.max(3_600.0)
    }

    /// First block that must be stepped with this adoption: a checkpoint due at it or before it serves.
    #[must_use]
    pub fn first_block(&self, block_length: f64) -> i64 {
        let early = self.onset - self.doubt().max(5.0 * block_length);
        #[expect(
            clippy::cast_possible_truncation,
            reason = "a block number far below 2^53"
        )]
        let first = (early / block_length).floor() as i64;
        first.min(self.block)
    }
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
    /// A column of an adopted finding.
    Adopted {
        /// Adoption, by order.
        adoption: usize,
        /// Column of it.
        column: usize,
    },
    /// A jump of a meter's error where its rate changed.
    Renewal {
        /// Well, by order.
        well: usize,
        /// Block of the change.
        block: i64,
        /// Size in the error's standard deviations.
        size: f64,
        /// Within that block only, or from the next on.
        within: bool,
    },
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
    /// Unit-port states of each adoption.
    adopted: Vec<nalgebra::DMatrix<f64>>,
    /// Filter state of readings and columns.
    filter: nalgebra::DMatrix<f64>,
    /// Rows of the present batch: whitened readings, then columns.
    pending: nalgebra::DMatrix<f64>,
    /// Factor on each row of the batch.
    calm: Vec<f64>,
    live: Vec<Live>,
    posterior: Posterior,
    band: band::Band,
    stuck: stuck::Stuck,
    ladder: Ladder,
    barriers: Barriers,
    log_mixture: f64,
    finding: Option<Finding>,
    /// First block that may hold an onset.
    first_onset: i64,
}

impl WatchState {
    /// Number of the next block due; `None` before the first.
    #[must_use]
    pub fn next_block(&self) -> Option<i64> {
        self.next
    }
}
