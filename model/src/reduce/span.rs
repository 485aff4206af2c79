//! A growing M-orthonormal basis and the projection of every block of the system on it.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over the width of the basis and of the block, which are laid out here"
)]

use faer::linalg::matmul::matmul;
use faer::sparse::SparseColMatRef;
use faer::{Accum, Mat, MatRef, Par};
use nalgebra::{Cholesky, DMatrix};

use super::Factors;
use super::modal::{factor_on, symmetric_eigen};
use super::pencil::{Pencil, multiply};
use super::rows::Rows;
use crate::ModelError;
use crate::weak_form::{Functional, SparseBlock, System};

/// A direction is dropped when less than this share of its length is new.
const DEPENDENT: f64 = 1e-7;

/// The basis V and `V^T A V` for every block A of the system.
pub(super) struct Span<'a> {
    system: &'a System,
    vectors: Mat<f64>,
    width: usize,
    mass: Vec<Mat<f64>>,
    stiffness: Vec<Mat<f64>>,
}

impl<'a> Span<'a> {
    /// An empty basis with room for `capacity` vectors.
    pub(super) fn new(system: &'a System, capacity: usize) -> Self {
        let room = |blocks: &[SparseBlock]| vec![Mat::zeros(capacity, capacity); blocks.len()];
        Self {
            system,
            vectors: Mat::zeros(system.size, capacity),
            width: 0,
            mass: room(&system.mass),
            stiffness: room(&system.stiffness),
        }
    }

    pub(super) fn width(&self) -> usize {
        self.width
    }

    fn vectors(&self) -> MatRef<'_, f64> {
        self.vectors.as_ref().subcols(0, self.width)
    }

    pub(super) fn mass(&self) -> Vec<DMatrix<f64>> {
        self.mass.iter().map(|m| self.leading(m)).collect()
    }

    pub(super) fn stiffness(&self) -> Vec<DMatrix<f64>> {
        self.stiffness.iter().map(|m| self.leading(m)).collect()
    }

    fn leading(&self, block: &Mat<f64>) -> DMatrix<f64> {
        DMatrix::from_fn(self.width, self.width, |i, j| {
            0.5 * (block[(i, j)] + block[(j, i)])
        })
    }

    /// `V^T b` of functionals, as columns.
    pub(super) fn project(&self, functionals: &[&Functional]) -> DMatrix<f64> {
        let mut out = DMatrix::zeros(self.width, functionals.len());
        for (j, functional) in functionals.iter().enumerate() {
            for &(node, weight) in &functional.0 {
                for k in 0..self.width {
                    out[(k, j)] += weight * self.vectors[(node, k)];
                }
            }
        }
        out
    }

    /// `V y`.
    pub(super) fn combine(&self, y: &DMatrix<f64>) -> Rows {
        let y = Mat::from_fn(y.nrows(), y.ncols(), |i, j| y[(i, j)]);
        let mut out = Rows::zeros(self.system.size, y.ncols());
        matmul(
            out.matrix_mut(),
            Accum::Replace,
            self.vectors(),
            y.as_ref(),
            1.0,
            Par::Seq,
        );
        out
    }

    /// Reduced storage and conduction at `factors`.
    pub(super) fn pencil(
        &self,
        factors: &Factors,
    ) -> Result<(DMatrix<f64>, DMatrix<f64>), ModelError> {
        let sum = |parts: &[SparseBlock], blocks: &[Mat<f64>]| {
            let mut sum = DMatrix::zeros(self.width, self.width);
            for (part, block) in parts.iter().zip(blocks) {
                let factor = factor_on(part.parameter, factors)?;
                for j in 0..self.width {
                    for i in 0..self.width {
                        sum[(i, j)] += factor * block[(i, j)];
                    }
                }
            }
            Ok(sum)
        };
        Ok((
            sum(&self.system.mass, &self.mass)?,
            sum(&self.system.stiffness, &self.stiffness)?,
        ))
    }

    /// Response `b^T (V^T (K + s M) V)^-1 b` of the reduced system at a real shift, for projected ports b.
    pub(super) fn response(
        &self,
        s: f64,
        factors: &Factors,
        ports: &DMatrix<f64>,
    ) -> Result<DMatrix<f64>, ModelError> {
        let (mass, stiffness) = self.pencil(factors)?;
        let solved = Cholesky::new(stiffness + mass * s)
            .ok_or(ModelError::NotPositive {
                what: "the reduced shifted matrix",
            })?
            .solve(ports);
        Ok(ports.tr_mul(&solved))
    }

    /// Orthonormalises a tall block against the basis and in itself, twice over, appends what is new in it, and projects
    /// every block of the system on the new vectors.
    pub(super) fn append(&mut self, pencil: &Pencil, block: Rows) -> Result<(), ModelError> {
        let mut block = block;
        for round in [Round::First, Round::Second] {
            if block.width == 0 {
                return Ok(());
            }
            let image = pencil.mass_times(&block);
            let lengths = match round {
                Round::First => lengths(&block, &image),
                Round::Second => vec![1.0; block.width],
            };
            let shares = transposed_times(self.vectors(), image.matrix());
            matmul(
                block.matrix_mut(),
                Accum::Add,
                self.vectors(),
                shares.as_ref(),
                -1.0,
                Par::Seq,
            );
            block = orthonormal(pencil, &block, &lengths)?;
        }
        let room = self.vectors.ncols() - self.width;
        let new = block.width.min(room);
        self.vectors
            .as_mut()
            .subcols_mut(self.width, new)
            .copy_from(block.matrix().subcols(0, new));
        self.width += new;
        self.extend_projections(&block, new);
        Ok(())
    }

    fn extend_projections(&mut self, block: &Rows, new: usize) {
        let (width, old) = (self.width, self.width - new);
        let all = self.vectors.as_ref().subcols(0, width);
        let blocks = self.system.mass.iter().chain(&self.system.stiffness);
        let projections = self.mass.iter_mut().chain(&mut self.stiffness);
        for (part, projection) in blocks.zip(projections) {
            let matrix = part.matrix.as_ref();
            let filled: Vec<usize> = (0..matrix.ncols())
                .filter(|&j| !matrix.symbolic().col_range(j).is_empty())
                .collect();
            let (Some(&first), Some(&last)) = (filled.first(), filled.last()) else {
                continue;
            };
            let image = multiply(matrix, block);
            let count = last + 1 - first;
            let shares = if filled.len() * 8 < count {
                // A barrier, a skin or an edge touches few nodes: a dense product would multiply zeros.
                let mut shares = Mat::zeros(width, image.width);
                for &i in &filled {
                    for (j, y) in image.row(i).iter().enumerate() {
                        for k in 0..width {
                            shares[(k, j)] += all[(i, k)] * y;
                        }
                    }
                }
                shares
            } else {
                transposed_times(
                    all.subrows(first, count),
                    image.matrix().subrows(first, count),
                )
            };
            for j in 0..new {
                for k in 0..width {
                    projection[(k, old + j)] = shares[(k, j)];
                    projection[(old + j, k)] = shares[(k, j)];
                }
            }
        }
    }
}

