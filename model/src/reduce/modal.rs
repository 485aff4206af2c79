//! From the reduced pencil at one set of parameters to its modes.

use faer::Par;
use faer::diag::Diag;
use faer::dyn_stack::{MemBuffer, MemStack};
use faer::linalg::evd::{ComputeEigenvectors, self_adjoint_evd, self_adjoint_evd_scratch};
use nalgebra::{Cholesky, DMatrix, DVector};

use super::{Factors, Modal, Reduced, ReducedBlock};
use crate::ModelError;
use crate::weak_form::Parameter;

/// An eigenvalue below minus this share of the largest is no rounding error.
const NEGATIVE: f64 = 1e-9;

impl Reduced {
    /// Number of vectors of the basis, which is the number of modes.
    #[must_use]
    pub fn modes(&self) -> usize {
        self.wells.nrows()
    }

    /// The modal form at `factors` on the described parameters.
    ///
    /// Solves `K v = lambda M v` with `M = sum b_i M_i`, `K = sum a_j K_j` (Cholesky of M, then a symmetric eigenproblem).
    /// Decay rates come ascending, those of closed components exactly zero. The sign of a mode is such that its
    /// largest entry in the basis is positive.
    ///
    /// # Errors
    /// [`ModelError::Parameter`] for a factor that is negative or not finite, [`ModelError::NotPositive`] where the pencil is not
    /// positive, [`ModelError::Size`] where the parts do not fit each other.
    pub fn modal(&self, factors: &Factors) -> Result<Modal, ModelError> {
        let modes = self.modes();
        let (lambda, vectors) = self.pencil(factors)?;
        let rotate = |ports: &DMatrix<f64>| {
            if ports.nrows() == modes {
                Ok(vectors.tr_mul(ports))
            } else {
                Err(ModelError::Size {
                    what: "rows of the port vectors",
                    found: ports.nrows(),
                    expected: modes,
                })
            }
        };
        let mut wells = rotate(&self.wells)?;
        for (mut port, drive) in wells.column_iter_mut().zip(&self.drives) {
            port *= factor_on(*drive, factors)?;
        }
        Ok(Modal {
            lambda,
            wells,
            gauges: rotate(&self.gauges)?,
            neighbours: rotate(&self.neighbours)?,
            places: rotate(&self.place_ports)?,
        })
    }

    /// The same ground with the patches' factors taken into the shares of their layers, for good.
    ///
    /// # Errors
    /// As [`Reduced::modal`].
    pub fn settled(&self, patches: &Factors) -> Result<Self, ModelError> {
        let mut settled = self.clone();
        for block in std::mem::take(&mut settled.patches) {
            let more = factor_on(block.parameter, patches)? - 1.0;
            let shares = match block.parameter {
                Parameter::PatchStorativity(..) => &mut settled.mass,
                _ => &mut settled.stiffness,
            };
            let layer = layer_of(block.parameter);
            if let Some(share) = shares.iter_mut().find(|s| s.parameter == layer)
                && share.matrix.shape() == block.matrix.shape()
            {
                share.matrix.zip_apply(&block.matrix, |s, b| *s += more * b);
            }
        }
        Ok(settled)
    }

    /// The change of the diagonal pencil at `factors` with the logarithm of each patch's factor
    /// (modes by modes), in the order of [`Reduced::patches`].
    ///
    /// # Errors
    /// As [`Reduced::modal`].
    pub(crate) fn patch_tilts(&self, factors: &Factors) -> Result<Vec<DMatrix<f64>>, ModelError> {
        let (_, vectors) = self.pencil(factors)?;
        self.patches
            .iter()
            .map(|block| {
                let scale = factor_on(layer_of(block.parameter), factors)?
                    * factor_on(block.parameter, factors)?;
                Ok(vectors.tr_mul(&(&block.matrix * &vectors)) * scale)
            })
            .collect()
    }

    /// Decay rates and M-orthonormal vectors of the reduced pencil at `factors`.
    pub(super) fn pencil(
        &self,
        factors: &Factors,
    ) -> Result<(DVector<f64>, DMatrix<f64>), ModelError> {
        let mut mass = weighted(&self.mass, factors, self.modes())?;
        let mut stiffness = weighted(&self.stiffness, factors, self.modes())?;
        for block in &self.patches {
            let more = factor_on(layer_of(block.parameter), factors)?
                * (factor_on(block.parameter, factors)? - 1.0);
            let sum = match block.parameter {
                Parameter::PatchStorativity(..) => &mut mass,
                _ => &mut stiffness,
            };
            if more != 0.0 && block.matrix.shape() == sum.shape() {
                sum.zip_apply(&block.matrix, |s, b| *s += more * b);
            }
        }
        symmetric_pencil(&stiffness, mass, self.closed)
    }
}

/// The parameter of the layer that a patch is part of; any other parameter stands for itself.
pub(crate) fn layer_of(parameter: Parameter) -> Parameter {
    match parameter {
        Parameter::PatchTransmissivity(layer, _) => Parameter::Transmissivity(layer),
        Parameter::PatchStorativity(layer, _) => Parameter::Storativity(layer),
        other => other,
    }
}

