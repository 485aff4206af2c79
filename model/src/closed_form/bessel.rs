//! Modified Bessel functions, orders zero and one, for arguments with a positive real part.

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
        let (zero, one) = fraction(z);
        let decay = (-z).exp();
        (zero * decay, one * decay)
    }
}

/// `exp(z) K0(z)` and `exp(z) K1(z)` for `Re z > 0`, finite however large `z` is. Error as for [`k0_k1`].
#[must_use]
pub fn scaled_k(z: C) -> (C, C) {
    if z.norm() <= 2.0 {
        let (zero, one) = series(z);
        let growth = z.exp();
        (zero * growth, one * growth)
    } else {
        fraction(z)
    }
}

/// `exp(-z) I0(z)` and `exp(-z) I1(z)` for `Re z > 0`, the modified functions of the first kind.
///
/// Relative error below 1e-11 for `|arg z| < 1.5`: the ratio `I1/I0` by its continued fraction (Abramowitz & Stegun
/// 1964, 9.6.26, taken as a recurrence) and the Wronskian `I0 K1 + I1 K0 = 1/z` (9.6.15).
#[must_use]
pub fn scaled_i(z: C) -> (C, C) {
    let ratio = ratio_i(z);
    let (k0, k1) = scaled_k(z);
    let zero = (z * (k1 + ratio * k0)).inv();
    (zero, ratio * zero)
}

/// `I1(z)/I0(z) = 1/(2/z + 1/(4/z + 1/(6/z + ...)))`, evaluated from far inside.
fn ratio_i(z: C) -> C {
    let two = z.inv() * 2.0;
    // Terms settle once the index has passed |z|; the share beyond falls faster than any power.
    let mut k = (2.0 * z.norm()).ceil().min(4000.0) + 30.0;
    let mut tail = C::new(0.0, 0.0);
    while k > 0.0 {
        tail = (two * k + tail).inv();
        k -= 1.0;
    }
    tail
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

/// `exp(z)` times the functions.
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
    let zero = (C::new(PI * 0.5, 0.0) / z).sqrt() / sum;
    let one = zero * (z + 0.5 - h * 0.25) / z;
    (zero, one)
}

#[cfg(test)]
mod tests {
    use super::{C, fraction, k0, k1, scaled_i, scaled_k, series};

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
            let (c, d) = (c * (-z).exp(), d * (-z).exp());
            assert!((a - c).norm() < 1e-12 * a.norm(), "K0 at {z}: {a} {c}");
            assert!((b - d).norm() < 1e-12 * b.norm(), "K1 at {z}: {b} {d}");
        }
    }
    #[test]
    fn first_kind_agrees_with_tables_and_stays_finite() {
        // Abramowitz & Stegun 1964, table 9.8, and 9.7.1 far out (from memory, carried to 15 digits).
        for (x, zero, one) in [
            (0.1, 1.002_501_562_934_096, 0.050_062_526_047_092_69),
            (1.0, 1.266_065_877_752_008_4, 0.565_159_103_992_485),
            (2.0, 2.279_585_302_336_067, 1.590_636_854_637_329),
            (5.0, 27.239_871_823_604_442, 24.335_642_142_450_53),
            (20.0, 43_558_282.559_553_53, 42_454_973.385_127_77),
        ] {
            let (i0, i1) = scaled_i(C::new(x, 0.0));
            assert!((i0.re * x.exp() / zero - 1.0).abs() < 1e-12, "I0({x})");
            assert!((i1.re * x.exp() / one - 1.0).abs() < 1e-12, "I1({x})");
        }
        let x = 5000.0;
        let (i0, _) = scaled_i(C::new(x, 0.0));
        let far = (2.0 * std::f64::consts::PI * x).sqrt().recip() * (1.0 + 0.125 / x);
        assert!((i0.re / far - 1.0).abs() < 1e-8, "{i0}");
        assert!(scaled_k(C::new(x, 0.0)).0.re > 0.0);
    }

    #[test]
    fn first_kind_has_its_power_series_for_complex_arguments() {
        for turn in [-1.48f64, -0.9, 0.3, 1.1, 1.48] {
            for size in [0.3, 2.5, 9.0] {
                let z = C::from_polar(size, turn);
                let quarter = z * z * 0.25;
                let (mut term, mut zero, mut one) =
                    (C::new(1.0, 0.0), C::new(0.0, 0.0), C::new(0.0, 0.0));
                for k in 0..60 {
                    let k = f64::from(k);
                    zero += term;
                    one += term * z * 0.5 / (k + 1.0);
                    term = term * quarter / ((k + 1.0) * (k + 1.0));
                }
                let (i0, i1) = scaled_i(z);
                let (i0, i1) = (i0 * z.exp(), i1 * z.exp());
                assert!(
                    (i0 - zero).norm() < 1e-11 * zero.norm().max(1e-2),
                    "I0 at {z}: {i0} {zero}"
                );
                assert!(
                    (i1 - one).norm() < 1e-11 * one.norm().max(1e-2),
                    "I1 at {z}: {i1} {one}"
                );
            }
        }
    }
}
