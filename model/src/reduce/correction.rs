//! Solves the full system at a complex point for the error of the reduced solution.

#![expect(
    clippy::indexing_slicing,
    reason = "all blocks are laid out here, with the height and width of one system and one set of ports"
)]

use faer::complex::Complex;

use super::factor::ShiftedCholesky;
use super::rows::Rows;
use crate::ModelError;

/// Iterations allowed. About ten are usual.
const STEPS: usize = 200;

/// A complex tall block, stored row by row as `[re of all columns | im of all columns]`.
#[derive(Clone)]
pub(super) struct Complexes(Rows);

impl Complexes {
    pub(super) fn new(rows: Rows) -> Self {
        Self(rows)
    }

    fn zeros_like(other: &Self) -> Self {
        Self(Rows::zeros(other.0.height, other.0.width))
    }

    fn columns(&self) -> usize {
        self.0.width / 2
    }

    /// Entry at a node in a column.
    pub(super) fn at(&self, node: usize, column: usize) -> Complex<f64> {
        let row = self.0.row(node);
        Complex::new(row[column], row[self.columns() + column])
    }

    /// Unconjugated product of each column with the same column of another block, and the conjugated one.
    fn products(&self, other: &Self) -> Vec<(Complex<f64>, f64)> {
        let p = self.columns();
        let mut out = vec![(Complex::new(0.0, 0.0), 0.0); p];
        for (a, b) in self
            .0
            .values
            .chunks_exact(2 * p)
            .zip(other.0.values.chunks_exact(2 * p))
        {
            for (j, (plain, conjugated)) in out.iter_mut().enumerate() {
                let (a_re, a_im, b_re, b_im) = (a[j], a[p + j], b[j], b[p + j]);
                plain.re += a_re * b_re - a_im * b_im;
                plain.im += a_re * b_im + a_im * b_re;
                *conjugated += a_re * b_re + a_im * b_im;
            }
        }
        out
    }

    /// Unconjugated products `self_i . other_j` of every pair of columns, by rows.
    pub(super) fn pairs(&self, other: &Self) -> Vec<Complex<f64>> {
        let p = self.columns();
        let mut out = vec![Complex::new(0.0, 0.0); p * p];
        for (a, b) in self
            .0
            .values
            .chunks_exact(2 * p)
            .zip(other.0.values.chunks_exact(2 * p))
        {
            for (i, out) in out.chunks_exact_mut(p).enumerate() {
                let (a_re, a_im) = (a[i], a[p + i]);
                for (j, out) in out.iter_mut().enumerate() {
                    out.re += a_re * b[j] - a_im * b[p + j];
                    out.im += a_re * b[p + j] + a_im * b[j];
                }
            }
        }
        out
    }

    /// `self = keep * self + factor * other`, column by column.
    fn combine(&mut self, keep: &[Complex<f64>], factor: &[Complex<f64>], other: &Self) {
        let p = self.columns();
        for (a, b) in self
            .0
            .values
            .chunks_exact_mut(2 * p)
            .zip(other.0.values.chunks_exact(2 * p))
        {
            for j in 0..p {
                let (k, f) = (keep[j], factor[j]);
                let (a_re, a_im, b_re, b_im) = (a[j], a[p + j], b[j], b[p + j]);
                a[j] = k.re * a_re - k.im * a_im + f.re * b_re - f.im * b_im;
                a[p + j] = k.re * a_im + k.im * a_re + f.re * b_im + f.im * b_re;
            }
        }
    }
}

/// `(K + z M) x`.
fn apply(factors: &ShiftedCholesky, z: Complex<f64>, x: &Complexes) -> Complexes {
    let (mut stiff, mass) = factors.pencil().both_times(&x.0);
    let p = x.columns();
    for (k, m) in stiff
        .values
        .chunks_exact_mut(2 * p)
        .zip(mass.values.chunks_exact(2 * p))
    {
        for j in 0..p {
            k[j] += z.re * m[j] - z.im * m[p + j];
            k[p + j] += z.re * m[p + j] + z.im * m[j];
        }
    }
    Complexes(stiff)
}

/// `b - (K + z M) x` for real sources b and the reduced solution x.
pub(super) fn residual(
    factors: &ShiftedCholesky,
    z: Complex<f64>,
    b: &Rows,
    x: &Complexes,
) -> Complexes {
    let mut r = apply(factors, z, x);
    let p = x.columns();
    for (i, row) in r.0.values.chunks_exact_mut(2 * p).enumerate() {
        for j in 0..p {
            row[j] = b.row(i)[j] - row[j];
            row[p + j] = -row[p + j];
        }
    }
    r
}

/// Solves `(K + z M) e = r` until the residual is at most `share` of r, by conjugate orthogonal conjugate gradients (van der Vorst and Melissen 1990), for the matrix is complex
/// symmetric, preconditioned with the real Cholesky factor at hand. With its shift near `|z|` the preconditioned spectrum
/// lies on a short segment away from zero whatever the mesh, so that a few steps do.
pub(super) fn solve(
    factors: &ShiftedCholesky,
    z: Complex<f64>,
    r: &Complexes,
    share: f64,
) -> Result<Complexes, ModelError> {
    let one = vec![Complex::new(1.0, 0.0); r.columns()];
    let mut r = r.clone();
    let mut e = Complexes::zeros_like(&r);
    let mut direction = Complexes::zeros_like(&r);
    let mut rho_before: Option<Vec<Complex<f64>>> = None;
    let mut start: Vec<f64> = Vec::new();
    let mut worst = f64::INFINITY;
    for _step in 0..STEPS {
        let mut w = r.clone();
        factors.solve(&mut w.0);
        let products = r.products(&w);
        if start.is_empty() {
            start = products.iter().map(|p| p.1).collect();
        }
        worst = products
            .iter()
            .zip(&start)
            .map(|(p, s)| if *s > 0.0 { (p.1 / s).sqrt() } else { 0.0 })
            .fold(0.0, f64::max);
        if worst <= share {
            return Ok(e);
        }
        let rho: Vec<Complex<f64>> = products.iter().map(|p| p.0).collect();
        let beta: Vec<Complex<f64>> = match &rho_before {
            Some(before) => rho
                .iter()
                .zip(before)
                .map(|(a, b)| quotient(*a, *b))
                .collect(),
            None => vec![Complex::new(0.0, 0.0); rho.len()],
        };
        direction.combine(&beta, &one, &w);
        let image = apply(factors, z, &direction);
        let alpha: Vec<Complex<f64>> = rho
            .iter()
            .zip(direction.products(&image))
            .map(|(a, (b, _))| quotient(*a, b))
            .collect();
        e.combine(&one, &alpha, &direction);
        let minus: Vec<Complex<f64>> = alpha.iter().map(|a| -a).collect();
        r.combine(&one, &minus, &image);
        rho_before = Some(rho);
    }
    Err(ModelError::NotSettled {
        what: "the check of the reduction against the full system",
        steps: STEPS,
        residual: worst,
    })
}

/// A column that is solved already gives nought over nought: nothing is left to add.
fn quotient(a: Complex<f64>, b: Complex<f64>) -> Complex<f64> {
    if b.norm_sqr() > 0.0 {
        a / b
    } else {
        Complex::new(0.0, 0.0)
    }
}