/// The factor on one parameter; what is not named keeps its described value.
pub(super) fn factor_on(parameter: Parameter, factors: &Factors) -> Result<f64, ModelError> {
    let mut product = 1.0;
    for &(named, factor) in factors {
        if named == parameter {
            product *= factor;
        }
    }
    if product.is_finite() && product >= 0.0 {
        Ok(product)
    } else {
        Err(ModelError::Parameter {
            what: format!("the factor on {parameter:?}"),
            value: product,
            must: "must be finite and not negative",
        })
    }
}

fn weighted(
    blocks: &[ReducedBlock],
    factors: &Factors,
    modes: usize,
) -> Result<DMatrix<f64>, ModelError> {
    let mut sum = DMatrix::zeros(modes, modes);
    for block in blocks {
        if block.matrix.shape() != (modes, modes) {
            return Err(ModelError::Size {
                what: "rows of a reduced block",
                found: block.matrix.nrows(),
                expected: modes,
            });
        }
        let factor = factor_on(block.parameter, factors)?;
        sum.zip_apply(&block.matrix, |s, b| *s += factor * b);
    }
    Ok(sum)
}

/// Solves `K v = lambda M v`, where K vanishes on the first `closed` coordinates: decay rates ascending, and
/// M-orthonormal vectors as columns.
pub(super) fn symmetric_pencil(
    stiffness: &DMatrix<f64>,
    mass: DMatrix<f64>,
    closed: usize,
) -> Result<(DVector<f64>, DMatrix<f64>), ModelError> {
    let modes = mass.nrows();
    let factor = Cholesky::new(mass)
        .ok_or(ModelError::NotPositive {
            what: "the reduced storage matrix",
        })?
        .unpack();
    let solve = |m: &mut DMatrix<f64>| {
        factor
            .solve_lower_triangular_mut(m)
            .then_some(())
            .ok_or(ModelError::NotPositive {
                what: "the reduced storage matrix",
            })
    };
    // L^-1 K L^-T. L is lower triangular, so the leading rows and columns that vanish in K vanish here too.
    let mut half = stiffness.clone();
    solve(&mut half)?;
    let mut standard = half.transpose();
    solve(&mut standard)?;

    let rest = modes - closed.min(modes);
    let (values, rotation) =
        symmetric_eigen(&standard.view((closed, closed), (rest, rest)).into_owned())?;
    let largest = values.iter().copied().fold(0.0, f64::max);
    if values.iter().any(|&l| l < -NEGATIVE * largest) {
        return Err(ModelError::NotPositive {
            what: "the reduced conduction matrix",
        });
    }
    let mut lambda = DVector::zeros(modes);
    let mut vectors = DMatrix::identity(modes, modes);
    for (to, l) in lambda.rows_mut(closed, rest).iter_mut().zip(values.iter()) {
        *to = l.max(0.0);
    }
    vectors
        .view_mut((closed, closed), (rest, rest))
        .copy_from(&rotation);
    if !factor.tr_solve_lower_triangular_mut(&mut vectors) {
        return Err(ModelError::NotPositive {
            what: "the reduced storage matrix",
        });
    }
    for mut column in vectors.column_iter_mut() {
        let largest = column
            .iter()
            .copied()
            .fold(0.0_f64, |a, b| if b.abs() > a.abs() { b } else { a });
        if largest < 0.0 {
            column.neg_mut();
        }
    }
    Ok((lambda, vectors))
}

/// Eigenvalues, ascending, and orthonormal eigenvectors of a symmetric matrix (its lower triangle is read).
///
/// The routine is faer's: a third of the time of nalgebra's at 170 rows, a quarter at 400.
pub(super) fn symmetric_eigen(
    matrix: &DMatrix<f64>,
) -> Result<(DVector<f64>, DMatrix<f64>), ModelError> {
    let n = matrix.nrows();
    let mut values = Diag::<f64>::zeros(n);
    let mut vectors = faer::Mat::<f64>::zeros(n, n);
    let copy = faer::Mat::from_fn(n, n, |i, j| matrix[(i, j)]);
    if !copy.is_all_finite() {
        return Err(ModelError::NotFinite("an entry of a reduced matrix"));
    }
    let scratch =
        self_adjoint_evd_scratch::<f64>(n, ComputeEigenvectors::Yes, Par::Seq, Default::default());
    self_adjoint_evd(
        copy.as_ref(),
        values.as_mut(),
        Some(vectors.as_mut()),
        Par::Seq,
        MemStack::new(&mut MemBuffer::new(scratch)),
        Default::default(),
    )
    .map_err(|_| ModelError::NotSettled {
        what: "the eigenvalue iteration of the reduced pencil",
        steps: n,
        residual: f64::NAN,
    })?;
    let mut order: Vec<usize> = (0..n).collect();
    order.sort_by(|&a, &b| values[a].total_cmp(&values[b]));
    Ok((
        DVector::from_iterator(n, order.iter().map(|&k| values[k])),
        DMatrix::from_fn(n, n, |i, k| {
            order.get(k).map_or(0.0, |&from| vectors[(i, from)])
        }),
    ))
}
