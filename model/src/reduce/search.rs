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
/// With n shifts evenly spread over `ln(highest / lowest)` the error at any node is about this share of the peak times
/// `exp(-pi^2 n / (2 ln(4 highest / lowest)))`: the exponent is Zolotarev's for real poles (from memory), the factor was measured with some reserve.
const EVEN_ERROR: f64 = 0.1;
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
/// At the described parameters as many shifts as the tolerance asks for are spread evenly on a logarithmic scale: bisection alone
/// leaves some gaps twice as wide as others, and the widest decides the error far from the ports. What remains is
/// placed by bisection. The solution at a new shift shows exactly how far the basis without it was off there, which is its residual
/// in the norm dual to K + s M; the interval with the largest such error is bisected next.
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
    let even = even_count(options).min(options.max_shifts).max(2);
    described.fill(&mut span, &mut factors, &mut shifts, options, even)?;
    for parameters in &samples {
        let mut other = Sample {
            pencil: Pencil::assemble(system, parameters)?,
            parameters: parameters.clone(),
            ports,
            peaks: Vec::new(),
        };
        let few = ReduceOptions {
            max_shifts: SHIFTS_A_SAMPLE,
            ..options.clone()
        };
        other.fill(&mut span, &mut factors, &mut shifts, &few, 2)?;
    }
    Ok(Found {
        span,
        shifts,
        peaks: described.peaks,
        samples: std::iter::once(Vec::new()).chain(samples).collect(),
    })
}

/// Evenly spread shifts that the tolerance asks for.
fn even_count(options: &ReduceOptions) -> usize {
    let (low, high) = options.shift_span();
    let digits = (EVEN_ERROR / options.tolerance).ln().max(0.0);
    let count = 2.0 * (4.0 * high / low).ln() * digits / std::f64::consts::PI.powi(2);
    #[expect(
        clippy::cast_possible_truncation,
        clippy::cast_sign_loss,
        reason = "not negative, and of the order of the digits asked for"
    )]
    let count = count.ceil() as usize;
    count.max(FEWEST_SHIFTS)
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
    /// Takes solutions at `even` shifts spread evenly, then bisects where the error is worst, down to the tolerance or up to
    /// `options.max_shifts`.
    fn fill(
        &mut self,
        span: &mut Span<'_>,
        factors: &mut ShiftedCholesky,
        shifts: &mut Vec<f64>,
        options: &ReduceOptions,
        even: usize,
    ) -> Result<(), ModelError> {
        let (low, high) = options.shift_span();
        let (low, step) = (low.ln(), (high / low).ln() / (even - 1) as f64);
        let mut add = |at: f64| {
            shifts.push(at.exp());
            self.add(span, factors, at.exp())
        };
        // Every other one first: what those between find is the error of a spread half as dense, whose square is that of the whole.
        let mut errors = vec![1.0; even];
        for start in [0, 1] {
            for k in (start..even).step_by(2) {
                let error = add(low + step * k as f64)?;
                if let Some(kept) = errors.get_mut(k) {
                    *kept = error;
                }
            }
        }
        let between = |k: usize| {
            let seen = errors.get(k - k % 2 + 1).copied().unwrap_or(1.0);
            if even > 2 {
                seen * seen
            } else {
                errors.iter().copied().fold(seen, f64::max)
            }
        };
        let mut intervals: Vec<(f64, f64, f64)> = (0..even - 1)
            .map(|k| {
                (
                    low + step * k as f64,
                    low + step * (k + 1) as f64,
                    between(k),
                )
            })
            .collect();
        for _ in even..options.max_shifts {
            let (at, worst) = intervals.iter().enumerate().fold((0, 0.0), |best, (k, i)| {
                if i.2 > best.1 { (k, i.2) } else { best }
            });
            if worst <= options.tolerance {
                break;
            }
            let (from, to, _) = intervals.swap_remove(at);
            let middle = 0.5 * (from + to);
            let error = add(middle)?;
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