/// `X^T A X` of a sparse matrix A that touches few nodes and a tall block X.
pub(super) fn quadratic_form(
    matrix: SparseColMatRef<'_, usize, f64>,
    x: &Rows,
) -> Result<DMatrix<f64>, ModelError> {
    if matrix.ncols() != x.height {
        return Err(ModelError::Size {
            what: "rows of a block of the discrete ground",
            found: matrix.ncols(),
            expected: x.height,
        });
    }
    let filled: Vec<usize> = (0..matrix.ncols())
        .filter(|&j| !matrix.symbolic().col_range(j).is_empty())
        .collect();
    let (mut here, mut image) = (
        Rows::zeros(filled.len(), x.width),
        Rows::zeros(filled.len(), x.width),
    );
    for (at, &j) in filled.iter().enumerate() {
        here.row_mut(at).copy_from_slice(x.row(j));
        let range = matrix.symbolic().col_range(j);
        let entries = matrix.symbolic().row_idx()[range.clone()].iter();
        for (&i, &a) in entries.zip(&matrix.val()[range]) {
            for (y, x) in image.row_mut(at).iter_mut().zip(x.row(i)) {
                *y += a * x;
            }
        }
    }
    let product = transposed_times(here.matrix(), image.matrix());
    Ok(DMatrix::from_fn(x.width, x.width, |i, j| product[(i, j)]))
}

#[derive(Clone, Copy)]
enum Round {
    First,
    Second,
}

/// M-norm of every column, given the block and M times it.
fn lengths(block: &Rows, image: &Rows) -> Vec<f64> {
    let mut squares = vec![0.0; block.width];
    for i in 0..block.height {
        for ((square, x), y) in squares.iter_mut().zip(block.row(i)).zip(image.row(i)) {
            *square += x * y;
        }
    }
    squares.into_iter().map(|s| s.max(0.0).sqrt()).collect()
}

/// M-orthonormal directions of a block whose columns once had the given lengths, longest first, without those of which
/// too little is left.
fn orthonormal(pencil: &Pencil, block: &Rows, lengths: &[f64]) -> Result<Rows, ModelError> {
    let scale: Vec<f64> = lengths
        .iter()
        .map(|&l| if l > 0.0 { l.recip() } else { 0.0 })
        .collect();
    let scaled = |i: usize| scale.get(i).copied().unwrap_or(0.0);
    let image = pencil.mass_times(block);
    let gram = transposed_times(block.matrix(), image.matrix());
    let n = block.width;
    let (squares, directions) = symmetric_eigen(&DMatrix::from_fn(n, n, |i, j| {
        0.5 * (gram[(i, j)] + gram[(j, i)]) * scaled(i) * scaled(j)
    }))?;
    let kept: Vec<usize> = (0..n)
        .rev()
        .filter(|&k| squares[k] > DEPENDENT * DEPENDENT)
        .collect();
    let combine = Mat::from_fn(n, kept.len(), |i, k| {
        kept.get(k)
            .map_or(0.0, |&k| scaled(i) * directions[(i, k)] / squares[k].sqrt())
    });
    let mut out = Rows::zeros(block.height, kept.len());
    matmul(
        out.matrix_mut(),
        Accum::Replace,
        block.matrix(),
        combine.as_ref(),
        1.0,
        Par::Seq,
    );
    Ok(out)
}

/// `left^T right` of tall blocks.
fn transposed_times(left: MatRef<'_, f64>, right: MatRef<'_, f64>) -> Mat<f64> {
    let mut out = Mat::zeros(left.ncols(), right.ncols());
    matmul(
        out.as_mut(),
        Accum::Replace,
        left.transpose(),
        right,
        1.0,
        Par::Seq,
    );
    out
}
