//! A barrier nobody declared that history already feels.
//!
//! Fitted as if it were not there it would spoil the parameters, and pass for a ground more uneven than it is. So history
//! is asked once with and once without the straight barrier that explains most, scales learned anew each time, and the
//! model is chosen by evidence (marginal likelihood). A barrier so chosen stands beside the fit and is left to the watch
//! to report: the ground file still describes the ground without it.

use nalgebra::DMatrix;
use serde::{Deserialize, Serialize};

use super::history::{Regression, Solved};
use crate::weigh::barrier::SEALING;
use crate::weigh::evidence::log_bayes_about;

/// Standard deviation of an image's strength about [`SEALING`].
pub(crate) const STRENGTH_SD: f64 = 0.3;
/// Log evidence, Occam's price of the fan paid, from which a barrier is believed.
pub(crate) const BELIEVED: f64 = 5.0;

/// A straight barrier that history asks for.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Suspect {
    /// Which line of the fan, by order.
    pub line: usize,
    /// Log evidence for it, all lines of the fan considered.
    pub log_evidence: f64,
}

/// The line that explains most of what a regression leaves, from whitened signatures (rows by lines).
pub(crate) fn best_line(
    regression: &Regression,
    solved: &Solved,
    lines: &DMatrix<f64>,
) -> Option<usize> {
    let left = regression.left(&solved.mean);
    let width = regression.rows.ncols() - 1;
    let shares = regression.rows.columns(1, width).tr_mul(lines);
    let known = solved.factor.solve(&shares);
    let logs = (0..lines.ncols()).map(|line| {
        let signature = lines.column(line);
        let n = signature.norm_squared() - shares.column(line).dot(&known.column(line));
        let c = signature.dot(&left);
        log_bayes_about(c, n.max(0.0), SEALING, STRENGTH_SD * STRENGTH_SD)
    });
    logs.enumerate()
        .max_by(|a, b| a.1.total_cmp(&b.1))
        .map(|(line, _)| line)
}
