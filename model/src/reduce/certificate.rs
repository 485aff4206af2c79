//! What the reduction costs: step responses of the reduced against the full system.
//!
//! The error of a step response is inverted from the error of its Laplace transform at complex points. Errors at real
//! shifts would flatter: the basis interpolates there.

#![expect(
    clippy::indexing_slicing,
    reason = "rows and columns run over the ports and probes laid out in this file"
)]

use faer::complex::Complex;
use nalgebra::DMatrix;

use super::basis::{distinct_ports, is_well};
use super::correction::{Complexes, residual, solve};
use super::factor::ShiftedCholesky;
use super::pencil::Pencil;
use super::rows::Rows;
use super::step::Gains;
use super::{Basis, Certificate, Factors, ReduceOptions, Reduced};
use crate::ModelError;
use crate::weak_form::{Functional, Parameter, PatchShares, System};

/// Points of a contour in the upper half plane. The quadrature is right to `exp(-2 pi points / 3)`, here 4e-7, of the
/// transform it inverts, which leaves room for cancellation at the ports, where the error is far smaller than its transform.
const POINTS: u32 = 7;
/// Residuals at the points that weigh most are reduced to this share. What is solved for is itself an error, so two or three digits are
/// plenty.
const RESIDUAL: f64 = 2e-3;
/// Random nodes lie within this many times the distance of the outermost port from the centre of ports.
const WITHIN: f64 = 1.5;
/// A response is compared with its own peak, but at least with this share of the largest response that its source has at another port:
/// what is a thousand times smaller than anything a gauge shows concerns nobody.
const FLOOR: f64 = 1e-3;

/// Corners of the box: signs of the logarithms of transmissivity and of storativity.
const CORNERS: [(f64, f64); 4] = [(1.0, 1.0), (1.0, -1.0), (-1.0, 1.0), (-1.0, -1.0)];

impl Basis<'_> {
    /// Compares step responses with those of the full system, at the described parameters and, where the options say so, at the corners of
    /// a box of them.
    ///
    /// A contour of a few complex points a time, one block of right-hand sides for all ports. Costs one sparse factorisation a
    /// time and some ten block solves a point: several times the reduction itself. The corners share the times among
    /// them, so that all four together cost as much again.
    ///
    /// # Errors
    /// Those of [`Reduced::modal`], and [`ModelError::NotSettled`] where the full system could not be solved.
    pub fn certify(
        &self,
        system: &System,
        reduced: &Reduced,
        options: &ReduceOptions,
    ) -> Result<Certificate, ModelError> {
        let patches = PatchShares::default();
        let compared = Compared {
            basis: self,
            system,
            patches: &patches,
            reduced,
            options,
        };
        let found = compared.errors(&Factors::new(), 0, 1)?;
        let mut box_corners = None;
        if let Some(corners) = options.corners {
            let mut worst = 0.0_f64;
            for (first, (t, s)) in CORNERS.into_iter().enumerate() {
                let factors = corner(
                    system,
                    (t * corners.log_transmissivity).exp(),
                    (s * corners.log_storativity).exp(),
                );
                let found = compared.errors(&factors, first, CORNERS.len())?;
                worst = worst.max(found.ports).max(found.random_nodes);
            }
            box_corners = Some(worst);
        }
        Ok(found.certificate(reduced, options, box_corners))
    }

    /// Compares the same at other parameters, those of patches among them, at every other of the times: what the reduction costs for
    /// a fitted ground. `reduced` still has its patches apart.
    ///
    /// # Errors
    /// As [`Basis::certify`].
    pub fn certify_at(
        &self,
        system: &System,
        patches: &PatchShares,
        reduced: &Reduced,
        options: &ReduceOptions,
        factors: &Factors,
    ) -> Result<Certificate, ModelError> {
        let compared = Compared {
            basis: self,
            system,
            patches,
            reduced,
            options,
        };
        let found = compared.errors(factors, 1, 2)?;
        Ok(found.certificate(reduced, options, None))
    }
}

