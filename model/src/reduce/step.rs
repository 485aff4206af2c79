//! Exact steps of the modal form under a rate that is held, and its step responses.

use nalgebra::{DVector, DVectorView};

use super::Modal;

/// `exp(-40)` is a twentieth of a rounding error of one.
const GONE: f64 = 40.0;

/// What a held rate does to each mode over a step of one length, and to its mean over that step.
///
/// With `z = lambda dt` and a forcing `f = b . u` held over the step,
/// `x(dt) = decay x(0) + gain f` and `mean of x = mean_decay x(0) + mean_gain f`.
/// All four are well conditioned for every z from zero up.
#[derive(Debug, Clone, PartialEq)]
pub struct Gains {
    /// `exp(-z)`.
    pub decay: DVector<f64>,
    /// `(1 - exp(-z)) / lambda` \[s\], `dt` where lambda is zero.
    pub gain: DVector<f64>,
    /// `(1 - exp(-z)) / z`, one where lambda is zero.
    pub mean_decay: DVector<f64>,
    /// `(dt - gain) / (lambda dt)` \[s\], `dt / 2` where lambda is zero.
    pub mean_gain: DVector<f64>,
}

impl Gains {
    /// Gains of modes that decay at `lambda` \[1/s\] over a step of `dt` \[s\], both not negative.
    #[must_use]
    pub fn new(lambda: &DVector<f64>, dt: f64) -> Self {
        Self {
            decay: lambda.map(|l| decay_and_gain(l, dt).0),
            gain: lambda.map(|l| decay_and_gain(l, dt).1),
            mean_decay: lambda.map(|l| mean_of_decay(l * dt)),
            mean_gain: lambda.map(|l| dt * mean_of_growth(l * dt)),
        }
    }
}

/// `exp(-lambda dt)` and `(1 - exp(-lambda dt)) / lambda`.
pub(super) fn decay_and_gain(lambda: f64, dt: f64) -> (f64, f64) {
    let z = lambda * dt;
    if z > GONE {
        return (0.0, lambda.recip());
    }
    if z < f64::MIN_POSITIVE {
        return (1.0, dt);
    }
    let less = (-z).exp_m1();
    (1.0 + less, -less / lambda)
}

/// `(1 - exp(-z)) / z`.
fn mean_of_decay(z: f64) -> f64 {
    if z > f64::MIN_POSITIVE {
        -(-z).exp_m1() / z
    } else {
        1.0
    }
}

/// `(1 - (1 - exp(-z)) / z) / z`.
fn mean_of_growth(z: f64) -> f64 {
    if z >= 1.0 {
        return (1.0 - mean_of_decay(z)) / z;
    }
    // The quotient cancels for small z; its Taylor series sum (-z)^k / (k + 2)! does not, and its 18th term is below rounding.
    let (mut sum, mut k) = (1.0, 19.0);
    while k > 2.5 {
        sum = 1.0 - z / k * sum;
        k -= 1.0;
    }
    sum / 2.0
}

impl Modal {
    /// Number of modes.
    #[must_use]
    pub fn modes(&self) -> usize {
        self.lambda.len()
    }

    /// Gains over a step of `dt` \[s\].
    #[must_use]
    pub fn gains(&self, dt: f64) -> Gains {
        Gains::new(&self.lambda, dt)
    }

    /// Pressure \[Pa per m3/s\] at a functional, `t` \[s\] after a unit rate began at a port and held.
    ///
    /// Functional and port are columns of the port matrices; the answer is the same with the two exchanged. Zero before `t = 0`.
    #[must_use]
    pub fn step_response(
        &self,
        functional: DVectorView<'_, f64>,
        port: DVectorView<'_, f64>,
        t: f64,
    ) -> f64 {
        if t <= 0.0 {
            return 0.0;
        }
        self.sum(functional, port, |l| decay_and_gain(l, t).1)
    }

    /// Mean of [`Modal::step_response`] over `t0..t1` \[s\], with `0 <= t0 < t1`: what a block mean shows.
    #[must_use]
    pub fn mean_step_response(
        &self,
        functional: DVectorView<'_, f64>,
        port: DVectorView<'_, f64>,
        t0: f64,
        t1: f64,
    ) -> f64 {
        let d = t1 - t0;
        self.sum(functional, port, |l| {
            let (decay, gain) = decay_and_gain(l, t0);
            gain + decay * d * mean_of_growth(l * d)
        })
    }

