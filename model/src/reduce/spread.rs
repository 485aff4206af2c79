//! How far discretisation itself moves what the model says: between two sizes of mesh, and between two schemes.

use nalgebra::DMatrix;
use serde::{Deserialize, Serialize};

use super::ShiftedCholesky;
use super::rows::Rows;
use crate::ModelError;
use crate::ground::Ground;
use crate::ground::mesh::MeshOptions;
use crate::weak_form::{Functional, Scheme, System, discretise, discretise_on};

/// Points on a ring of the coarser mesh, as a share of those of the finer.
const COARSER: f64 = 0.75;
/// Reciprocals of the rates of change at which responses are compared \[s\]: an hour, a day, a month, a year.
const TIMES: [f64; 4] = [3600.0, 86_400.0, 2.6e6, 3.156e7];

/// Largest differences between discretisations of one ground, over wells, gauges and rates of change from an hour to a
/// year, each as a share of that response's peak.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Spread {
    /// Between quadratic elements on the mesh asked for and on one with three quarters of the points on a ring. The error
    /// falls with the fourth power of their number, so that of the finer mesh is about half of this.
    pub sizes: f64,
    /// Between quadratic and lumped linear elements on the mesh asked for: nearly all of it the error of the latter.
    pub schemes: f64,
    /// Unknowns of quadratic elements on the finer and on the coarser mesh.
    pub unknowns: (usize, usize),
}

/// Discretises a ground three times and compares.
///
/// # Errors
/// As [`discretise`]; [`ModelError::NotPositive`] for a system that is not symmetric positive.
pub fn spread(ground: &Ground, options: &MeshOptions) -> Result<Spread, ModelError> {
    let fine = discretise(ground, Scheme::Quadratic, options)?;
    let fewer = MeshOptions {
        refine: COARSER * options.refine,
        ..*options
    };
    let coarse = discretise(ground, Scheme::Quadratic, &fewer)?.system;
    let linear = discretise_on(ground, Scheme::LinearLumped, fine.mesh.clone())?.system;
    let best = responses(&fine.system)?;
    Ok(Spread {
        sizes: difference(&best, &responses(&coarse)?),
        schemes: difference(&best, &responses(&linear)?),
        unknowns: (fine.system.size, coarse.size),
    })
}

/// Responses of all gauges to all wells (gauges by wells), one matrix a rate of change.
fn responses(system: &System) -> Result<Vec<DMatrix<f64>>, ModelError> {
    let wells: Vec<&Functional> = system.wells.iter().collect();
    let mut factor = ShiftedCholesky::new(system)?;
    TIMES
        .iter()
        .map(|t| {
            factor.factorise(t.recip())?;
            let mut x = Rows::sources(system.size, &wells);
            factor.solve(&mut x);
            Ok(DMatrix::from_fn(
                system.gauges.len(),
                wells.len(),
                |i, j| system.gauges.get(i).map_or(0.0, |g| x.value(g, j)),
            ))
        })
        .collect()
}

fn difference(one: &[DMatrix<f64>], other: &[DMatrix<f64>]) -> f64 {
    let zero = one.first().map(|m| DMatrix::zeros(m.nrows(), m.ncols()));
    let peaks = one.iter().fold(zero.unwrap_or_default(), |peaks, m| {
        peaks.zip_map(m, |p: f64, v| p.max(v.abs()))
    });
    let mut worst = 0.0_f64;
    for (a, b) in one.iter().zip(other) {
        let shares = (a - b).component_div(&peaks.map(|p| p.max(f64::MIN_POSITIVE)));
        worst = worst.max(shares.amax());
    }
    worst
}
