//! What the watch says: causes weighed, and the expectation of each gauge.

use serde::{Deserialize, Serialize};

/// The closed list of causes.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Cause {
    /// Fluid leaves the ground at a place near the site.
    Leak,
    /// Fluid passes from one layer to another.
    CrossLayer,
    /// A neighbour, or a source outside the site, changed its regime.
    Interference,
    /// The ground ends or resists flow somewhere the site file does not say.
    Barrier,
    /// The ground is held up by a constant pressure the site file does not tell of.
    Support,
    /// A gauge's zero jumped.
    GaugeStep,
    /// A gauge drifts beyond its specification.
    GaugeDrift,
    /// A gauge repeats one raw value.
    GaugeStuck,
    /// A gauge's sensitivity changed.
    GaugeScale,
    /// A gauge's clock is off.
    GaugeClock,
    /// A meter's factor changed.
    MeterScale,
    /// A well's skin changed.
    WellSkin,
    /// None of the others explains what was seen.
    Unexplained,
}

impl Cause {
    /// The name used in events, commands and pages.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Leak => "leak",
            Self::CrossLayer => "cross-layer",
            Self::Interference => "interference",
            Self::Barrier => "barrier",
            Self::Support => "support",
            Self::GaugeStep => "gauge-step",
            Self::GaugeDrift => "gauge-drift",
            Self::GaugeStuck => "gauge-stuck",
            Self::GaugeScale => "gauge-scale",
            Self::GaugeClock => "gauge-clock",
            Self::MeterScale => "meter-scale",
            Self::WellSkin => "well-skin",
            Self::Unexplained => "unexplained",
        }
    }
}

/// What a finding is about, beside its cause.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Subject {
    /// A place in the ground.
    Place,
    /// A declared neighbour, by its order in the ground.
    Neighbour(usize),
    /// A gauge, by its order in the ground.
    Gauge(usize),
    /// A well (its meter or skin), by its order in the ground.
    Well(usize),
}

/// One candidate cause with its share of belief.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Weighed {
    /// The cause.
    pub cause: Cause,
    /// Posterior probability among all causes and "nothing", 0 to 1.
    pub probability: f64,
    /// What it is about.
    pub subject: Option<Subject>,
    /// Log of the Bayes factor against "nothing" at its best onset and place.
    pub log_evidence: f64,
}

/// How large an influence is.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Size {
    /// Mean of the posterior, in [`Size::unit`]; a leak is positive when fluid leaves the ground.
    pub value: f64,
    /// Standard deviation of the posterior.
    pub sd: f64,
    /// What is measured.
    pub unit: SizeUnit,
}

/// Unit of a [`Size`].
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub enum SizeUnit {
    /// A rate \[m3/s\].
    #[serde(rename = "m3/s")]
    CubicMetrePerSecond,
    /// A pressure \[Pa\].
    #[serde(rename = "Pa")]
    Pascal,
    /// A drift \[Pa/s\].
    #[serde(rename = "Pa/s")]
    PascalPerSecond,
    /// A share, without unit.
    #[serde(rename = "1")]
    Ratio,
}

/// Where an influence sits.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Place {
    /// East of the local origin \[m\].
    pub x: f64,
    /// North of the local origin \[m\].
    pub y: f64,
    /// Layer, by its order in the ground.
    pub layer: usize,
    /// Radius that holds 90 % of the posterior \[m\].
    pub radius_90: f64,
}

/// The weighed causes of one departure, as of the end of one block.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Finding {
    /// Number of the block after which this was found.
    pub block: i64,
    /// Candidates, leading first; never empty.
    pub causes: Vec<Weighed>,
    /// Whether the leading cause leads by the stated margin and what it leaves looks like commissioning.
    pub named: bool,
    /// Onset of the leading cause \[s since the epoch\].
    pub onset: f64,
    /// Standard deviation of the onset \[s\].
    pub onset_sd: f64,
    /// Size of the leading cause, where it has one.
    pub size: Option<Size>,
    /// Place of the leading cause, where it has one.
    pub place: Option<Place>,
    /// Gauges most affected: order in the ground, departure and its standard deviation \[Pa\].
    pub gauges: Vec<(usize, f64, f64)>,
    /// Log of the mixture that is held against the threshold.
    pub log_mixture: f64,
    /// Log of the threshold it is held against.
    pub log_threshold: f64,
}

/// What a gauge should have shown in a block.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Expectation {
    /// Mean \[Pa\].
    pub mean: f64,
    /// Standard deviation of the block mean about it \[Pa\].
    pub sd: f64,
}
