//! The steady covariance of a time-invariant Kalman filter, by doubling.
//!
//! `P = F P F' - F P H' (H P H' + R)^-1 H P F' + Q` (Kalman 1960). The structure-preserving doubling algorithm
//! (Chu, Fan, Lin & Wang 2004, Int. J. Control 77) squares the closed loop at every step, so a memory of thousands of
//! blocks takes about a dozen steps.

use nalgebra::DMatrix;

use crate::ModelError;

/// Steps allowed; each doubles the time covered.
const STEPS: usize = 40;

/// Covariance of the state before a reading, in the steady state.
///
/// # Errors
/// [`ModelError::NotPositive`] where a matrix cannot be factorised, [`ModelError::NotSettled`] where doubling does not
/// converge.
pub(crate) fn steady(
    f: &DMatrix<f64>,
    h: &DMatrix<f64>,
    q: &DMatrix<f64>,
    r: &DMatrix<f64>,
) -> Result<DMatrix<f64>, ModelError> {
    let n = f.nrows();
    let identity = DMatrix::<f64>::identity(n, n);
    let inverse = r.clone().cholesky().ok_or(ModelError::NotPositive {
        what: "the noise of the gauges",
    })?;
    let mut a = f.transpose();
    let mut g = h.transpose() * inverse.solve(h);
    let mut p = q.clone();
    let mut change = f64::INFINITY;
    for _ in 0..STEPS {
        let loop_matrix = (&identity + &g * &p).lu();
        let singular = ModelError::NotPositive {
            what: "the closed loop of the filter",
        };
        let wa = loop_matrix.solve(&a).ok_or(singular.clone())?;
        let wg = loop_matrix.solve(&g).ok_or(singular)?;
        let step = a.transpose() * &p * &wa;
        g += &a * wg * a.transpose();
        a = &a * wa;
        p += &step;
        p = (&p + p.transpose()) * 0.5;
        g = (&g + g.transpose()) * 0.5;
        change = step.amax() / p.amax().max(f64::MIN_POSITIVE);
        if !change.is_finite() {
            return Err(ModelError::NotFinite("the filter's covariance"));
        }
        if change < 1e-12 {
            return Ok(p);
        }
    }
    Err(ModelError::NotSettled {
        what: "the filter's covariance",
        steps: STEPS,
        residual: change,
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn doubling_equals_the_plain_recursion() {
        let f = DMatrix::from_row_slice(2, 2, &[0.95, 0.2, 0.0, 0.9]);
        let h = DMatrix::from_row_slice(1, 2, &[1.0, 0.5]);
        let q = DMatrix::from_row_slice(2, 2, &[0.0, 0.0, 0.0, 0.3]);
        let r = DMatrix::from_element(1, 1, 2.0);
        let mut p = DMatrix::<f64>::identity(2, 2);
        for _ in 0..2000 {
            let s = &h * &p * h.transpose() + &r;
            let k = &p * h.transpose() / s[(0, 0)];
            p = &f * (&p - &k * &h * &p) * f.transpose() + &q;
        }
        let direct = steady(&f, &h, &q, &r).unwrap();
        assert!((direct - p).amax() < 1e-9);
    }

    #[test]
    fn scalar_random_walk_has_the_closed_form() {
        // p = q/2 (1 + sqrt(1 + 4 r/q)): the local level model (Muth 1960).
        let (q, r) = (0.04_f64, 1.0_f64);
        let one = |v: f64| DMatrix::from_element(1, 1, v);
        let p = steady(&one(1.0), &one(1.0), &one(q), &one(r)).unwrap();
        let exact = q / 2.0 * (1.0 + (1.0 + 4.0 * r / q).sqrt());
        assert!((p[(0, 0)] - exact).abs() < 1e-10);
    }
}
