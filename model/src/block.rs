//! A closed block: what the watch is given for one stretch of sample time.

use serde::{Deserialize, Serialize};

/// All readings of one block of one tier, reduced to what the watch needs.
///
/// Blocks are numbered from the epoch (1970-01-01T00:00:00Z): block `index` covers
/// `[index * length, (index + 1) * length)` seconds of sample time.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Block {
    /// Number of the block since the epoch.
    pub index: i64,
    /// Length \[s\].
    pub length: f64,
    /// Instants at which predictions are evaluated \[s from the block's start\], ascending, at least one.
    pub instants: Vec<f64>,
    /// One path per input, in the order of [`crate::ground::Ground::inputs`]: rates of wells \[m3/s\], then pressures of
    /// stages and of a driven edge \[Pa\]. Of an embankment one per drive, each in its own unit.
    pub rates: Vec<RatePath>,
    /// One entry per gauge, in the ground's order of gauges; `None` where nothing usable was read.
    pub gauges: Vec<Option<GaugeBlock>>,
}

impl Block {
    /// Start of the block \[s since the epoch\].
    #[must_use]
    pub fn start(&self) -> f64 {
        // Exact for |index| < 2^53.
        #[expect(
            clippy::cast_precision_loss,
            reason = "block numbers stay far below 2^53"
        )]
        let index = self.index as f64;
        index * self.length
    }
}

/// The rate of one well through one block: constant on pieces.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct RatePath {
    /// `(until, rate)`: the piece ends `until` seconds after the block's start, rate in m3/s, injection
    /// positive. Pieces are in order and the last one ends at the block's length.
    pub pieces: Vec<(f64, f64)>,
    /// How the rate is known.
    pub known: RateKnown,
}

/// How the rate of a well in a block is known.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum RateKnown {
    /// Read within the block, or holding from a reading younger than the hold time.
    Read,
    /// The last rate held beyond its age: gauges that feel this well are blind.
    Stale,
    /// The last value is too old to go by, but no gauge depends on it so much: it counts as its mean in history. Only of
    /// an embankment's drives.
    Lapsed,
}

/// What one gauge read in one block.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct GaugeBlock {
    /// Mean of the usable readings \[Pa\].
    pub mean: f64,
    /// How many readings that is.
    pub count: u32,
    /// Weight of each entry of [`Block::instants`] in the mean; same length, sums to one.
    pub weights: Vec<f64>,
    /// Whether any two successive raw values differed in this block (or from the block before).
    pub changed: bool,
}
