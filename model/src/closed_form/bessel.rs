//! Modified Bessel functions of the second kind, orders zero and one, for arguments with a positive real part.

use std::f64::consts::PI;

use nalgebra::Complex;

use super::exponential_integral::EULER;

type C = Complex<f64>;

/// `K0(z)` and `K1(z)` for `Re z > 0`.
///
/// Relative error below 1e-12: power series up to `|z| = 2` (Abramowitz & Stegun 1964, 9.6.13 and 9.6.11),
/// beyond it the continued fraction of Temme 1975 (J. Comput. Phys. 19), which slows toward the imaginary axis.
#[must_use]
pub fn k0_k1(z: C) -> (C, C) {
    if z.norm() <= 2.0 {
        series(z)
    } else {
        fraction(z)
    }
}

/// `K0(x)` for `x > 0`.
#[must_use]
pub fn k0(x: f64) -> f64 {
    k0_k1(C::new(x, 0.0)).0.re
}

/// `K1(x)` for `x > 0`.
#[must_use]
pub fn k1(x: f64) -> f64 {
    k0_k1(C::new(x, 0.0)).1.re
}

fn series(z: C) -> (C, C) {
    let quarter = z * z * 0.25;
    let log = (z * 0.5).ln() + EULER;
    // (z/2)^2k / k!^2 with the harmonic number of k gives K0; its neighbour term gives K1.
    let (mut term, mut harmonic, mut k) = (C::new(1.0, 0.0), 0.0, 0.0);
    let (mut zero, mut one) = (-log, log * 2.0 - 1.0);
    while k < 40.0 {
        k += 1.0;
        term = term * quarter / (k * k);
        harmonic += 1.0 / k;
        zero += term * (-log + harmonic);
        one += term / (k + 1.0) * (log * 2.0 - (2.0 * harmonic + 1.0 / (k + 1.0)));
        if term.norm() * (1.0 + harmonic + log.norm()) < 1e-17 * zero.norm() {
            break;
        }
    }
    (zero, z.inv() + z * 0.25 * one)
}

fn fraction(z: C) -> (C, C) {
    let unit = C::new(1.0, 0.0);
    let mut b = (z + 1.0) * 2.0;
    let mut d = b.inv();
    let (mut h, mut step) = (d, d);
    let (mut q1, mut q2) = (C::new(0.0, 0.0), unit);
    let (mut c, mut a) = (0.25, -0.25);
    let mut q = C::new(0.25, 0.0);
    let mut sum = unit + q * step;
    let mut i = 1.0;
    while i < 5000.0 {
        i += 1.0;
        a -= 2.0 * (i - 1.0);
        c = -a * c / i;
        let next = (q1 - b * q2) / a;
        q1 = q2;
        q2 = next;
        q += next * c;
        b += 2.0;
        d = (b + d * a).inv();
        step = (b * d - 1.0) * step;
        h += step;
        let add = q * step;
        sum += add;
        if add.norm() < 1e-16 * sum.norm() {
            break;
        }
    }
    let zero = (C::new(PI * 0.5, 0.0) / z).sqrt() * (-z).exp() / sum;
    let one = zero * (z + 0.5 - h * 0.25) / z;
    (zero, one)
}

#[cfg(test)]
mod tests {
    use super::{C, fraction, k0, k1, series};

    #[test]
    fn agrees_with_tables() {
        // Abramowitz & Stegun 1964, tables 9.8 and 9.11 (from memory, carried to 15 digits in arbitrary precision).
        for (x, zero, one) in [
            (0.1, 2.427_069_024_702_017, 9.853_844_780_870_606),
            (1.0, 0.421_024_438_240_708_33, 0.601_907_230_197_234_6),
            (2.0, 0.113_893_872_749_533_4, 0.139_865_881_816_522_4),
            (5.0, 3.691_098_334_042_594e-3, 4.044_613_445_452_164e-3),
            (10.0, 1.778_006_231_616_765e-5, 1.864_877_345_382_558e-5),
        ] {
            assert!((k0(x) / zero - 1.0).abs() < 1e-12, "K0({x}) = {}", k0(x));
            assert!((k1(x) / one - 1.0).abs() < 1e-12, "K1({x}) = {}", k1(x));
        }
    }

    #[test]
    fn methods_meet_for_complex_arguments() {
        for turn in [-1.4f64, -0.8, 0.0, 0.5, 1.2, 1.45] {
            let z = C::from_polar(2.0, turn);
            let ((a, b), (c, d)) = (series(z), fraction(z));
            assert!((a - c).norm() < 1e-12 * a.norm(), "K0 at {z}: {a} {c}");
            assert!((b - d).norm() < 1e-12 * b.norm(), "K1 at {z}: {b} {d}");
        }
    }
}
