//! Histories that nothing can be learned from, refused with the name of what is wrong and the mend.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges, wells and blocks laid out by the same code"
)]

use nalgebra::{DMatrix, DVector};

use super::history::History;
use crate::ModelError;
use crate::block::Block;
use crate::ground::Ground;

/// Least skin of a well, far below what any stimulation reaches: a fracture of a hundred times the well's radius has -4
/// (common practice, no source).
const LEAST_SKIN: f64 = -8.0;
/// Standard deviations beyond it that are no chance.
const CERTAINLY: f64 = 3.0;
/// Change of a rate that counts, as a share of the largest.
const CHANGE: f64 = 0.05;
/// How much smaller what is left must be, as a mean logarithm over gauges, before a sign is called wrong.
const FAR_BETTER: f64 = 1.0;
/// The same for one gauge that reads the wrong way.
const FAR_BETTER_ALONE: f64 = 2.0;

/// Refuses a history in which a gauge is silent or no rate changes.
///
/// # Errors
/// [`ModelError::History`] with the name of the gauge or wells, and the mend.
pub fn check_history(ground: &Ground, history: &[Block]) -> Result<(), ModelError> {
    let silent: Vec<&str> = ground
        .gauges
        .iter()
        .enumerate()
        .filter(|(index, _)| {
            !history
                .iter()
                .any(|b| b.gauges.get(*index).is_some_and(Option::is_some))
        })
        .map(|(_, gauge)| gauge.name.as_str())
        .collect();
    if !silent.is_empty() {
        return Err(ModelError::History(format!(
            "no usable reading of {} lies in it; check the gauge's channel and its quality flags, give a longer history, or take the gauge out of the site file",
            listed(&silent)
        )));
    }
    let largest = |well: usize| rates(history, well).map(f64::abs).fold(0.0_f64, f64::max);
    let steady = (0..ground.wells.len()).all(|well| {
        let (low, high) = rates(history, well)
            .fold((f64::INFINITY, f64::NEG_INFINITY), |(a, b), r| {
                (a.min(r), b.max(r))
            });
        high - low <= CHANGE * largest(well)
    });
    // Open water that moves tells of the ground as well.
    let moves = (ground.wells.len()..ground.inputs()).any(|input| {
        let mut levels = rates(history, input);
        let first = levels.next();
        levels.any(|level| Some(level) != first)
    });
    if steady && !moves {
        let names: Vec<&str> = ground.wells.iter().map(|w| w.name.as_str()).collect();
        let what = if (0..ground.wells.len()).all(|well| largest(well) == 0.0) {
            "is zero throughout"
        } else {
            "never changes"
        };
        return Err(ModelError::History(format!(
            "the rate of {} {what} in it, and pressure tells of the ground only where a rate changes; step or shut in a well for some hours, or give a history in which that happened",
            listed(&names)
        )));
    }
    Ok(())
}

/// Refuses a fitted skin that no stimulation gives: a fit that asks for it has been told something wrong.
///
/// # Errors
/// [`ModelError::History`] with the name of the well, and the mend.
pub(super) fn skin(well: &str, fitted: f64, sd: f64) -> Result<(), ModelError> {
    if fitted >= LEAST_SKIN - CERTAINLY * sd {
        return Ok(());
    }
    Err(ModelError::History(format!(
        "it asks for a skin of {fitted:.1} at {well}, which no well has; check the sign of its rate (positive is into the ground: injection positive, production negative), the unit of its rate, and that its gauge is in that well"
    )))
}

fn rates(history: &[Block], well: usize) -> impl Iterator<Item = f64> {
    history
        .iter()
        .filter_map(move |b| b.rates.get(well))
        .flat_map(|path| path.pieces.iter().map(|p| p.1))
}

/// Names as people list them.
fn listed(names: &[&str]) -> String {
    match names {
        [] => "any well".to_owned(),
        [one] => (*one).to_owned(),
        [all @ .., last] => format!("{} and {last}", all.join(", ")),
    }
}

