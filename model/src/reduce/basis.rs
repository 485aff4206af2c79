//! The basis of the reduced space, and what is projected on it.

use nalgebra::DMatrix;

use super::rows::Rows;
use super::search::search;
use super::span::Span;
use super::span::quadratic_form;
use super::truncate::leading_directions;
use super::{Certificate, ReduceOptions, Reduced, ReducedBlock};
use crate::ModelError;
use crate::ground::Point;
use crate::weak_form::{Functional, PatchShares, SparseBlock, System};

/// A basis of the reduced space, with every block of the system projected on it.
pub struct Basis<'a> {
    span: Span<'a>,
    /// From the whole span to the directions kept (width of the span by number of modes).
    kept: DMatrix<f64>,
    closed: usize,
    shifts: Vec<f64>,
}

impl<'a> Basis<'a> {
    /// Builds the basis of a system at its described parameters.
    ///
    /// # Errors
    /// [`ModelError::Parameter`] for options that cannot be, [`ModelError::Size`] for parts that do not fit each other,
    /// [`ModelError::NotPositive`] for a system that is not positive definite with a shift.
    pub fn build(system: &'a System, options: &ReduceOptions) -> Result<Self, ModelError> {
        options.check()?;
        let ports = distinct_ports(system)?;
        let closed = system.closed_components.len();
        let found = search(system, &ports, indicators(system)?, options)?;
        let kept = leading_directions(system, &found, closed, &ports, options)?;
        Ok(Self {
            span: found.span,
            kept,
            closed,
            shifts: found.shifts,
        })
    }

    /// The shifts \[1/s\] in the order in which they were placed: one sparse factorisation each.
    #[must_use]
    pub fn shifts(&self) -> &[f64] {
        &self.shifts
    }

    /// Number of modes kept.
    #[must_use]
    pub fn modes(&self) -> usize {
        self.kept.ncols()
    }

    /// Number of vectors before truncation.
    #[must_use]
    pub fn width(&self) -> usize {
        self.span.width()
    }

    /// Nodal values of the reduced solution with coordinates `y` (modes by columns).
    pub(super) fn lift(&self, y: &DMatrix<f64>) -> Rows {
        self.span.combine(&(&self.kept * y))
    }

    /// Functionals in the coordinates of the kept directions, as columns.
    pub(super) fn coordinates(&self, functionals: &[&Functional]) -> DMatrix<f64> {
        self.kept.tr_mul(&self.span.project(functionals))
    }

    /// Projects the system and the places on the basis. The certificate is left open.
    ///
    /// # Errors
    /// [`ModelError::Size`] for a place outside the mesh.
    pub fn project(
        &self,
        system: &System,
        places: &[(Point, usize, Functional)],
    ) -> Result<Reduced, ModelError> {
        let ports = |functionals: &[&Functional]| -> Result<DMatrix<f64>, ModelError> {
            within(system.size, functionals)?;
            Ok(self.coordinates(functionals))
        };
        let blocks = |blocks: &[SparseBlock], projected: Vec<DMatrix<f64>>, zero: usize| {
            blocks
                .iter()
                .zip(projected)
                .map(|(block, full)| {
                    let mut matrix = self.kept.tr_mul(&(full * &self.kept));
                    matrix.fill_rows(zero);
                    symmetrise(&mut matrix);
                    ReducedBlock {
                        parameter: block.parameter,
                        matrix,
                    }
                })
                .collect()
        };
        Ok(Reduced {
            closed: self.closed,
            mass: blocks(&system.mass, self.span.mass(), 0),
            stiffness: blocks(&system.stiffness, self.span.stiffness(), self.closed),
            patches: Vec::new(),
            drives: system.drives.clone(),
            wells: ports(&system.wells.iter().collect::<Vec<_>>())?,
            gauges: ports(&system.gauges.iter().collect::<Vec<_>>())?,
            neighbours: ports(&system.neighbours.iter().collect::<Vec<_>>())?,
            places: places.iter().map(|p| (p.0, p.1)).collect(),
            place_ports: ports(&places.iter().map(|p| &p.2).collect::<Vec<_>>())?,
            certificate: Certificate {
                ports: f64::NAN,
                random_nodes: f64::NAN,
                leaks: f64::NAN,
                box_corners: None,
                full_size: system.size,
                modes: self.modes(),
                shifts: self.shifts.len(),
                times: (f64::NAN, f64::NAN),
            },
        })
    }
}

