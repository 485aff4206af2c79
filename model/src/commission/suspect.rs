//! A barrier nobody declared that history already feels.
//!
//! Fitted as if it were not there it would spoil the parameters, and pass for a ground more uneven than it is. So history
//! is asked once with and once without the straight barrier that explains most, scales learned anew each time, and the
//! model is chosen by evidence (marginal likelihood). A barrier so chosen stands beside the fit and is left to the watch
//! to report: the ground file still describes the ground without it.

use nalgebra::DMatrix;
use serde::{Deserialize, Serialize};

use super::history::{History, Regression, Solved};
use super::places::{Line, Places};
use crate::expect::columns::Columns;
use crate::expect::whitener::Whitener;
use crate::ground::Ground;
use crate::weigh::barrier::{Images, SEALING};
use crate::weigh::evidence::log_bayes_positive_about;

/// Standard deviation of an image's strength about [`SEALING`].
pub(crate) const STRENGTH_SD: f64 = 0.3;
/// Log evidence, Occam's price of the fan paid, from which a barrier is believed.
pub(crate) const BELIEVED: f64 = 5.0;
/// What the search over the fan costs in log evidence: the logarithm of its lines, and of finding the best between them.
pub(crate) const OCCAM: f64 = 7.0;
/// First steps of the search: in azimuth \[rad\], and in the logarithm of the distance behind the array.
const TURN_AND_MOVE: (f64, f64) = (0.16, 0.35);
/// Rounds of the search.
const FINER: usize = 12;
/// Least distance of a line behind the array, in half-widths.
const LEAST_BEHIND: f64 = 0.03;

/// A straight barrier that history asks for.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Suspect {
    /// Direction of its normal \[rad from east, counter-clockwise\].
    pub azimuth: f64,
    /// Distance from the array's centre \[m\].
    pub distance: f64,
    /// Log evidence for it, all lines of the fan considered.
    pub log_evidence: f64,
}

/// What each line explains of what a regression leaves, as log evidence, from whitened signatures (rows by lines).
fn explained(regression: &Regression, solved: &Solved, lines: &DMatrix<f64>) -> Vec<f64> {
    let left = regression.left(&solved.mean);
    let width = regression.rows.ncols() - 1;
    let shares = regression.rows.columns(1, width).tr_mul(lines);
    let known = solved.factor.solve(&shares);
    (0..lines.ncols())
        .map(|line| {
            let signature = lines.column(line);
            let n = signature.norm_squared() - shares.column(line).dot(&known.column(line));
            let c = signature.dot(&left);
            log_bayes_positive_about(c, n.max(0.0), SEALING, STRENGTH_SD * STRENGTH_SD)
        })
        .collect()
}

/// Looks for the line that explains most: over the fan or from a line known, then finer and finer about the best. The
/// history is left looking at that line alone.
pub(crate) fn best_line(
    ground: &Ground,
    columns: &Columns,
    history: &mut History,
    whitener: &Whitener,
    (regression, solved): (&Regression, &Solved),
    from: Option<&Suspect>,
) -> Option<Suspect> {
    let places = Places::of(ground);
    let mut ask = |lines: &[Line]| -> Vec<f64> {
        history.look_at(columns, &Images::new(&columns.frame.modal, lines));
        explained(regression, solved, &history.whiten_lines(whitener))
    };
    let best_of = |logs: &[f64]| {
        let all = logs.iter().copied().enumerate();
        all.max_by(|a, b| a.1.total_cmp(&b.1))
    };
    let known = from.and_then(|s| places.line(ground, s.azimuth, s.distance));
    let fan = known.map_or_else(|| places.lines.clone(), |line| vec![line]);
    let (index, mut best) = best_of(&ask(&fan))?;
    let mut line = fan.get(index)?.clone();
    let (mut turn, mut move_) = TURN_AND_MOVE;
    for _ in 0..FINER {
        let outermost = places.outermost(ground, line.azimuth);
        let behind = (line.distance - outermost).max(LEAST_BEHIND * places.half_width);
        let beside: Vec<Line> = [
            (turn, 0.0),
            (-turn, 0.0),
            (0.0, move_),
            (0.0, -move_),
            (turn, move_),
            (turn, -move_),
            (-turn, move_),
            (-turn, -move_),
        ]
        .iter()
        .filter_map(|&(by, further): &(f64, f64)| {
            let azimuth = line.azimuth + by;
            let distance = places.outermost(ground, azimuth) + behind * further.exp();
            places.line(ground, azimuth, distance)
        })
        .collect();
        match best_of(&ask(&beside)) {
            Some((index, log)) if log > best => {
                best = log;
                if let Some(better) = beside.into_iter().nth(index) {
                    line = better;
                }
            }
            _ => {
                turn *= 0.5;
                move_ *= 0.5;
            }
        }
    }
    ask(std::slice::from_ref(&line));
    Some(Suspect {
        azimuth: line.azimuth,
        distance: line.distance,
        log_evidence: best,
    })
}