/// Refuses a history that is explained far better once a sign is turned: of one well's rate, of all rates, or of a gauge.
///
/// Each gauge's readings are held against the described ground's response with a factor that must not be negative,
/// an offset and a trend.
pub(super) fn signs(ground: &Ground, history: &History) -> Result<(), ModelError> {
    let (gauges, wells) = (ground.gauges.len(), ground.wells.len());
    let left = |turned: &dyn Fn(usize) -> bool| -> Vec<f64> {
        (0..gauges)
            .map(|gauge| left_of(history, gauge, turned).max(f64::MIN_POSITIVE))
            .collect()
    };
    let straight = left(&|_| false);
    let better = |turned: &dyn Fn(usize) -> bool| {
        let logs = straight.iter().zip(left(turned)).map(|(a, b)| (a / b).ln());
        logs.sum::<f64>() / gauges.max(1) as f64
    };
    let mut candidates: Vec<(f64, Vec<&str>)> = (0..wells)
        .map(|well| {
            let name = ground.wells[well].name.as_str();
            (better(&|w| w == well), vec![name])
        })
        .collect();
    if wells > 1 {
        let all = ground.wells.iter().map(|w| w.name.as_str()).collect();
        candidates.push((better(&|w| w < wells), all));
    }
    let best = candidates
        .into_iter()
        .max_by(|a, b| a.0.total_cmp(&b.0))
        .filter(|(gain, _)| *gain > FAR_BETTER);
    if let Some((_, names)) = best {
        let (of, its) = if names.len() == 1 {
            ("rate", "its rate channel")
        } else {
            ("rates", "their rate channels")
        };
        return Err(ModelError::History(format!(
            "pressure falls where the {of} of {} should make it rise: with the sign turned they explain the readings far better. Rates are positive into the ground (injection) and negative out of it (production, pumping); mend it with `scale = -1` on {its}",
            listed(&names)
        )));
    }
    // One gauge among others that reads the wrong way, such as depth to water.
    if gauges > 1 {
        let turned = left(&|_| true);
        for (gauge, (a, b)) in straight.iter().zip(&turned).enumerate() {
            if (a / b).ln() > FAR_BETTER_ALONE {
                return Err(ModelError::History(format!(
                    "gauge {} falls where the rates should make it rise, unlike the other gauges: does it tell the depth to water, or pressure with its sign turned? Mend it with `scale = -1` on its channel",
                    ground.gauges[gauge].name
                )));
            }
        }
    }
    Ok(())
}

/// Mean square that a gauge's readings keep beside the response with some wells turned.
fn left_of(history: &History, gauge: usize, turned: &dyn Fn(usize) -> bool) -> f64 {
    let inputs = history.pairs.nrows() / history.gauges.max(1);
    let blocks = history.pairs.ncols();
    let rows: Vec<usize> = (0..blocks)
        .filter(|b| history.was_read(b * history.gauges + gauge))
        .collect();
    let count = rows.len();
    if count < 4 {
        return 1.0;
    }
    let span = blocks.max(1) as f64;
    let felt = |block: usize| -> f64 {
        (0..inputs)
            .map(|input| {
                let sign = if turned(input) { -1.0 } else { 1.0 };
                sign * history.pairs[(gauge * inputs + input, block)]
            })
            .sum()
    };
    let response = DVector::from_iterator(count, rows.iter().map(|&b| felt(b)));
    let readings = DVector::from_iterator(
        count,
        rows.iter().map(|&b| {
            let row = b * history.gauges + gauge;
            history.raw[(row, 0)] + history.felt(row)
        }),
    );
    let line = DMatrix::from_fn(count, 2, |i, j| {
        if j == 0 {
            1.0
        } else {
            rows[i] as f64 / span - 0.5
        }
    });
    let (response, readings) = (beside(&line, response), beside(&line, readings));
    let along = response.dot(&readings);
    let square = response.norm_squared();
    let taken = if along > 0.0 && square > 0.0 {
        along * along / square
    } else {
        0.0
    };
    // What no ground explains anyway keeps ratios finite.
    let all = readings.norm_squared();
    ((all - taken).max(1e-3 * all)) / count as f64
}

/// What a fitted line leaves.
fn beside(line: &DMatrix<f64>, values: DVector<f64>) -> DVector<f64> {
    let normal = line.transpose() * line;
    match normal.cholesky() {
        Some(factor) => {
            let fitted = line * factor.solve(&(line.transpose() * &values));
            values - fitted
        }
        None => values,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_skin_that_no_well_has_is_refused_by_the_wells_name() {
        assert!(skin("Q-1", -4.5, 0.1).is_ok());
        assert!(skin("Q-1", -12.0, 2.0).is_ok(), "it may be by chance");
        let why = skin("Q-1", -22.0, 0.3).unwrap_err().to_string();
        assert!(
            why.contains("Q-1") && why.contains("sign of its rate"),
            "{why}"
        );
    }
}
