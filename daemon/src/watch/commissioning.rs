//! Makes a ground file: mesh, weak form, reduction, calibration, and the watch brought to the end of history.

use borewake_model::commission::{
    Account, Calibration, CommissionSettings, Commissioned, Numerics, Places, check_history,
    commission,
};
use borewake_model::ground::mesh::MeshOptions;
use borewake_model::ground::{Ground, Patches, Point};
use borewake_model::reduce::{
    Basis, BoxCorners, Factors, ReduceOptions, Reduced, reduce_patched, spread,
};
use borewake_model::watch::{Watch, WatchSettings};
use borewake_model::weak_form::{Functional, PatchShares, Scheme, System, discretise};
use borewake_model::{ModelError, lagged};

use super::compare::{Compare, compare};
use super::ground_file::{GroundFile, Model};
use crate::config::{Site, WellSettings};
use crate::record::{Block, Stamp};

/// A stage of commissioning, for progress.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Stage {
    /// Mesh and assembly.
    Discretise,
    /// Projection on modes, with its certificate.
    Reduce,
    /// Calibration.
    Calibrate,
    /// Fitting other grounds.
    Compare,
    /// Comparing the fitted ground with the full system and with other meshes.
    Certify,
    /// Bringing the watch to the end of history.
    Settle,
}

impl Stage {
    /// What people are told.
    #[must_use]
    pub fn words(self) -> &'static str {
        match self {
            Self::Discretise => "meshing the ground",
            Self::Reduce => "reducing it to modes",
            Self::Calibrate => "fitting parameters",
            Self::Compare => "fitting other grounds",
            Self::Certify => "checking the numbers of the fitted ground",
            Self::Settle => "settling the watch",
        }
    }
}

/// A ground put into the weak form, with what the fit and the watch want of it.
struct Discrete {
    system: System,
    patches: PatchShares,
    places: Vec<(Point, usize, Functional)>,
}

impl Discrete {
    fn of(ground: &Ground) -> Result<Self, ModelError> {
        let discrete = discretise(ground, Scheme::Quadratic, &MeshOptions::default())?;
        let array = Places::of(ground);
        let mut places = Vec::with_capacity(array.all.len());
        for &(point, layer) in &array.all {
            places.push((point, layer, discrete.locate(point, layer)?));
        }
        let patches = discrete.patches(
            ground,
            &Patches {
                centre: array.centre,
                half_width: array.half_width,
            },
        )?;
        Ok(Self {
            system: discrete.system,
            patches,
            places,
        })
    }
}

/// Meshes and reduces a ground as described, checked at the described parameters only.
///
/// # Errors
/// The ground cannot be meshed or reduced; the place is named.
pub fn reduce_ground(
    ground: &Ground,
    progress: &mut dyn FnMut(Stage, f64),
) -> Result<Reduced, ModelError> {
    progress(Stage::Discretise, 0.0);
    let discrete = Discrete::of(ground)?;
    progress(Stage::Reduce, 0.0);
    reduce_patched(
        &discrete.system,
        &discrete.patches,
        &discrete.places,
        &ReduceOptions::default(),
    )
}

/// Parameters of the fitted ground: those of layers, zones, barriers and the edge, and those of patches.
fn fitted(calibration: &Calibration) -> Factors {
    let all = calibration.factors.iter().chain(&calibration.patches);
    all.copied().collect()
}

/// Makes a ground file from quiet history, and for a field of wells what people should know of the fit; `others` are
/// the grounds it is to be held against.
///
/// # Errors
/// The ground cannot be meshed, or history cannot be used.
pub fn make(
    site: &Site,
    history: &[Block],
    others: &[Compare],
    made: Stamp,
    progress: &mut dyn FnMut(Stage, f64),
) -> Result<(GroundFile, Option<Account>), ModelError> {
    let last_block = history.last().map(|b| b.index).ok_or_else(|| {
        ModelError::History("no whole block of readings lies in the span given".into())
    })?;
    let (commissioned, account) = match &site.embankment {
        Some(embankment) => {
            let answers = answers(&site.ground, embankment.model(), history, progress)?;
            (Model::Embankment(answers), None)
        }
        None => {
            let (ground, account) = calibrated(site, history, others, progress)?;
            (Model::Ground(ground), Some(account))
        }
    };
    let file = settled(site, commissioned, history, last_block, made, progress)?;
    Ok((file, account))
}

