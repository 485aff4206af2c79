//! Bayes factors of a signature with a Gaussian amplitude.
//!
//! With c and n cleared of the nuisances and amplitude variance g, the log Bayes factor of "this signature is there"
//! against "nothing" is `c^2 g / (2 (1 + g n)) - log(1 + g n) / 2`, plus `log 2 Phi(c sqrt(g / (1 + g n)))` where the sign
//! is known (the amplitude is then a truncated normal). The posterior amplitude is `c / (n + 1/g)`.

use std::sync::LazyLock;

use nalgebra::{Cholesky, DMatrix, DVector, Dyn};

/// Log Bayes factor of a signature whose sign is not known.
#[must_use]
pub fn log_bayes(c: f64, n: f64, variance: f64) -> f64 {
    let spread = 1.0 + variance * n.max(0.0);
    0.5 * c * c * variance / spread - 0.5 * spread.ln()
}

/// Log Bayes factor of a signature whose amplitude is known to be positive.
#[must_use]
pub fn log_bayes_positive(c: f64, n: f64, variance: f64) -> f64 {
    let spread = 1.0 + variance * n.max(0.0);
    log_bayes(c, n, variance)
        + std::f64::consts::LN_2
        + log_normal_cdf(c * (variance / spread).sqrt())
}

/// Log Bayes factor of a signature whose amplitude is known to lie about `expected`.
#[must_use]
pub fn log_bayes_about(c: f64, n: f64, expected: f64, variance: f64) -> f64 {
    log_bayes(c - n * expected, n, variance) + c * expected - 0.5 * n * expected * expected
}

/// The same where the amplitude is known to be positive as well: what lies below zero is cut off.
#[must_use]
pub fn log_bayes_positive_about(c: f64, n: f64, expected: f64, variance: f64) -> f64 {
    let (off, sd) = amplitude(c - n * expected, n, variance);
    log_bayes_about(c, n, expected, variance) + log_normal_cdf((expected + off) / sd)
        - log_normal_cdf(expected / variance.sqrt())
}

/// Mean and standard deviation of the amplitude's posterior.
#[must_use]
pub fn amplitude(c: f64, n: f64, variance: f64) -> (f64, f64) {
    let precision = n.max(0.0) + 1.0 / variance;
    (c / precision, precision.sqrt().recip())
}

/// Log Bayes factor of several signatures at once whose amplitudes have a joint prior of covariance G,
/// `c' (N + G^-1)^-1 c / 2 - log det(I + G N) / 2`.
///
/// Returns minus infinity where N or G is no covariance.
#[must_use]
pub fn log_bayes_joint(c: &DVector<f64>, n: &DMatrix<f64>, prior: &DMatrix<f64>) -> f64 {
    joint(c, n, prior).map_or(f64::NEG_INFINITY, |(log, _, _)| log)
}

/// [`log_bayes_joint`] with mean and covariance of the amplitudes' posterior; `None` where N or G is no covariance.
#[must_use]
pub fn joint(
    c: &DVector<f64>,
    n: &DMatrix<f64>,
    prior: &DMatrix<f64>,
) -> Option<(f64, DVector<f64>, DMatrix<f64>)> {
    let log_root = |factor: &Cholesky<f64, Dyn>| -> f64 {
        factor.l_dirty().diagonal().iter().map(|v| v.ln()).sum()
    };
    let known = Cholesky::new(prior.clone())?;
    let posterior = Cholesky::new(n + known.inverse())?;
    let mean = posterior.solve(c);
    let log = 0.5 * c.dot(&mean) - log_root(&posterior) - log_root(&known);
    Some((log, mean, posterior.inverse()))
}

/// `log(sum(exp(values)))`; minus infinity of nothing.
#[must_use]
pub fn log_sum(values: &[f64]) -> f64 {
    let largest = values.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    if largest == f64::NEG_INFINITY {
        return largest;
    }
    largest + values.iter().map(|v| (v - largest).exp()).sum::<f64>().ln()
}

/// Logarithm of the standard normal distribution function, to 1e-8.
#[must_use]
pub fn log_normal_cdf(x: f64) -> f64 {
    if x > ABOVE {
        // Less than the rounding of one.
        return 0.0;
    }
    let at = (x - BELOW) * PER_UNIT;
    if at < 0.0 {
        return computed_log_normal_cdf(x);
    }
    // Cubic Hermite interpolation: the evidence asks for it many thousand times a block.
    #[expect(
        clippy::cast_possible_truncation,
        clippy::cast_sign_loss,
        reason = "a small number, not negative"
    )]
    let cell = at as usize;
    match (TABLE.get(cell), TABLE.get(cell + 1)) {
        (Some(&(a, slope_a)), Some(&(b, slope_b))) => {
            let u = at - cell as f64;
            let v = 1.0 - u;
            let width = 1.0 / PER_UNIT;
            v * v * (1.0 + 2.0 * u) * a
                + u * u * (1.0 + 2.0 * v) * b
                + width * u * v * (v * slope_a - u * slope_b)
        }
        _ => computed_log_normal_cdf(x),
    }
}

/// Span of the table of [`log_normal_cdf`], and its entries a unit.
const BELOW: f64 = -12.0;
const ABOVE: f64 = 8.5;
const PER_UNIT: f64 = 32.0;

