//! The line source in a ground that leaks to a neighbour held at rest (Hantush & Jacob 1955).

use std::f64::consts::PI;

use super::{e1, k0};

/// Nodes and weights of Gauss-Legendre quadrature with eight points, for half of the interval -1 to 1.
const GAUSS: [(f64, f64); 4] = [
    (0.183_434_642_495_649_8, 0.362_683_783_378_362),
    (0.525_532_409_916_329, 0.313_706_645_877_887_3),
    (0.796_666_477_413_626_7, 0.222_381_034_453_374_47),
    (0.960_289_856_497_536_2, 0.101_228_536_290_376_26),
];

/// Pressure at distance `r` \[m\] a time `t` \[s\] after one m3/s began to enter, where each square metre passes
/// `leakance` \[m/(Pa s)\] times the pressure to a layer held at rest.
#[must_use]
pub fn leaky(r: f64, transmissivity: f64, storativity: f64, leakance: f64, t: f64) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    let u = r * r * storativity / (4.0 * transmissivity * t);
    leaky_well_function(u, r * (leakance / transmissivity).sqrt()) / (4.0 * PI * transmissivity)
}

/// Hantush and Jacob's `W(u, b)`: the integral of `exp(-y - b^2/4y)/y` from `u` to infinity; `b = r/B`.
///
/// Error below 1e-11 of `W(u, 0)` for `u > 0`, `b >= 0`. Source: Hantush 1956, Trans. AGU 37.
#[must_use]
pub fn leaky_well_function(u: f64, b: f64) -> f64 {
    if b <= 0.0 {
        return e1(u);
    }
    if u < 0.5 * b {
        // The integrand is symmetric about y = b/2 in the logarithm of y, and 2 K0(b) in all.
        return 2.0 * k0(b) - right(0.25 * b * b / u, b);
    }
    right(u, b)
}

/// The integral from a `u` at or right of the integrand's peak, in steps of the logarithm of y.
fn right(u: f64, b: f64) -> f64 {
    let far = ((u + 45.0) / u).ln();
    let mut panels = 1.0;
    while far / panels > 0.25 {
        panels += 1.0;
    }
    let half = 0.5 * far / panels;
    let f = |v: f64| {
        let y = u * v.exp();
        (-y - 0.25 * b * b / y).exp()
    };
    let (mut sum, mut k) = (0.0, 0.0);
    while k < panels {
        let middle = (2.0 * k + 1.0) * half;
        for (x, w) in GAUSS {
            sum += w * (f(middle - half * x) + f(middle + half * x));
        }
        k += 1.0;
    }
    sum * half
}
