//! What was planted in the demo's log.

use serde::Deserialize;

use crate::record::{Cause, Stamp};

/// The truth behind the log.
#[derive(Debug, Clone, Deserialize)]
pub(super) struct Truth {
    /// The quiet days.
    pub(super) commission: Span,
    /// What happens afterwards, in order.
    pub(super) events: Vec<Planted>,
}

/// A stretch of time.
#[derive(Debug, Clone, Copy, Deserialize)]
pub(super) struct Span {
    /// First instant.
    pub(super) from: Stamp,
    /// First instant after it.
    pub(super) to: Stamp,
}

/// One planted event.
#[derive(Debug, Clone, Deserialize)]
pub(super) struct Planted {
    /// Its cause.
    pub(super) cause: Cause,
    /// When it began.
    pub(super) onset: Stamp,
    /// Where, for what sits in the ground.
    pub(super) place: Option<At>,
    /// How large.
    pub(super) size: Size,
    /// Which gauge, for a gauge's fault.
    pub(super) gauge: Option<String>,
}

/// A place on the map \[m\].
#[derive(Debug, Clone, Copy, Deserialize)]
pub(super) struct At {
    /// East.
    pub(super) x: f64,
    /// North.
    pub(super) y: f64,
}

/// A size in the unit of findings.
#[derive(Debug, Clone, Deserialize)]
pub(super) struct Size {
    /// The number.
    pub(super) value: f64,
}