/// Value and slope of [`log_normal_cdf`].
static TABLE: LazyLock<Vec<(f64, f64)>> = LazyLock::new(|| {
    (0..)
        .map(|k: u32| BELOW + f64::from(k) / PER_UNIT)
        .take_while(|x| *x <= ABOVE + 1.0 / PER_UNIT)
        .map(|x| {
            let value = computed_log_normal_cdf(x);
            let density = -0.5 * x * x - 0.5 * std::f64::consts::TAU.ln();
            (value, (density - value).exp())
        })
        .collect()
});

fn computed_log_normal_cdf(x: f64) -> f64 {
    let z = -x * std::f64::consts::FRAC_1_SQRT_2;
    if z <= 0.0 {
        // erfc(z) = 2 - erfc(-z)
        (-0.5 * (scaled_erfc(-z).ln() - z * z).exp()).ln_1p()
    } else {
        scaled_erfc(z).ln() - z * z - std::f64::consts::LN_2
    }
}

/// `exp(z^2) erfc(z)` for z >= 0: Taylor series of erf below 2, Laplace's continued fraction above
/// (Abramowitz & Stegun 1964, 7.1.5 and 7.1.14).
fn scaled_erfc(z: f64) -> f64 {
    if z < 2.0 {
        let (mut term, mut sum, mut k) = (z, z, 0.0);
        while term.abs() > 1e-17 * sum.abs() && k < 200.0 {
            k += 1.0;
            term *= -z * z / k;
            sum += term / (2.0 * k + 1.0);
        }
        (z * z).exp() * (1.0 - std::f64::consts::FRAC_2_SQRT_PI * sum)
    } else {
        let mut tail = z;
        // The further out, the sooner the fraction settles.
        let levels = if z > 6.0 { 12 } else { 60 };
        for k in (1..=levels).rev() {
            tail = z + 0.5 * f64::from(k) / tail;
        }
        std::f64::consts::FRAC_2_SQRT_PI * 0.5 / tail
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn normal_cdf_has_its_known_values() {
        // Computed with arbitrary precision.
        for (x, expected) in [
            (0.0, -std::f64::consts::LN_2),
            (1.0, -0.172_753_779_023_449_88),
            (-1.0, -1.841_021_645_009_263_6),
            (-10.0, -53.231_285_151_485_04),
            (-40.0, -804.608_442_280_222_9),
            (6.0, -9.865_876_450_376_982e-10),
        ] {
            let got = log_normal_cdf(x);
            assert!(
                (got - expected).abs() <= 1e-9 * expected.abs().max(1.0),
                "{x}: {got}"
            );
        }
    }

    #[test]
    fn an_amplitude_about_a_value_integrates_the_half_line() {
        let (c, n, expected, g) = (-0.9_f64, 6.0_f64, 0.9_f64, 0.09_f64);
        let (step, mut a) = (1e-4, 5e-5);
        let (mut with, mut without) = (0.0, 0.0);
        while a < 6.0 {
            let prior = (-0.5 * (a - expected).powi(2) / g).exp() * step;
            with += (c * a - 0.5 * n * a * a).exp() * prior;
            without += prior;
            a += step;
        }
        let direct = (with / without).ln();
        assert!((log_bayes_positive_about(c, n, expected, g) - direct).abs() < 1e-6);
    }

    #[test]
    fn the_table_of_the_normal_cdf_is_close_to_the_function() {
        for k in -4_000..3_000 {
            let x = f64::from(k) * 0.003 + 1e-4;
            let (got, expected) = (log_normal_cdf(x), computed_log_normal_cdf(x));
            assert!((got - expected).abs() < 1e-8, "{x}: {got} for {expected}");
        }
    }

    #[test]
    fn one_signature_equals_the_brute_force_marginal_likelihood() {
        // Readings e = a s + noise with covariance I + W W' from nuisances: compare Gaussian densities directly.
        let s = DVector::from_vec(vec![1.0, -0.5, 2.0, 0.3]);
        let w = DMatrix::from_column_slice(4, 2, &[1.0, 1.0, 1.0, 1.0, 0.0, 1.0, 2.0, 3.0]);
        let e = DVector::from_vec(vec![0.7, -1.1, 2.4, 0.9]);
        let g = 0.8;
        let null = DMatrix::identity(4, 4) + &w * w.transpose();
        let with = &null + &s * s.transpose() * g;
        let log_density = |covariance: &DMatrix<f64>| {
            let factor = Cholesky::new(covariance.clone()).unwrap();
            -0.5 * e.dot(&factor.solve(&e)) - factor.l_dirty().diagonal().map(f64::ln).sum()
        };
        let inverse = Cholesky::new(null.clone()).unwrap();
        let c = s.dot(&inverse.solve(&e));
        let n = s.dot(&inverse.solve(&s));
        let direct = log_density(&with) - log_density(&null);
        assert!((log_bayes(c, n, g) - direct).abs() < 1e-12);
        let joint = log_bayes_joint(
            &DVector::from_element(1, c),
            &DMatrix::from_element(1, 1, n),
            &DMatrix::from_element(1, 1, g),
        );
        assert!((joint - direct).abs() < 1e-12);
    }

    #[test]
    fn known_sign_integrates_the_half_line() {
        let (c, n, g) = (1.7_f64, 2.3_f64, 0.6_f64);
        let step = 1e-4;
        let mut sum = 0.0;
        let mut a = step / 2.0;
        while a < 12.0 {
            sum += (c * a - 0.5 * n * a * a - 0.5 * a * a / g).exp() * step;
            a += step;
        }
        let direct = (2.0 * sum / (std::f64::consts::TAU * g).sqrt()).ln();
        assert!((log_bayes_positive(c, n, g) - direct).abs() < 1e-6);
    }
}