    fn sum(
        &self,
        functional: DVectorView<'_, f64>,
        port: DVectorView<'_, f64>,
        gain: impl Fn(f64) -> f64,
    ) -> f64 {
        self.lambda
            .iter()
            .zip(functional.iter().zip(port.iter()))
            .map(|(&l, (c, b))| c * b * gain(l))
            .sum()
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use nalgebra::DMatrix;
    use proptest::prelude::*;

    #[test]
    fn the_two_means_meet_their_limits_and_each_other_where_series_and_quotient_join() {
        assert_eq!(mean_of_decay(0.0), 1.0);
        assert_eq!(mean_of_growth(0.0), 0.5);
        assert_eq!(decay_and_gain(0.0, 7.0), (1.0, 7.0));
        assert_eq!(decay_and_gain(1e-320, 7.0), (1.0, 7.0));
        assert_eq!(decay_and_gain(2.0, 1e3), (0.0, 0.5));
        let (decay, gain) = decay_and_gain(1.0, 40.0);
        assert!((decay - (-40.0_f64).exp()).abs() < 1e-16 && (gain - 1.0).abs() < 1e-16);
        let below = mean_of_growth(1.0 - 1e-15);
        assert!((below - mean_of_growth(1.0)).abs() < 1e-15);
        // e^-1 exactly: 1 - (1 - e^-1) = e^-1.
        assert!((mean_of_growth(1.0) - (-1.0_f64).exp()).abs() < 1e-16);
        // Small z: 1/2 - z/6 + z^2/24.
        let z = 1e-5;
        assert!((mean_of_growth(z) - (0.5 - z / 6.0 + z * z / 24.0)).abs() < 1e-16);
    }

    fn one_mode(lambda: f64) -> Modal {
        let one = || DMatrix::from_element(1, 1, 1.0);
        Modal {
            lambda: DVector::from_element(1, lambda),
            wells: one(),
            gauges: one(),
            neighbours: one(),
            places: one(),
        }
    }

    proptest! {
        #[test]
        fn one_step_equals_many_small_ones(exponent in -12.0..1.0_f64, dt in 1.0..1e5_f64, x0 in -2.0..2.0_f64, f in -2.0..2.0_f64) {
            let lambda = DVector::from_element(1, 10_f64.powf(exponent));
            let (whole, part) = (Gains::new(&lambda, dt), Gains::new(&lambda, dt / 64.0));
            let (mut x, mut mean) = (x0, 0.0);
            for _ in 0..64 {
                mean += (part.mean_decay[0] * x + part.mean_gain[0] * f) / 64.0;
                x = part.decay[0] * x + part.gain[0] * f;
            }
            let scale = x0.abs() + f.abs() * whole.gain[0];
            prop_assert!((x - whole.decay[0] * x0 - whole.gain[0] * f).abs() <= 1e-13 * scale);
            prop_assert!((mean - whole.mean_decay[0] * x0 - whole.mean_gain[0] * f).abs() <= 1e-13 * scale);
        }

        #[test]
        fn the_mean_response_is_the_mean_of_the_response(exponent in -9.0..0.0_f64, t0 in 0.0..1e4_f64, d in 1.0..1e4_f64) {
            let modal = one_mode(10_f64.powf(exponent));
            let (c, b) = (modal.gauges.column(0), modal.wells.column(0));
            // Gauss-Legendre, 5 points on 200 panels.
            let nodes = [(0.0, 0.568_888_888_888_889), (0.538_469_310_105_683, 0.478_628_670_499_366), (0.906_179_845_938_664, 0.236_926_885_056_189)];
            let (panels, mut sum) = (200, 0.0);
            for p in 0..panels {
                let (h, mid) = (d / f64::from(panels) / 2.0, t0 + d * (f64::from(p) + 0.5) / f64::from(panels));
                for (x, w) in nodes {
                    let both = modal.step_response(c, b, mid + x * h) + modal.step_response(c, b, mid - x * h);
                    sum += h * w * both * if x == 0.0 { 0.5 } else { 1.0 };
                }
            }
            let mean = modal.mean_step_response(c, b, t0, t0 + d);
            prop_assert!((mean - sum / d).abs() <= 1e-8 * mean, "{mean} {}", sum / d);
        }
    }
}
