//! Least squares of a few logarithms, for field cases.

use nalgebra::{DMatrix, DVector};

/// Positive parameters that bring `residuals` nearest to zero, and the root of its mean square there.
pub(crate) fn least_squares(
    start: &[f64],
    residuals: impl Fn(&[f64]) -> Vec<f64>,
) -> (Vec<f64>, f64) {
    let at = |logs: &DVector<f64>| {
        let natural: Vec<f64> = logs.iter().map(|l| l.exp()).collect();
        DVector::from_vec(residuals(&natural))
    };
    let mut logs = DVector::from_iterator(start.len(), start.iter().map(|p| p.ln()));
    let mut now = at(&logs);
    let mut damping = 1e-3;
    for _ in 0..200 {
        let mut slopes = DMatrix::zeros(now.len(), logs.len());
        for k in 0..logs.len() {
            let (mut up, mut down) = (logs.clone(), logs.clone());
            up[k] += 1e-5;
            down[k] -= 1e-5;
            slopes.set_column(k, &((at(&up) - at(&down)) / 2e-5));
        }
        let normal = slopes.transpose() * &slopes;
        let mut damped = normal.clone();
        for k in 0..logs.len() {
            damped[(k, k)] *= 1.0 + damping;
        }
        let step = damped.lu().solve(&(slopes.transpose() * &now)).unwrap();
        let next = at(&(&logs - &step));
        if next.norm_squared() <= now.norm_squared() {
            logs -= &step;
            now = next;
            damping *= 0.1;
            if step.norm() < 1e-10 {
                break;
            }
        } else {
            damping *= 10.0;
        }
    }
    let rms = (now.norm_squared() / now.len() as f64).sqrt();
    (logs.iter().map(|l| l.exp()).collect(), rms)
}
