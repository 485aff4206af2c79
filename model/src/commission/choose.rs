//! Which ground history prefers: fits begun in several ways, an even ground with a barrier nobody declared among them, held
//! against each other by evidence.

use super::fit::{Fit, TYPICAL_PATCH};
use super::refuse;
use super::suspect::{BELIEVED, OCCAM};
use super::{Account, Calibration, CommissionSettings, GroundKind};
use crate::ModelError;
use crate::block::Block;
use crate::ground::Ground;
use crate::reduce::Reduced;

/// Spread between patches while a barrier is looked for.
const EVEN: f64 = 1e-3;
/// Spread between patches from which a barrier is looked for.
const UNEVEN: f64 = 0.15;
/// Spread between patches from which a fit is begun on an uneven ground too.
const VARIED: f64 = 0.03;
/// Least history \[s\].
const LEAST_HISTORY: f64 = 5.0 * 86_400.0;

/// Calibrates a ground on quiet history, and tells what people should know of the fit.
///
/// `progress` is told the share done, 0 to 1.
///
/// # Errors
/// [`ModelError::History`] where history is too short or a gauge is silent in it, others where the mathematics fails.
pub fn commission(
    ground: &Ground,
    reduced: &Reduced,
    history: &[Block],
    settings: &CommissionSettings,
    progress: &mut dyn FnMut(f64),
) -> Result<(Calibration, Account), ModelError> {
    let (Some(first), Some(last)) = (history.first(), history.last()) else {
        return Err(ModelError::History("there is none".to_owned()));
    };
    let block = first.length;
    let length = history.len() as f64 * block;
    if length < LEAST_HISTORY {
        return Err(ModelError::History(format!(
            "it lasts {:.1} days, but at least {:.0} days are needed",
            length / 86_400.0,
            LEAST_HISTORY / 86_400.0
        )));
    }
    refuse::check_history(ground, history)?;
    // Fits are compared by evidence on the same readings, so those set aside by the first are set aside in all.
    let settled =
        |spread: f64, sought: bool, aside: Option<&[usize]>, told: &mut dyn FnMut(f64)| {
            let mut fit = Fit::start(ground, reduced, history, settings, block)?;
            fit.state.scales.patch = [spread; 2];
            fit.sought = sought;
            if let Some(aside) = aside {
                fit.known_aside = true;
                fit.state.aside = aside.to_vec();
            }
            fit.settle(told)?;
            Ok::<Fit<'_>, ModelError>(fit)
        };
    // Begun from an even ground the fit is sure to end well where the ground is even; where it is not, either beginning may
    // end in a blind alley. So uneven a ground may also be an even one with a barrier. What has once been fitted is not lost by
    // a fit that fails; those that follow the first know nothing of each other, so they may run at once.
    let mut fit = settled(EVEN, false, None, &mut |share| {
        progress(0.05 + 0.35 * share)
    })?;
    let aside = fit.state.aside.clone();
    let aside = Some(aside.as_slice());
    let (varied, uneven) = (
        fit.spread_between_patches() > VARIED,
        settings.barrier && fit.spread_between_patches() > UNEVEN,
    );
    let (again, even, patchy) = std::thread::scope(|scope| {
        let others = uneven.then(|| {
            (
                scope.spawn(|| settled(EVEN, true, aside, &mut |_| ())),
                scope.spawn(|| settled(TYPICAL_PATCH, true, aside, &mut |_| ())),
            )
        });
        let again = varied.then(|| {
            settled(TYPICAL_PATCH, false, aside, &mut |share| {
                progress(0.4 + 0.3 * share);
            })
        });
        let (even, patchy) = others.map_or((None, None), |(even, patchy)| {
            (even.join().ok(), patchy.join().ok())
        });
        (again, even, patchy)
    });
    if let Some(again) = again {
        fit = better(fit, again);
    }
    let mut tried = vec![fit.tried(GroundKind::AsDescribed, fit.log_evidence)];
    let barriers = [even, patchy].into_iter().flatten().flatten();
    let other = barriers.max_by(|a, b| a.log_evidence.total_cmp(&b.log_evidence));
    if let Some(mut other) = other
        && other.state.suspect.is_some()
    {
        tried.push(other.tried(GroundKind::Barrier, other.log_evidence - OCCAM));
        let log_evidence = other.log_evidence - fit.log_evidence - OCCAM;
        if let Some(suspect) = &mut other.state.suspect {
            suspect.log_evidence = log_evidence;
        }
        if log_evidence > BELIEVED {
            fit = other;
        }
    }
    progress(0.8);
    let (calibration, account) = fit.finish((first.index, last.index))?;
    let skins = calibration.skins.iter().zip(&calibration.skin_sd);
    for (well, (skin, sd)) in ground.wells.iter().zip(skins) {
        refuse::skin(&well.name, well.skin.min(0.0) + *skin, *sd)?;
    }
    progress(1.0);
    Ok((calibration, Account { tried, ..account }))
}

/// The fit that history makes more likely.
fn better<'a>(one: Fit<'a>, other: Result<Fit<'a>, ModelError>) -> Fit<'a> {
    match other {
        Ok(other) if other.log_evidence > one.log_evidence => other,
        _ => one,
    }
}
