//! What the site file asks of a channel's readings.

use std::time::Duration;

/// Real-time tests of a channel. A test that is not asked for is not made.
#[derive(Debug, Clone, PartialEq)]
pub struct QualityTests {
    /// What the instrument can deliver, SI: beyond it a reading is bad.
    pub span: Option<(f64, f64)>,
    /// What is usual here, SI: beyond it a reading is suspect.
    pub usual: Option<(f64, f64)>,
    /// Readings in a row with one raw number, the newest among them, from which on they are suspect (2 or more).
    pub flat: Option<u32>,
    /// Step from the reading before, in standard deviations of the window, beyond which a reading is suspect (above 0).
    pub jump: Option<f64>,
    /// Range of a whole window, SI, below which its readings are suspect.
    pub least: Option<f64>,
    /// The window of `jump` and `least`.
    pub window: Duration,
}