/// Factors of one corner, on every transmissivity and storativity that the system has.
fn corner(system: &System, transmissivity: f64, storativity: f64) -> Factors {
    let mut factors = Factors::new();
    for block in system.mass.iter().chain(&system.stiffness) {
        let factor = match block.parameter {
            Parameter::Transmissivity(_) | Parameter::ZoneTransmissivity(_) => transmissivity,
            Parameter::Storativity(_) | Parameter::ZoneStorativity(_) => storativity,
            _ => continue,
        };
        if !factors.iter().any(|f| f.0 == block.parameter) {
            factors.push((block.parameter, factor));
        }
    }
    factors
}

/// Largest errors of a comparison.
#[derive(Debug, Clone, Copy, Default)]
struct Errors {
    ports: f64,
    random_nodes: f64,
    leaks: f64,
}

impl Errors {
    fn certificate(
        self,
        reduced: &Reduced,
        options: &ReduceOptions,
        box_corners: Option<f64>,
    ) -> Certificate {
        Certificate {
            ports: self.ports,
            random_nodes: self.random_nodes,
            leaks: self.leaks,
            box_corners,
            times: options.checked_span(),
            ..reduced.certificate.clone()
        }
    }
}

/// A reduced and a full system that are compared.
struct Compared<'a> {
    basis: &'a Basis<'a>,
    system: &'a System,
    patches: &'a PatchShares,
    reduced: &'a Reduced,
    options: &'a ReduceOptions,
}

impl Compared<'_> {
    /// Largest errors at every `step`-th of the times, from number `first` on. Peaks are sought at all of them.
    fn errors(&self, factors: &Factors, first: usize, step: usize) -> Result<Errors, ModelError> {
        let (system, options) = (self.system, self.options);
        let ports = distinct_ports(system)?;
        let probes: Vec<Functional> = random_nodes(system, &ports, options.checked_nodes)
            .into_iter()
            .map(|node| Functional(vec![(node, 1.0)]))
            .collect();
        let seen: Vec<&Functional> = ports.iter().copied().chain(&probes).collect();
        let mut full =
            ShiftedCholesky::of(Pencil::assemble_patched(system, self.patches, factors)?)?;
        let (lambda, vectors) = self.reduced.pencil(factors)?;
        let at_modes = vectors.tr_mul(&self.basis.coordinates(&seen));
        let b = Rows::sources(system.size, &ports);
        let mut peaks = DMatrix::zeros(seen.len(), ports.len());
        let mut worst = DMatrix::zeros(seen.len(), ports.len());
        for (count, t) in options.checked_times().into_iter().enumerate() {
            let gains = Gains::new(&lambda, t);
            for i in 0..seen.len() {
                for j in 0..ports.len() {
                    let response: f64 = (0..lambda.len())
                        .map(|k| at_modes[(k, i)] * at_modes[(k, j)] * gains.gain[k])
                        .sum();
                    peaks[(i, j)] = f64::max(peaks[(i, j)], response.abs());
                }
            }
            if count % step != first % step {
                continue;
            }
            let contour = contour(t);
            // The real shift of the preconditioner is near the points that weigh most; those further out need fewer digits.
            let heaviest = contour.iter().map(|c| c.1.norm()).fold(0.0, f64::max);
            full.factorise(contour[1].0.norm())?;
            let mut error = DMatrix::zeros(seen.len(), ports.len());
            for (z, weight) in contour {
                let x = Complexes::new(solution(
                    self.basis,
                    &lambda,
                    &vectors,
                    &at_modes,
                    ports.len(),
                    z,
                ));
                let r = residual(&full, z, &b, &x);
                let e = solve(&full, z, &r, RESIDUAL * heaviest / weight.norm())?;
                // Between ports the error is r_i . e_j, because the residual is orthogonal to the basis: this form squares the
                // accuracy of e.
                for (k, pair) in r.pairs(&e).into_iter().enumerate() {
                    error[(k / ports.len(), k % ports.len())] += (weight * pair).im;
                }
                for (i, functional) in seen.iter().enumerate().skip(ports.len()) {
                    for j in 0..ports.len() {
                        for &(node, share) in &functional.0 {
                            error[(i, j)] += share * (weight * e.at(node, j)).im;
                        }
                    }
                }
            }
            worst.zip_apply(&error, |w: &mut f64, e: f64| *w = w.max(e.abs()));
        }
        let mut found = Errors::default();
        for (j, port) in ports.iter().enumerate() {
            let elsewhere = (0..ports.len()).filter(|&i| i != j || ports.len() == 1);
            let floor = FLOOR * elsewhere.map(|i| peaks[(i, j)]).fold(0.0, f64::max);
            for i in 0..seen.len() {
                let share = worst[(i, j)] / f64::max(peaks[(i, j)], floor);
                let largest = if i < ports.len() {
                    &mut found.ports
                } else if is_well(system, port) {
                    &mut found.random_nodes
                } else {
                    &mut found.leaks
                };
                *largest = largest.max(share);
            }
        }
        // What a gauge in a well shows of a leak is a well's response read the other way.
        found.leaks = found.leaks.max(found.random_nodes);
        Ok(found)
    }
}

