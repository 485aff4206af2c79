//! Fills the span with solutions of the full system at real shifts, placed where the error is worst.

use nalgebra::DMatrix;

use super::factor::ShiftedCholesky;
use super::pencil::Pencil;
use super::rows::Rows;
use super::span::Span;
use super::{Factors, ReduceOptions};
use crate::ModelError;
use crate::weak_form::{Functional, Parameter, SparseBlock, System};

/// Shifts used in any case at the described parameters, so that one lucky midpoint cannot end the search.
const FEWEST_SHIFTS: usize = 5;
/// Shifts at most for each set of other parameters.
const SHIFTS_A_SAMPLE: usize = 5;

/// What the search found.
pub(super) struct Found<'a> {
    pub(super) span: Span<'a>,
    pub(super) shifts: Vec<f64>,
    /// Response of each port at itself at the slowest shift: about the peak of its step response.
    pub(super) peaks: Vec<f64>,
    /// Sets of parameters at which solutions were taken, the described ones first.
    pub(super) samples: Vec<Factors>,
}

/// Searches at the described parameters, then at those that differ in a way that a basis for the described ones cannot follow.
///
/// Shifts are placed by bisection on a logarithmic scale. The solution at a new shift shows exactly how far the basis
/// without it was off there, which is its residual in the norm dual to K + s M; the interval with the largest such error
/// is bisected next.
pub(super) fn search<'a>(
    system: &'a System,
    ports: &[&Functional],
    indicators: Rows,
    options: &ReduceOptions,
) -> Result<Found<'a>, ModelError> {
    let samples = samples(system, options.log_range);
    let most = options.max_shifts + SHIFTS_A_SAMPLE * samples.len();
    let closed = indicators.width;
    let mut factors = ShiftedCholesky::new(system)?;
    let mut span = Span::new(system, closed + ports.len() * most);
    span.append(factors.pencil(), indicators)?;
    if span.width() != closed {
        return Err(ModelError::Size {
            what: "closed components that do not overlap",
            found: span.width(),
            expected: closed,
        });
    }
    let mut shifts = Vec::new();
    let mut described = Sample {
        parameters: Vec::new(),
        pencil: Pencil::assemble(system, &Vec::new())?,
        ports,
        peaks: Vec::new(),
    };
    described.bisect(
        &mut span,
        &mut factors,
        &mut shifts,
        options,
        FEWEST_SHIFTS,
        options.max_shifts,
    )?;
    for parameters in &samples {
        let mut other = Sample {
            pencil: Pencil::assemble(system, parameters)?,
            parameters: parameters.clone(),
            ports,
            peaks: Vec::new(),
        };
        other.bisect(
            &mut span,
            &mut factors,
            &mut shifts,
            options,
            2,
            SHIFTS_A_SAMPLE,
        )?;
    }
    Ok(Found {
        span,
        shifts,
        peaks: described.peaks,
        samples: std::iter::once(Vec::new()).chain(samples).collect(),
    })
}

/// Sets of parameters that a basis for the described ones cannot follow.
///
/// A common factor on all conduction, or on all storage, only stretches time. So one parameter of each kind stays as it is, and
/// every other one is taken to either end of the range of its ratio to that one.
fn samples(system: &System, log_range: f64) -> Vec<Factors> {
    let mut samples = Vec::new();
    if log_range > 0.0 {
        for blocks in [&system.stiffness, &system.mass] {
            for parameter in parameters(blocks).into_iter().skip(1) {
                for sign in [-1.0, 1.0] {
                    samples.push(vec![(parameter, (2.0 * sign * log_range).exp())]);
                }
            }
        }
    }
    samples
}

/// The distinct parameters of some blocks, in order.
fn parameters(blocks: &[SparseBlock]) -> Vec<Parameter> {
    let mut distinct = Vec::new();
    for block in blocks {
        let filled = !block.matrix.as_ref().symbolic().row_idx().is_empty();
        if filled && !distinct.contains(&block.parameter) {
            distinct.push(block.parameter);
        }
    }
    distinct
}

/// The system at one set of parameters.
struct Sample<'p, 'a> {
    parameters: Factors,
    pencil: Pencil,
    ports: &'p [&'a Functional],
    peaks: Vec<f64>,
}

impl Sample<'_, '_> {
    fn bisect(
        &mut self,
        span: &mut Span<'_>,
        factors: &mut ShiftedCholesky,
        shifts: &mut Vec<f64>,
        options: &ReduceOptions,
        fewest: usize,
        most: usize,
    ) -> Result<(), ModelError> {
        let (low, high) = options.shift_span();
        let mut add = |s: f64| {
            shifts.push(s);
            self.add(span, factors, s)
        };
        let ends = f64::max(add(low)?, add(high)?);
        let (low, high) = (low.ln(), high.ln());
        let mut intervals = vec![(low, high, ends)];
        for count in 2..most {
            let (at, worst) = intervals.iter().enumerate().fold((0, 0.0), |best, (k, i)| {
                if i.2 > best.1 { (k, i.2) } else { best }
            });
            if count >= fewest && worst <= options.tolerance {
                break;
            }
            let (from, to, _) = intervals.swap_remove(at);
            let middle = 0.5 * (from + to);
            let error = add(middle.exp())?;
            intervals.push((from, middle, error));
            intervals.push((middle, to, error));
        }
        Ok(())
    }

    /// Adds the solutions at one shift. Returns the largest error of the basis so far at that shift: the energy norm of the
    /// error of a port's solution over that of its slowest solution.
    fn add(
        &mut self,
        span: &mut Span<'_>,
        factors: &mut ShiftedCholesky,
        s: f64,
    ) -> Result<f64, ModelError> {
        factors.factorise_other(&self.pencil, s)?;
        let mut x = Rows::sources(self.pencil.size(), self.ports);
        factors.solve(&mut x);
        let exact: Vec<f64> = self
            .ports
            .iter()
            .enumerate()
            .map(|(j, port)| x.value(port, j))
            .collect();
        if self.peaks.is_empty() {
            self.peaks.clone_from(&exact);
        }
        let reduced: DMatrix<f64> =
            span.response(s, &self.parameters, &span.project(self.ports))?;
        let error = exact
            .iter()
            .zip(&self.peaks)
            .zip(reduced.diagonal().iter())
            .map(|((h, peak), r)| ((h - r).max(0.0) / peak).sqrt())
            .fold(0.0, f64::max);
        span.append(factors.pencil(), x)?;
        Ok(error)
    }
}
