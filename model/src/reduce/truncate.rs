//! Truncation: the leading directions of the span.

use nalgebra::{Cholesky, DMatrix};

use super::ReduceOptions;
use super::basis::is_well;
use super::modal::{symmetric_eigen, symmetric_pencil};
use super::search::Found;
use super::step::Gains;
use crate::ModelError;
use crate::weak_form::{Functional, System};

/// Weight of a gauge's or neighbour's own column beside a well's. A rate at a well is felt at full size at every node; a gauge's column
/// serves for what a leak does at gauges, which nobody knows to three digits. Between ports the error is a product of
/// two such errors and far smaller in any case.
const BESIDE_WELLS: f64 = 1.0 / 8.0;

/// Keeps the leading directions of the Gramian `sum Y(t) Y(t)^T` of all ports' step responses Y at log-spaced times and at every
/// sampled set of parameters, measured in energy (K + M / slowest), each port scaled to a unit response and weighed. Returns the
/// directions in the coordinates of the span, orthonormal, after the closed components, which always stay.
///
/// Energy, because in the plane it is the measure that weighs a feature ten metres wide like one ten kilometres wide, as a
/// pressure does; storage would weigh them by area and lose the near field of every well.
pub(super) fn leading_directions(
    system: &System,
    found: &Found<'_>,
    closed: usize,
    ports: &[&Functional],
    options: &ReduceOptions,
) -> Result<DMatrix<f64>, ModelError> {
    let span = &found.span;
    let width = span.width();
    let rest = width - closed;
    if rest == 0 {
        return Ok(DMatrix::identity(width, width));
    }
    let (mass, stiffness) = span.pencil(&Vec::new())?;
    let energy = stiffness + mass / options.slowest;
    let energy = Cholesky::new(energy.view((closed, closed), (rest, rest)).into_owned())
        .ok_or(ModelError::NotPositive {
            what: "the energy of the basis",
        })?
        .unpack();
    let mut sources = span.project(ports);
    for (mut column, (peak, port)) in sources.column_iter_mut().zip(found.peaks.iter().zip(ports)) {
        let weight = if is_well(system, port) {
            1.0
        } else {
            BESIDE_WELLS
        };
        column *= weight / peak.sqrt();
    }
    let mut gramian = DMatrix::zeros(rest, rest);
    for parameters in &found.samples {
        let (mass, stiffness) = span.pencil(parameters)?;
        let (lambda, modes) = symmetric_pencil(&stiffness, mass, closed)?;
        let b = modes.tr_mul(&sources);
        let gains: Vec<_> = options
            .truncation_times()
            .into_iter()
            .map(|(t, weight)| Gains::new(&lambda, t).gain * weight)
            .collect();
        let gains = DMatrix::from_columns(&gains);
        let responses = (&b * b.transpose()).component_mul(&(&gains * gains.transpose()));
        let lift = energy.tr_mul(&modes.rows(closed, rest));
        gramian += &lift * responses * lift.transpose() / gains.ncols() as f64;
    }
    let (sizes, directions) = symmetric_eigen(&gramian)?;
    let keep = count(sizes.as_slice(), closed, options);
    // Back from energy to the coordinates of the span.
    let mut leading = directions.columns(rest - keep, keep).into_owned();
    if !energy.tr_solve_lower_triangular_mut(&mut leading) {
        return Err(ModelError::NotPositive {
            what: "the energy of the basis",
        });
    }
    let mut kept = DMatrix::zeros(width, closed + keep);
    kept.view_mut((0, 0), (closed, closed)).fill_with_identity();
    kept.view_mut((closed, closed), (rest, keep))
        .copy_from(&leading.qr().q());
    Ok(kept)
}

/// How many of the directions of the given sizes (ascending) are kept.
fn count(sizes: &[f64], closed: usize, options: &ReduceOptions) -> usize {
    let allowed = options.tolerance * options.tolerance;
    let mut left = 0.0;
    let needed = sizes.len()
        - sizes
            .iter()
            .take_while(|size| {
                left += size.max(0.0);
                left <= allowed
            })
            .count();
    needed.clamp(1, options.max_modes.saturating_sub(closed).max(1))
}
