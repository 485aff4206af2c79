//! Figures that no ground is known to have: a wrong unit or a wrong ground, as a rule.

use borewake_model::commission::{Account, Calibration};
use borewake_model::reduce::Factors;
use borewake_model::units::{Dimension, significant};
use borewake_model::weak_form::Parameter;

use crate::config::Site;
use crate::keeper::settings::block_plan;

/// Diffusivities of confined aquifers in one compilation \[m2/s\]; a free surface stores more and lies below.
const KNOWN: (f64, f64) = (0.012, 8_914.0);
/// The least and the greatest specific storage of rock and soil among 430 published values \[/m\] (Chowdhury et al. 2022).
const STORED: (f64, f64) = (3.2e-9, 6e-3);
/// A spread between patches from here on is at the fit's bound.
const BOUND: f64 = 0.98;
/// Standard deviations of the prior that a figure may go away from the site file.
const FAR_OFF: f64 = 3.0;
/// Blocks set aside that are listed one by one, a gauge.
const LISTED: usize = 5;

/// Layers and zones whose diffusivity lies outside what is known, under factors on what is described.
pub(crate) fn diffusivities(site: &Site, factors: &Factors) -> Vec<String> {
    let factor = |parameter: Parameter| {
        let found = factors.iter().find(|(p, _)| *p == parameter);
        found.map_or(1.0, |(_, f)| *f)
    };
    let layers = site.ground.layers.iter().enumerate().map(|(i, l)| {
        let t = l.transmissivity * factor(Parameter::Transmissivity(i));
        (
            &l.name,
            t,
            l.storativity * factor(Parameter::Storativity(i)),
        )
    });
    let zones = site.ground.zones.iter().enumerate().map(|(i, z)| {
        let t = z.transmissivity * factor(Parameter::ZoneTransmissivity(i));
        (
            &z.name,
            t,
            z.storativity * factor(Parameter::ZoneStorativity(i)),
        )
    });
    layers
        .chain(zones)
        .filter_map(|(name, t, s)| {
            let diffusivity = t / s;
            let (least, most) = KNOWN;
            (!(least..=most).contains(&diffusivity)).then(|| {
                format!(
                    "{name} would have a diffusivity T/S of {} m2/s. Confined aquifers are known from {least} to {most} m2/s, and rock and soil store {:.1e} to {:.0e} /m (Chowdhury et al. 2022): look at the units of its transmissivity and storativity.",
                    significant(diffusivity, 3),
                    STORED.0,
                    STORED.1
                )
            })
        })
        .collect()
}

/// What a fit says that a ground of the kind described can hardly be.
pub(super) fn unlikely(site: &Site, calibration: &Calibration, account: &Account) -> Vec<String> {
    let mut doubts = Vec::new();
    let plan = block_plan(site);
    if calibration
        .priors
        .patch
        .iter()
        .any(|spread| *spread > BOUND)
    {
        doubts.push(
            "To explain this history the ground would have to vary by 100 % from patch to patch, the most that is allowed: the ground as described does not fit. Look at the signs of the rates (injection is positive) and of what each gauge reads, the units and places of wells and gauges, the edge, and what else happened in that time."
                .to_owned(),
        );
    }
    for (parameter, factor) in &calibration.factors {
        let known = account
            .known
            .iter()
            .find(|k| k.figure == borewake_model::commission::Figure::Parameter(*parameter));
        if let Some(known) = known
            && factor.ln().abs() > FAR_OFF * known.prior_sd
        {
            let row = super::figures::parameter_row(site, *parameter, *factor, 0.0);
            doubts.push(format!(
                "{} came out {} times what the site file says: one of the two is likely to have a wrong unit, or the ground is of another kind.",
                row.name,
                significant(*factor, 3)
            ));
        }
    }
    let outliers = site
        .gauges
        .iter()
        .zip(&account.gauges)
        .filter(|(_, fit)| !fit.outliers.is_empty());
    for (gauge, fit) in outliers {
        let which: Vec<String> = fit
            .outliers
            .iter()
            .take(LISTED)
            .map(|&(block, off)| {
                let at = crate::alarm::minute(plan.start_of(block));
                let off = site.units.show(Dimension::Pressure, off);
                format!("{at}, {off} from the model")
            })
            .collect();
        let more = if fit.outliers.len() > LISTED {
            "; and more"
        } else {
            ""
        };
        doubts.push(format!(
            "{} of {} block means of {} stand out and were set aside ({}{more}).",
            fit.outliers.len(),
            fit.outliers.len() + fit.series.len(),
            gauge.name,
            which.join("; ")
        ));
    }
    doubts
}
