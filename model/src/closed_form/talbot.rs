//! Numerical inversion of Laplace transforms on a fixed Talbot contour.

use std::f64::consts::PI;

use nalgebra::Complex;

/// Points `s` and weights `w` such that `f(t)` is the sum of the real parts of `w F(s)`.
///
/// Fixed contour of Talbot as given by Abate & Valko 2004 (Int. J. Numer. Meth. Engng 60). The error falls as
/// `10^(-0.6 points)` until rounding, about `1e-16 exp(0.4 points)` of the largest term, takes over: 16 to 20
/// points are best in double precision. `t` must be positive.
#[must_use]
pub fn talbot(t: f64, points: u32) -> Vec<(Complex<f64>, Complex<f64>)> {
    let m = f64::from(points.max(2));
    let r = 2.0 * m / (5.0 * t);
    let mut all = vec![(
        Complex::new(r, 0.0),
        Complex::new(0.5 * r / m * (r * t).exp(), 0.0),
    )];
    let mut k = 1.0;
    while k < m {
        let angle = k * PI / m;
        let cot = angle.tan().recip();
        let s = Complex::new(r * angle * cot, r * angle);
        let slope = Complex::new(1.0, angle + (angle * cot - 1.0) * cot);
        all.push((s, (s * t).exp() * slope * (r / m)));
        k += 1.0;
    }
    all
}

/// Points of [`invert`].
const POINTS: u32 = 18;

/// `f(t)` from its transform, with 18 points.
pub fn invert(t: f64, transform: impl Fn(Complex<f64>) -> Complex<f64>) -> f64 {
    sum(t, POINTS, transform)
}

/// As [`invert`], with a bound on its error.
///
/// The bound is twice the difference to three points fewer, which are some sixty times worse while the contour's
/// error rules, plus the rounding of the sum's largest term. It holds where the transform has no singularity off
/// the negative real axis, as every response of diffusion.
pub fn invert_with_error(t: f64, transform: impl Fn(Complex<f64>) -> Complex<f64>) -> (f64, f64) {
    let (mut value, mut largest) = (0.0, 0.0f64);
    for (s, w) in talbot(t, POINTS) {
        let term = w * transform(s);
        value += term.re;
        largest = largest.max(term.norm());
    }
    let fewer = sum(t, POINTS - 3, transform);
    (
        value,
        2.0 * (value - fewer).abs() + 1e2 * f64::EPSILON * largest,
    )
}

fn sum(t: f64, points: u32, transform: impl Fn(Complex<f64>) -> Complex<f64>) -> f64 {
    talbot(t, points)
        .into_iter()
        .map(|(s, w)| (w * transform(s)).re)
        .sum()
}

#[cfg(test)]
mod tests {
    use super::{invert, invert_with_error};
    use crate::closed_form::{e1, k0_k1};

    #[test]
    fn known_pairs() {
        for t in [1e-3, 0.7, 40.0, 1e6] {
            assert!((invert(t, |s| (s + 1.0).inv()) - (-t).exp()).abs() < 1e-8);
            assert!((invert(t, |s| (s * s).inv()) / t - 1.0).abs() < 1e-8);
            // The line source: K0(sqrt s)/s gives E1(1/4t)/2.
            let line = invert(t, |s| k0_k1(s.sqrt()).0 / s);
            assert!((line - 0.5 * e1(0.25 / t)).abs() < 1e-8, "{t}: {line}");
        }
    }

    #[test]
    fn the_error_told_is_no_smaller_than_the_error_made_and_not_idle() {
        for t in [1e-3, 0.7, 40.0, 1e6] {
            let (decay, told) = invert_with_error(t, |s| (s + 1.0).inv());
            assert!(
                (decay - (-t).exp()).abs() <= told && told < 1e-6,
                "{t}: {told:e}"
            );
            let (line, told) = invert_with_error(t, |s| k0_k1(s.sqrt()).0 / s);
            assert!(
                (line - 0.5 * e1(0.25 / t)).abs() <= told && told < 1e-6,
                "{t}: {told:e}"
            );
        }
    }
}