/// The reduced solution for unit sources at the first `count` functionals, lifted to the nodes: `[re | im]`.
fn solution(
    basis: &Basis<'_>,
    lambda: &nalgebra::DVector<f64>,
    vectors: &DMatrix<f64>,
    at_modes: &DMatrix<f64>,
    count: usize,
    z: Complex<f64>,
) -> Rows {
    let mut y = DMatrix::zeros(lambda.len(), 2 * count);
    for (k, l) in lambda.iter().enumerate() {
        let gain = (z + l).inv();
        for j in 0..count {
            y[(k, j)] = gain.re * at_modes[(k, j)];
            y[(k, count + j)] = gain.im * at_modes[(k, j)];
        }
    }
    basis.lift(&(vectors * y))
}

/// Points z of the Bromwich integral at time t and their weights: `y(t) = sum Im(weight Y(z))` inverts `Y(z) / z`, the
/// transform of a step response. The contour is the parabola of Weideman and Trefethen (2007, Math. Comp. 76).
fn contour(t: f64) -> Vec<(Complex<f64>, Complex<f64>)> {
    let n = f64::from(POINTS);
    let (h, mu) = (3.0 / n, std::f64::consts::PI * n / (12.0 * t));
    (0..POINTS)
        .map(|k| {
            let w = Complex::new(1.0, (f64::from(k) + 0.5) * h);
            let z = w * w * mu;
            let slope = w * Complex::new(0.0, 2.0 * mu);
            let weight = (z * t).exp() / z * slope * (h / std::f64::consts::PI);
            (z, weight)
        })
        .collect()
}

/// Nodes chosen at random with a fixed seed, among those near the ports.
fn random_nodes(system: &System, ports: &[&Functional], count: usize) -> Vec<usize> {
    let at = |node: usize| system.nodes.get(node).map_or([0.0, 0.0], |n| n.0);
    let spots: Vec<[f64; 2]> = ports
        .iter()
        .filter_map(|p| p.0.first().map(|&(node, _)| at(node)))
        .collect();
    let mut centre = [0.0, 0.0];
    for spot in &spots {
        for (c, x) in centre.iter_mut().zip(spot) {
            *c += x;
        }
    }
    #[expect(clippy::cast_precision_loss, reason = "a handful of ports")]
    let share = 1.0 / spots.len().max(1) as f64;
    let centre = centre.map(|c| c * share);
    let distance = |x: [f64; 2]| (x[0] - centre[0]).hypot(x[1] - centre[1]);
    let reach = spots.iter().map(|&s| distance(s)).fold(0.0, f64::max);
    let mut near: Vec<usize> = (0..system.size)
        .filter(|&i| reach == 0.0 || distance(at(i)) <= WITHIN * reach)
        .collect();
    let mut state = 0x9e37_79b9_7f4a_7c15_u64;
    let mut chosen = Vec::new();
    while chosen.len() < count && !near.is_empty() {
        // Xorshift (Marsaglia 2003).
        state ^= state << 13;
        state ^= state >> 7;
        state ^= state << 17;
        let count = u64::try_from(near.len()).unwrap_or(u64::MAX);
        let at = usize::try_from(state % count).unwrap_or(0);
        chosen.push(near.swap_remove(at));
    }
    chosen
}
