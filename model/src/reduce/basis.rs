//! The rational Krylov basis: closed components first, then solutions at real shifts placed where the error is worst, then
//! truncation by the Gramian.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over ports and vectors of the basis, which are counted here"
)]

use nalgebra::DMatrix;

use super::factor::ShiftedCholesky;
use super::modal::symmetric_eigen;
use super::rows::Rows;
use super::span::Span;
use super::step::Gains;
use super::{Certificate, ReduceOptions, Reduced, ReducedBlock};
use crate::ModelError;
use crate::ground::Point;
use crate::weak_form::{Functional, SparseBlock, System};

/// Shifts used in any case, so that one lucky midpoint cannot end the search.
const FEWEST_SHIFTS: usize = 5;

/// A basis of the reduced space, with every block of the system projected on it.
pub struct Basis<'a> {
    span: Span<'a>,
    /// From the whole span to the directions kept (width of the span by number of modes).
    kept: DMatrix<f64>,
    closed: usize,
    shifts: Vec<f64>,
    worst: f64,
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
        let mut factors = ShiftedCholesky::new(system)?;
        let closed = system.closed_components.len();
        let mut span = Span::new(system, closed + ports.len() * options.max_shifts);
        span.append(factors.pencil(), indicators(system)?)?;
        if span.width() != closed {
            return Err(ModelError::Size {
                what: "closed components that do not overlap",
                found: span.width(),
                expected: closed,
            });
        }

        // Shifts are placed by bisection on a logarithmic scale. The solution at a new shift shows exactly how far the
        // basis without it was off there, which is its residual in the norm dual to K + s M; the interval with the
        // largest such error is bisected next.
        let (low, high) = options.shift_span();
        let (low, high) = (low.ln(), high.ln());
        let mut search = Search {
            span,
            factors: &mut factors,
            ports: &ports,
            peaks: Vec::new(),
            shifts: Vec::new(),
        };
        search.add(low.exp())?;
        search.add(high.exp())?;
        let mut intervals = vec![(low, high, f64::INFINITY)];
        let mut worst = f64::INFINITY;
        while search.shifts.len() < options.max_shifts
            && (search.shifts.len() < FEWEST_SHIFTS || worst > options.tolerance)
        {
            let mut at = 0;
            for (k, interval) in intervals.iter().enumerate() {
                if intervals.get(at).is_some_and(|a| interval.2 > a.2) {
                    at = k;
                }
            }
            let (from, to, _) = intervals.swap_remove(at);
            let middle = 0.5 * (from + to);
            let error = search.add(middle.exp())?;
            intervals.push((from, middle, error));
            intervals.push((middle, to, error));
            worst = intervals.iter().map(|i| i.2).fold(0.0, f64::max);
        }
        let Search {
            span,
            shifts,
            peaks,
            ..
        } = search;
        let kept = leading_directions(&span, closed, &ports, &peaks, options)?;
        Ok(Self {
            span,
            kept,
            closed,
            shifts,
            worst,
        })
    }

    /// The shifts \[1/s\] in the order in which they were placed.
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

    /// Largest error found at a shift by the basis without it, as a share of that port's own response (in the energy norm).
    #[must_use]
    pub fn worst_at_shifts(&self) -> f64 {
        self.worst
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
            wells: ports(&system.wells.iter().collect::<Vec<_>>())?,
            gauges: ports(&system.gauges.iter().collect::<Vec<_>>())?,
            neighbours: ports(&system.neighbours.iter().collect::<Vec<_>>())?,
            places: places.iter().map(|p| (p.0, p.1)).collect(),
            place_ports: ports(&places.iter().map(|p| &p.2).collect::<Vec<_>>())?,
            certificate: Certificate {
                ports: f64::NAN,
                random_nodes: f64::NAN,
                box_corners: None,
                full_size: system.size,
                modes: self.modes(),
                shifts: self.shifts.len(),
                times: (f64::NAN, f64::NAN),
            },
        })
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

struct Search<'a, 'b> {
    span: Span<'a>,
    factors: &'b mut ShiftedCholesky,
    ports: &'b [&'a Functional],
    /// Response of each port at itself at the slowest shift: about the peak of its step response.
    peaks: Vec<f64>,
    shifts: Vec<f64>,
}

