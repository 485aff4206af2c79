//! The stochastic nuisances, moved while the marginal likelihood of history grows.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over the columns of the regression"
)]

use nalgebra::DVector;

use super::fit::Fit;
use super::history::{History, Solved};
use crate::ModelError;
use crate::expect::columns::{Columns, Kind};
use crate::expect::noise::{Noise, Path};
use crate::expect::whitener::Whitener;

/// Longest memory of a meter's wandering error \[s\]: what lasts longer is its gain.
const LONGEST_MEMORY: f64 = 10.0 * 86_400.0;

impl Fit<'_> {
    /// Log marginal likelihood under other noise.
    fn try_noise(
        &self,
        columns: &Columns,
        path: &Path,
        part: &History,
        spread: &DVector<f64>,
        noise: &Noise,
    ) -> Result<f64, ModelError> {
        let whitener = Whitener::new(path, noise, &columns.skin_paths(), self.block)?;
        let regression = part.whiten(&whitener);
        let solved = regression.solve(spread, &DVector::zeros(spread.len()))?;
        Ok(solved.log_likelihood - whitener.log_scale() * self.history.len() as f64)
    }

    /// Whether the meters' error is one that meters have; what lasts longer is no noise.
    fn is_noise_of_meters(&self, noise: &Noise) -> bool {
        let errors = noise.meter.iter().chain(&noise.meter_fresh);
        let rates = self.priors.rate.iter().chain(&self.priors.rate);
        noise.meter_memory <= LONGEST_MEMORY
            && errors.zip(rates).all(|(error, rate)| {
                *error <= self.settings.meter_bias * rate.max(f64::MIN_POSITIVE)
            })
    }

    /// Moves each figure of the noise while the marginal likelihood grows. What could pass for a meter's or a gauge's slow
    /// error is marginalised, or it would make that error look shorter than it is; the rest is taken as fitted.
    pub(super) fn learn_noise(
        &mut self,
        columns: &Columns,
        history: &History,
        solved: &Solved,
        strides: &[f64],
    ) -> Result<(), ModelError> {
        let width = history.raw.ncols() - 1;
        let (spread, _) = self.spread(columns, width, history.tail());
        let kept: Vec<usize> = (0..width)
            .filter(|&index| {
                !matches!(
                    columns.kinds.get(index),
                    Some(
                        Kind::Patch(_)
                            | Kind::Discrepancy { .. }
                            | Kind::Far { .. }
                            | Kind::Past { .. }
                    )
                )
            })
            .collect();
        let part = history.part(&kept, &solved.mean);
        let spread = DVector::from_iterator(kept.len(), kept.iter().map(|&i| spread[i]));
        let path = Path::of(&columns.frame.modal, self.block);
        let mut best = self.try_noise(columns, &path, &part, &spread, &self.state.noise)?;
        let gauges = self.state.noise.gauge.len();
        let mut knobs: Vec<Knob> = vec![
            Knob::Gauges,
            Knob::Wander,
            Knob::Meter,
            Knob::MeterMemory,
            Knob::MeterFresh,
        ];
        // A gauge's own noise is told from the common figure only once the rest is settled.
        if strides.len() > 1 {
            knobs.extend((0..gauges).map(Knob::Gauge));
        }
        for &stride in strides {
            for &knob in &knobs {
                for factor in [stride, 1.0 / stride] {
                    let mut improved = false;
                    for _ in 0..3 {
                        let mut next = self.state.noise.clone();
                        knob.turn(&mut next, factor);
                        if !self.is_noise_of_meters(&next) {
                            break;
                        }
                        let value = self.try_noise(columns, &path, &part, &spread, &next)?;
                        if value <= best + 0.5 {
                            break;
                        }
                        best = value;
                        self.state.noise = next;
                        improved = true;
                    }
                    if improved {
                        break;
                    }
                }
            }
        }
        Ok(())
    }
}

/// A figure of the noise that is tried larger and smaller.
#[derive(Debug, Clone, Copy)]
enum Knob {
    Gauges,
    Wander,
    Meter,
    MeterMemory,
    MeterFresh,
    Gauge(usize),
}

impl Knob {
    fn turn(self, noise: &mut Noise, factor: f64) {
        let all = |list: &mut Vec<f64>| list.iter_mut().for_each(|v| *v *= factor);
        match self {
            Self::Gauges => all(&mut noise.gauge),
            Self::Wander => all(&mut noise.wander),
            Self::Meter => all(&mut noise.meter),
            Self::MeterMemory => noise.meter_memory *= factor,
            Self::MeterFresh => all(&mut noise.meter_fresh),
            Self::Gauge(g) => {
                if let Some(value) = noise.gauge.get_mut(g) {
                    *value *= factor;
                }
            }
        }
    }
}
