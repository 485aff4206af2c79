//! What a watch stands on: the calibrated expectation of a site, whatever kind of site it is.

use crate::ModelError;
use crate::commission::{Commissioned, Places, Unsteady};
use crate::expect::columns::Columns;
use crate::expect::drive::size;
use crate::expect::frame::Frame;
use crate::expect::noise::{Noise, Path};
use crate::ground::Ground;

/// Longest age of an onset that is still weighed in a field of wells \[s\].
const HORIZON: f64 = 100.0 * 86_400.0;

/// A commissioned site: it gives the watch its columns, its noise and what it may look for.
pub trait Basis {
    /// All that the watch is built from.
    ///
    /// # Errors
    /// [`ModelError`] where the commissioned site does not fit together.
    fn foundation(&self) -> Result<Foundation, ModelError>;
}

/// All that a watch is built from.
#[derive(Debug, Clone)]
pub struct Foundation {
    /// The ground as described; its gauges are the watch's.
    pub(crate) ground: Ground,
    /// What every gauge can show that is no cause.
    pub(crate) columns: Columns,
    /// How meters' errors reach the gauges.
    pub(crate) path: Path,
    /// Where sources are looked for.
    pub(crate) places: Places,
    /// The stochastic nuisances.
    pub(crate) stochastic: Noise,
    /// Standard deviation of a block mean at each gauge \[Pa\].
    pub(crate) noise: Vec<f64>,
    /// Pressure of each gauge at rest \[Pa\].
    pub(crate) reference: Vec<f64>,
    /// Factor on the innovations' scale of each gauge.
    pub(crate) inflate: Vec<f64>,
    /// How innovations of gauges in wells grow with the rate.
    pub(crate) unsteady: Vec<Unsteady>,
    /// Longest run of blocks in which the raw value of each gauge never changed.
    pub(crate) longest_unchanged: Vec<u32>,
    /// Mean total injection \[m3/s\].
    pub(crate) flow: f64,
    /// Length of a block \[s\].
    pub(crate) block: f64,
    /// Longest age of an onset that is still weighed \[s\].
    pub(crate) horizon: f64,
}

impl Basis for Commissioned {
    fn foundation(&self) -> Result<Foundation, ModelError> {
        self.founded(Places::of(&self.ground))
    }
}

impl Commissioned {
    /// The foundation over these places, which are those of the reduction.
    pub(super) fn founded(&self, mut places: Places) -> Result<Foundation, ModelError> {
        let (ground, calibration) = (&self.ground, &self.calibration);
        let (gauges, wells) = (ground.gauges.len(), ground.wells.len());
        size(
            "gauges of the calibration",
            calibration.reference.len(),
            gauges,
        )?;
        size("skins of the calibration", calibration.skins.len(), wells)?;
        size(
            "places of the ground file",
            self.reduced.places.len(),
            places.all.len(),
        )?;
        if let Some(suspect) = &calibration.suspect {
            places
                .lines
                .extend(places.line(ground, suspect.azimuth, suspect.distance));
        }
        let frame = Frame::new(ground, &self.reduced, &calibration.factors)?;
        let path = Path::of(&frame.modal, calibration.block);
        let columns = Columns::new(
            frame,
            calibration.patched.clone(),
            calibration.priors.clone(),
            &calibration.skins,
        );
        Ok(Foundation {
            ground: ground.clone(),
            columns,
            path,
            places,
            stochastic: calibration.stochastic.clone(),
            noise: calibration.noise.clone(),
            reference: calibration.reference.clone(),
            inflate: calibration.inflate.clone(),
            unsteady: calibration.unsteady.clone(),
            longest_unchanged: calibration.longest_unchanged.clone(),
            flow: calibration.flow,
            block: calibration.block,
            horizon: HORIZON,
        })
    }
}