/// The answers of an embankment's gauges.
fn answers(
    ground: &Ground,
    embankment: lagged::Embankment,
    history: &[Block],
    progress: &mut dyn FnMut(Stage, f64),
) -> Result<lagged::Commissioned, ModelError> {
    let calibration = lagged::commission(ground, &embankment, history, &mut |share| {
        progress(Stage::Calibrate, share);
    })?;
    Ok(lagged::Commissioned {
        ground: ground.clone(),
        embankment,
        calibration,
    })
}

/// The ground of a field of wells, reduced and calibrated.
fn calibrated(
    site: &Site,
    history: &[Block],
    others: &[Compare],
    progress: &mut dyn FnMut(Stage, f64),
) -> Result<(Commissioned, Account), ModelError> {
    check_history(&site.ground, history)?;
    progress(Stage::Discretise, 0.0);
    let discrete = Discrete::of(&site.ground)?;
    progress(Stage::Reduce, 0.0);
    let prior = CommissionSettings::default().parameter_sd;
    let options = ReduceOptions {
        corners: Some(BoxCorners {
            log_transmissivity: prior,
            log_storativity: prior,
        }),
        ..ReduceOptions::default()
    };
    let basis = Basis::build(&discrete.system, &options)?;
    let reduced = basis.reduce(
        &discrete.system,
        &discrete.patches,
        &discrete.places,
        &options,
    )?;
    let past = |w: &WellSettings| w.past.iter().map(|p| (p.from.seconds(), p.rate)).collect();
    let settings = CommissionSettings {
        past: site.wells.iter().map(past).collect(),
        ..CommissionSettings::default()
    };
    let (calibration, mut account) =
        commission(&site.ground, &reduced, history, &settings, &mut |share| {
            progress(Stage::Calibrate, share)
        })?;
    if !others.is_empty() {
        let known = (&settings, &account);
        let (tried, untried) = compare(&site.ground, &reduced, history, known, others, progress);
        account.tried.extend(tried);
        account.untried.extend(untried);
    }
    progress(Stage::Certify, 0.0);
    let numerics = Numerics {
        fitted: basis.certify_at(
            &discrete.system,
            &discrete.patches,
            &reduced,
            &options,
            &fitted(&calibration),
        )?,
        spread: spread(&site.ground, &MeshOptions::default())?,
    };
    let commissioned =
        Commissioned::new(site.ground.clone(), &reduced, calibration)?.allowing_for(numerics);
    Ok((commissioned, account))
}

/// Brings the watch to the end of history.
fn settled(
    site: &Site,
    commissioned: Model,
    history: &[Block],
    last_block: i64,
    made: Stamp,
    progress: &mut dyn FnMut(Stage, f64),
) -> Result<GroundFile, ModelError> {
    let settings = WatchSettings {
        false_alarm_interval: site.watch.false_alarm_interval,
        first_onset: last_block + 1,
    };
    let mut watch = Watch::new(&commissioned, &settings, &[])?;
    let total = history.len().max(1);
    for (done, block) in history.iter().enumerate() {
        watch.step(block)?;
        #[expect(clippy::cast_precision_loss, reason = "a share for a progress bar")]
        progress(Stage::Settle, done as f64 / total as f64);
    }
    let start = watch.save();
    Ok(GroundFile {
        site_digest: site.ground_digest(),
        made,
        commissioned,
        settings,
        start,
        last_block,
    })
}