impl Search<'_, '_> {
    /// Adds the solutions at one shift. Returns the largest error of the basis so far at that shift: the energy norm of the
    /// error of a port's solution over that of its slowest solution.
    fn add(&mut self, s: f64) -> Result<f64, ModelError> {
        self.factors.factorise(s)?;
        let mut x = Rows::sources(self.factors.pencil().size(), self.ports);
        self.factors.solve(&mut x);
        let exact: Vec<f64> = self
            .ports
            .iter()
            .enumerate()
            .map(|(j, port)| x.value(port, j))
            .collect();
        if self.peaks.is_empty() {
            self.peaks.clone_from(&exact);
        }
        let reduced = self.span.response(s, &self.span.project(self.ports))?;
        let error = exact
            .iter()
            .zip(&self.peaks)
            .enumerate()
            .map(|(j, (h, peak))| ((h - reduced[(j, j)]).max(0.0) / peak).sqrt())
            .fold(0.0, f64::max);
        self.span.append(self.factors.pencil(), x)?;
        self.shifts.push(s);
        Ok(error)
    }
}

/// Truncation: within the span, keeps the leading directions of the Gramian `sum Y(t) Y(t)^T` of all ports' step responses at
/// log-spaced times, measured in energy (K + M / slowest), each port scaled to a unit response.
///
/// Energy, because in the plane it is the measure that weighs a feature ten metres wide like one ten kilometres wide, as a
/// pressure does; storage would weigh them by area and lose the near field of every well.
fn leading_directions(
    span: &Span<'_>,
    closed: usize,
    ports: &[&Functional],
    peaks: &[f64],
    options: &ReduceOptions,
) -> Result<DMatrix<f64>, ModelError> {
    let width = span.width();
    let rest = width - closed;
    let total = |blocks: Vec<DMatrix<f64>>| {
        blocks
            .into_iter()
            .fold(DMatrix::zeros(width, width), |sum, b| sum + b)
    };
    let stiffness = total(span.stiffness());
    let (lambda, modes) =
        symmetric_eigen(&stiffness.view((closed, closed), (rest, rest)).into_owned())?;
    let lambda = lambda.map(|l| l.max(0.0));
    let energy = lambda.map(|l| (l + options.slowest.recip()).sqrt());
    let mut b = modes.tr_mul(&span.project(ports).rows(closed, rest));
    for (mut column, peak) in b.column_iter_mut().zip(peaks) {
        column /= peak.sqrt();
    }
    let (mut reach, mut count) = (DMatrix::zeros(rest, rest), 0.0);
    let overlap = &b * b.transpose();
    for t in options.truncation_times() {
        let gain = Gains::new(&lambda, t).gain.component_mul(&energy);
        for l in 0..rest {
            for k in 0..rest {
                reach[(k, l)] += gain[k] * gain[l];
            }
        }
        count += 1.0;
    }
    let gramian = overlap.component_mul(&reach) / count;
    let (sizes, directions) = symmetric_eigen(&gramian)?;
    let allowed = options.tolerance * options.tolerance;
    let (mut left, mut keep) = (0.0, rest);
    for &size in &sizes {
        left += size.max(0.0);
        if left > allowed {
            break;
        }
        keep -= 1;
    }
    let most = options
        .max_modes
        .saturating_sub(closed)
        .clamp(1, rest.max(1));
    let keep = keep.clamp(1, most).min(rest);
    // Back from energy to the coordinates of the span, orthonormal there.
    let mut leading = directions.columns(rest - keep, keep).into_owned();
    for (mut row, e) in leading.row_iter_mut().zip(&energy) {
        row /= *e;
    }
    let leading = (modes * leading).qr().q();
    let mut kept = DMatrix::zeros(width, closed + keep);
    kept.view_mut((0, 0), (closed, closed)).fill_with_identity();
    kept.view_mut((closed, closed), (rest, keep))
        .copy_from(&leading);
    Ok(kept)
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

fn within(size: usize, functionals: &[&Functional]) -> Result<(), ModelError> {
    for functional in functionals {
        for &(node, _) in &functional.0 {
            if node >= size {
                return Err(ModelError::Size {
                    what: "nodes of a functional",
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
                    what: "nodes of a closed component",
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
