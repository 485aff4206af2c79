//! The expectation of an embankment's piezometers: their lagged response to pool, season, rain and ageing.
//!
//! An embankment is a vertical section with a free surface, not the areal problem of the ground, so nothing here knows a
//! place. What a piezometer shows is a sum of columns, as statistical models of dams have it: level of the pool and
//! its square, season and ageing (hydrostatic-season-time, Willm and Beaujoint 1967), each answer to the pool and to rain
//! delayed by the exponentials of a diffusing core (Bonelli and Royet 2001). Coefficients have a ridge prior whose scales
//! each gauge learns from its own history by marginal likelihood. The watch is that of the ground: the same filter, the
//! same running sums, the same evidence; only sources, meters and barriers are left out, because nothing could place them.

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use crate::ModelError;
use crate::commission::Places;
use crate::expect::Noise;
use crate::expect::columns::{Columns, Priors};
use crate::expect::drive::size;
use crate::expect::frame::Frame;
use crate::expect::noise::Path;
use crate::ground::Ground;
use crate::watch::{Basis, Foundation};

pub(crate) mod columns;
mod fit;
mod history;
pub(crate) mod input;

pub use fit::commission;
pub use input::Scaling;

use columns::Lagged;

/// Longest age of an onset that is still weighed \[s\]: what changes in an embankment may do so slowly.
const HORIZON: f64 = 400.0 * 86_400.0;

/// What an embankment answers to, as described.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Embankment {
    /// What acts on it, in the order of a block's paths; exactly one is the pool.
    pub drives: Vec<Driver>,
    /// Whether the year shows by itself, beside pool and rain.
    pub season: bool,
    /// Whether the embankment still changes with age.
    pub ageing: bool,
}

/// What acts on an embankment.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Driver {
    /// The pool behind it, as pressure \[Pa\].
    Pool,
    /// The water at its toe, as pressure \[Pa\].
    Tailwater,
    /// Rain \[m/s\].
    Rain,
    /// Temperature of the air or the water \[degC\].
    Temperature,
    /// Pressure of the air \[Pa\], felt by gauges that are neither vented nor corrected.
    Barometer,
}

impl Driver {
    /// The name used in the site file and in tables.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Pool => "pool",
            Self::Tailwater => "tailwater",
            Self::Rain => "rain",
            Self::Temperature => "temperature",
            Self::Barometer => "barometer",
        }
    }
}

/// An embankment as commissioned: all that the watch needs, as the ground file keeps it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Commissioned {
    /// Its gauges; layers, wells and the rest are empty.
    pub ground: Ground,
    /// What it answers to.
    pub embankment: Embankment,
    /// What history said.
    pub calibration: Calibration,
}

/// What history said of an embankment.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Calibration {
    /// How columns are scaled.
    pub scaling: Scaling,
    /// How each gauge answers.
    pub answers: Vec<Answer>,
    /// Standard deviation of a block mean at each gauge, estimated \[Pa\].
    pub noise: Vec<f64>,
    /// Standard deviation and lag-1 correlation of the whitened departures left at each gauge.
    pub left: Vec<(f64, f64)>,
    /// Block length \[s\].
    pub block: f64,
    /// First and last block used.
    pub blocks: (i64, i64),
    /// Middle reading of each gauge, about which its offset is learned \[Pa\].
    pub reference: Vec<f64>,
    /// The stochastic nuisances.
    pub stochastic: Noise,
    /// Factor on the innovations' scale of each gauge that history asks for.
    pub inflate: Vec<f64>,
    /// Longest run of blocks in which the raw value of each gauge never changed.
    pub longest_unchanged: Vec<u32>,
}

/// How one gauge answers, each figure with its standard deviation.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Answer {
    /// Share of a lasting change of the pool that arrives, pressure for pressure.
    pub response: (f64, f64),
    /// Mean delay of that answer \[s\].
    pub lag: (f64, f64),
    /// Amplitude of the yearly wave beside it \[Pa\]; zero where none is modelled.
    pub season: (f64, f64),
    /// Change with age over the last year of the history \[Pa\]; zero where none is modelled.
    pub ageing: (f64, f64),
    /// Share of the variance of the readings that all of this explains.
    pub explained: f64,
}

impl Calibration {
    /// The columns as this calibration scales them.
    fn columns(&self, ground: &Ground, embankment: &Embankment) -> Result<Columns, ModelError> {
        let lagged = Lagged::new(embankment, &self.scaling, ground.gauges.len(), self.block)?;
        Ok(laid_out(ground, lagged))
    }
}

/// The columns of gauges that answer to drives and to no well.
fn laid_out(ground: &Ground, lagged: Lagged) -> Columns {
    Columns::of_embankment(
        Frame::without_ground(ground.gauges.len()),
        Priors::of_gauges(&ground.gauges),
        lagged,
    )
}

/// A filter's path without a ground.
fn path(gauges: usize) -> Path {
    Path {
        lambda: DVector::zeros(0),
        wells: DMatrix::zeros(0, 0),
        gauges: DMatrix::zeros(0, gauges),
    }
}

impl Basis for Commissioned {
    fn foundation(&self) -> Result<Foundation, ModelError> {
        let calibration = &self.calibration;
        let gauges = self.ground.gauges.len();
        size(
            "gauges of the calibration",
            calibration.reference.len(),
            gauges,
        )?;
        Ok(Foundation {
            columns: calibration.columns(&self.ground, &self.embankment)?,
            ground: self.ground.clone(),
            path: path(gauges),
            places: Places::nowhere(),
            stochastic: calibration.stochastic.clone(),
            noise: calibration.noise.clone(),
            reference: calibration.reference.clone(),
            inflate: calibration.inflate.clone(),
            unsteady: Vec::new(),
            longest_unchanged: calibration.longest_unchanged.clone(),
            flow: 0.0,
            block: calibration.block,
            horizon: HORIZON,
        })
    }
}