impl Basis<'_> {
    /// Projects the system, the shares of patches and the places, and certifies the result.
    ///
    /// # Errors
    /// As [`super::reduce`].
    pub fn reduce(
        &self,
        system: &System,
        patches: &PatchShares,
        places: &[(Point, usize, Functional)],
        options: &ReduceOptions,
    ) -> Result<Reduced, ModelError> {
        let mut reduced = self.project(system, places)?;
        reduced.patches = self.project_patches(patches)?;
        reduced.certificate = self.certify(system, &reduced, options)?;
        Ok(reduced)
    }

    /// Projects the shares of patches.
    ///
    /// # Errors
    /// [`ModelError::Size`] for a share of another mesh.
    pub fn project_patches(&self, patches: &PatchShares) -> Result<Vec<ReducedBlock>, ModelError> {
        if patches.mass.is_empty() && patches.stiffness.is_empty() {
            return Ok(Vec::new());
        }
        let kept = self.lift(&DMatrix::identity(self.modes(), self.modes()));
        let project = |block: &SparseBlock, zero: usize| {
            let mut matrix = quadratic_form(block.matrix.as_ref(), &kept)?;
            matrix.fill_rows(zero);
            symmetrise(&mut matrix);
            Ok(ReducedBlock {
                parameter: block.parameter,
                matrix,
            })
        };
        let mass = patches.mass.iter().map(|b| project(b, 0));
        let stiffness = patches.stiffness.iter().map(|b| project(b, self.closed));
        mass.chain(stiffness).collect()
    }
}

/// Clears the leading rows and columns, on which a closed component leaves only rounding errors.
trait ClearLeading {
    fn fill_rows(&mut self, count: usize);
}

impl ClearLeading for DMatrix<f64> {
    fn fill_rows(&mut self, count: usize) {
        let count = count.min(self.nrows());
        self.rows_mut(0, count).fill(0.0);
        self.columns_mut(0, count).fill(0.0);
    }
}

fn symmetrise(matrix: &mut DMatrix<f64>) {
    let transposed = matrix.transpose();
    matrix.zip_apply(&transposed, |a, b| *a = 0.5 * (*a + b));
}

/// The distinct functionals of wells, gauges and neighbours (a gauge in a well shares its port).
pub(super) fn distinct_ports(system: &System) -> Result<Vec<&Functional>, ModelError> {
    let all: Vec<&Functional> = system
        .wells
        .iter()
        .chain(&system.gauges)
        .chain(&system.neighbours)
        .collect();
    within(system.size, &all)?;
    let mut distinct: Vec<&Functional> = Vec::new();
    for port in all {
        if !distinct.contains(&port) {
            distinct.push(port);
        }
    }
    if distinct.is_empty() {
        return Err(ModelError::Size {
            what: "wells, gauges and neighbours",
            found: 0,
            expected: 1,
        });
    }
    Ok(distinct)
}

/// Whether a port is a well's: where rates enter. All are, where the ground has none.
pub(super) fn is_well(system: &System, port: &Functional) -> bool {
    system.wells.is_empty() || system.wells.contains(port)
}

fn within(size: usize, functionals: &[&Functional]) -> Result<(), ModelError> {
    for functional in functionals {
        if functional.0.is_empty() {
            return Err(ModelError::Size {
                what: "nodes of a functional",
                found: 0,
                expected: 1,
            });
        }
        for &(node, _) in &functional.0 {
            if node >= size {
                return Err(ModelError::Size {
                    what: "a node of a functional, counted among all nodes",
                    found: node,
                    expected: size,
                });
            }
        }
    }
    Ok(())
}

fn indicators(system: &System) -> Result<Rows, ModelError> {
    let mut out = Rows::zeros(system.size, system.closed_components.len());
    for (j, component) in system.closed_components.iter().enumerate() {
        for &node in component {
            if node >= system.size {
                return Err(ModelError::Size {
                    what: "a node of a closed component, counted among all nodes",
                    found: node,
                    expected: system.size,
                });
            }
            if let Some(entry) = out.row_mut(node).get_mut(j) {
                *entry = 1.0;
            }
        }
    }
    Ok(out)
}
