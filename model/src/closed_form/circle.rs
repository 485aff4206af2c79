//! A well in the middle of a round ground (van Everdingen & Hurst 1949).

use std::f64::consts::PI;

use nalgebra::Complex;

use super::bessel::{scaled_i, scaled_k};
use super::invert;

/// What the rim of a round ground does.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rim {
    /// Nothing passes.
    Closed,
    /// The pressure is held at rest.
    Held,
}

/// A round ground with a well of its own radius in the middle.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Circle {
    /// Radius of the well \[m\].
    pub inner: f64,
    /// Radius of the rim \[m\], larger.
    pub outer: f64,
    /// What the rim does.
    pub rim: Rim,
}

/// Pressure at the well under a rate into it, both as transforms: what one multiplies the rate's transform with.
///
/// Source: van Everdingen & Hurst 1949, Trans. AIME 186.
#[must_use]
pub fn circle_transfer(
    circle: &Circle,
    transmissivity: f64,
    storativity: f64,
    s: Complex<f64>,
) -> Complex<f64> {
    let root = (s * (storativity / transmissivity)).sqrt();
    let (near, far) = (root * circle.inner, root * circle.outer);
    let (k0, k1) = scaled_k(near);
    // What the rim sends back, as the factor of I0 beside K0; with all growth and decay in one exponent.
    let travel = (near - far) * 2.0;
    let back = if travel.re < -60.0 {
        Complex::new(0.0, 0.0)
    } else {
        let ((i0, i1), (far_k0, far_k1)) = (scaled_i(far), scaled_k(far));
        travel.exp()
            * match circle.rim {
                Rim::Closed => far_k1 / i1,
                Rim::Held => -far_k0 / i0,
            }
    };
    let (i0, i1) = if back == Complex::new(0.0, 0.0) {
        (back, back)
    } else {
        scaled_i(near)
    };
    (k0 + back * i0) / (near * (k1 - back * i1)) / (2.0 * PI * transmissivity)
}

/// Pressure at the well \[Pa\] a time `t` \[s\] after one m3/s began to enter it.
#[must_use]
pub fn circle_step(circle: &Circle, transmissivity: f64, storativity: f64, t: f64) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    invert(t, |s| {
        circle_transfer(circle, transmissivity, storativity, s) / s
    })
}
