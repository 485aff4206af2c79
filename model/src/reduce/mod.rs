//! Galerkin projection on a rational Krylov basis, its certificate, and the modal form.
//!
//! The sparse [`System`] `M x' + K x = B u`, `y = C x` is projected on a few hundred
//! vectors V, block by block, so that parameters change without a new reduction ([`Reduced`]); the small pencil is
//! then diagonalised ([`Modal`]) and stepped exactly ([`Gains`], [`Propagator`]). Because the columns of wells *and*
//! gauges are in the basis and the pencil stays symmetric, stability, passivity and reciprocity carry over.

mod basis;
mod certificate;
mod correction;
mod factor;
#[cfg(test)]
mod lattice;
mod modal;
mod options;
mod pencil;
mod propagate;
mod rows;
mod search;
mod span;
mod spread;
mod step;
#[cfg(test)]
mod tests;
mod truncate;

pub use basis::Basis;
pub use factor::ShiftedCholesky;
pub(crate) use modal::layer_of;
pub use options::{BoxCorners, ReduceOptions};
pub use propagate::Propagator;
pub use spread::{Spread, spread};
pub use step::Gains;

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use crate::ModelError;
use crate::ground::Point;
use crate::weak_form::{Functional, Parameter, PatchShares, System};

/// Reduces a system at its described parameters and certifies the result.
///
/// `places` are points at which sources may be put later without a further solve: position, layer and functional. Works in three
/// steps, which [`Basis`] offers one by one: the basis, the projection, the certificate.
///
/// # Errors
/// [`ModelError::Parameter`] for options that cannot be, [`ModelError::Size`] for parts that do not fit each other,
/// [`ModelError::NotPositive`] for a system that is not symmetric positive, [`ModelError::NotSettled`] where the check against the
/// full system did not converge.
pub fn reduce(
    system: &System,
    places: &[(Point, usize, Functional)],
    options: &ReduceOptions,
) -> Result<Reduced, ModelError> {
    reduce_patched(system, &PatchShares::default(), places, options)
}

/// As [`reduce`], with the shares of patches in which the ground may differ from what is described. To first order in the
/// patches' factors the result is as good as at the described values: states and adjoint states are both in the basis.
///
/// # Errors
/// As [`reduce`].
pub fn reduce_patched(
    system: &System,
    patches: &PatchShares,
    places: &[(Point, usize, Functional)],
    options: &ReduceOptions,
) -> Result<Reduced, ModelError> {
    Basis::build(system, options)?.reduce(system, patches, places, options)
}

/// A dense share of a reduced matrix that one parameter scales.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct ReducedBlock {
    /// What scales it.
    pub parameter: Parameter,
    /// The projected matrix (r by r, symmetric).
    pub matrix: DMatrix<f64>,
}

/// A reduced ground: the sparse system projected block by block, so that parameters change without a new reduction.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Reduced {
    /// Number of closed components. Their M-orthonormal indicators are the first vectors of the basis, and every
    /// stiffness block vanishes exactly on them.
    pub closed: usize,
    /// Shares of the reduced storage matrix.
    pub mass: Vec<ReducedBlock>,
    /// Shares of the reduced conduction matrix.
    pub stiffness: Vec<ReducedBlock>,
    /// What each patch contributes to the shares of its layer: with a factor f on the patch, f - 1 times its matrix is added.
    pub patches: Vec<ReducedBlock>,
    /// Port vectors of the wells and of what else drives the ground (r by number of inputs).
    pub wells: DMatrix<f64>,
    /// What scales each of them, at its described value; those beyond the list never change.
    pub drives: Vec<Parameter>,
    /// Observation vectors of the gauges (r by number of gauges).
    pub gauges: DMatrix<f64>,
    /// Port vectors of the neighbours (r by number of neighbours).
    pub neighbours: DMatrix<f64>,
    /// Places at which a source can be put without a further solve (candidate leaks, images).
    pub places: Vec<(Point, usize)>,
    /// Their port vectors (r by number of places).
    pub place_ports: DMatrix<f64>,
    /// What the reduction costs in accuracy (`NaN` errors until [`Basis::certify`] has found them).
    pub certificate: Certificate,
}

/// What the reduction costs in accuracy.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Certificate {
    /// Largest step-response error over the times checked, as a share of that response's peak, at ports.
    pub ports: f64,
    /// The same at randomly chosen nodes, for a rate at a well.
    pub random_nodes: f64,
    /// The same of what any gauge shows of a rate at such a node: a leak. (By reciprocity, a rate at a gauge as seen there.)
    pub leaks: f64,
    /// The largest of the first two at the corners of the parameter box, where it was checked.
    pub box_corners: Option<f64>,
    /// Unknowns of the full system.
    pub full_size: usize,
    /// Number of modes kept.
    pub modes: usize,
    /// Number of shifts used.
    pub shifts: usize,
    /// Shortest and longest time checked \[s\].
    pub times: (f64, f64),
}

/// Factors on the described parameters; what is not named keeps its described value.
pub type Factors = Vec<(Parameter, f64)>;

/// The modal form at one set of parameters: `x_k' = -lambda_k x_k + b_k . u`, `y = c x`.
///
/// The pressure at functional i under a unit rate at port j held for t is
/// `sum_k c_ik b_jk (1 - exp(-lambda_k t)) / lambda_k`, with `t` in place of the quotient where lambda is zero.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Modal {
    /// Decay rates \[1/s\], ascending, exactly zero for closed components.
    pub lambda: DVector<f64>,
    /// Ports of the wells and of what else drives the ground (r by number of inputs).
    pub wells: DMatrix<f64>,
    /// Functionals of the gauges (r by number of gauges).
    pub gauges: DMatrix<f64>,
    /// Ports of the neighbours (r by number of neighbours).
    pub neighbours: DMatrix<f64>,
    /// Ports of the places (r by number of places), in the order of [`Reduced::places`].
    pub places: DMatrix<f64>,
}
