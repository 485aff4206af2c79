//! The calibrated ground's own curve at any instant: what each well makes a gauge show, nuisances left out.

#![expect(
    clippy::indexing_slicing,
    reason = "columns are of the wells and modes of one modal form"
)]

use nalgebra::DMatrix;

use super::Commissioned;
use crate::ModelError;
use crate::expect::drive::{Drive, gain};
use crate::expect::frame::factor;
use crate::ground::Seat;
use crate::weak_form::Rock;

impl Commissioned {
    /// Pressure change that each input makes at a gauge \[Pa\] (instants by inputs), skin included.
    ///
    /// `rates` are `(from, rate)` of each input ([`crate::ground::Ground::inputs`]), ascending, in seconds of the clock that `instants` (ascending) are told in;
    /// the first of all began the record. Rates declared before the record count as at commissioning.
    ///
    /// # Errors
    /// As [`crate::reduce::Reduced::modal`]; [`ModelError::Size`] where rates are not those of the inputs.
    pub fn trace(
        &self,
        rates: &[Vec<(f64, f64)>],
        gauge: usize,
        instants: &[f64],
    ) -> Result<DMatrix<f64>, ModelError> {
        let wells = self.ground.inputs();
        if rates.len() != wells || gauge >= self.ground.gauges.len() {
            return Err(ModelError::Size {
                what: "rates for a curve of the model",
                found: rates.len(),
                expected: wells,
            });
        }
        let modal = self.reduced.modal(&self.calibration.factors)?;
        let before =
            Drive::new(modal.lambda.clone()).after(&self.calibration.priors.declared, wells);
        let start = rates
            .iter()
            .filter_map(|path| path.first())
            .map(|piece| piece.0)
            .fold(f64::INFINITY, f64::min);
        let mut out = DMatrix::zeros(instants.len(), wells);
        for (well, path) in rates.iter().enumerate() {
            let seen = modal
                .gauges
                .column(gauge)
                .component_mul(&modal.wells.column(well));
            let skin = self.skin_path(gauge, well);
            // The pressure of open water counts from where it rests.
            let rest = self.calibration.priors.rest.get(well).copied();
            let rest = rest.unwrap_or(0.0);
            let mut state = before.column(well).into_owned();
            let (mut now, mut rate) = (start, path.first().map_or(0.0, |p| p.1 - rest));
            let mut next = 0;
            for (at, &instant) in instants.iter().enumerate() {
                while let Some(&(from, to)) = path.get(next).filter(|p| p.0 < instant) {
                    advance(&mut state, &modal.lambda, from - now, rate);
                    now = now.max(from);
                    rate = to - rest;
                    next += 1;
                }
                advance(&mut state, &modal.lambda, instant - now, rate);
                now = now.max(instant);
                out[(at, well)] = seen.dot(&state) + skin * rate;
            }
        }
        Ok(out)
    }

    /// Pressure per rate that acts at once through a well's skin \[Pa s/m3\]; zero where the gauge is not in that well.
    fn skin_path(&self, gauge: usize, well: usize) -> f64 {
        let seat = self.ground.gauges.get(gauge).map(|g| g.seat);
        let (Some(Seat::InWell(own)), Some(of)) = (seat, self.ground.wells.get(well)) else {
            return 0.0;
        };
        if own != well || !of.skin_outside() {
            return 0.0;
        }
        let (parameter, described) = Rock::at(&self.ground, of.at, of.layer).transmissivity;
        let transmissivity = described * factor(&self.calibration.factors, parameter);
        let skin = self.calibration.skins.get(well).copied().unwrap_or(0.0);
        skin / (std::f64::consts::TAU * transmissivity)
    }
}

fn advance(
    state: &mut nalgebra::DVector<f64>,
    lambda: &nalgebra::DVector<f64>,
    dt: f64,
    rate: f64,
) {
    if dt <= 0.0 {
        return;
    }
    for (x, &l) in state.iter_mut().zip(lambda.iter()) {
        *x = (-l * dt).exp() * *x + gain(l, dt) * rate;
    }
}
