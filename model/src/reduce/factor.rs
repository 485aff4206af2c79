//! Cholesky factors of the shifted pencil that share one symbolic analysis, and their block solves.

#![expect(
    clippy::indexing_slicing,
    reason = "rows and offsets are laid out once from the symbolic factor, whose numbers are below its size"
)]

use faer::dyn_stack::{MemBuffer, MemStack};
use faer::sparse::SparseColMat;
use faer::sparse::linalg::SupernodalThreshold;
use faer::sparse::linalg::cholesky::{
    CholeskySymbolicParams, SymbolicCholesky, SymbolicCholeskyRaw, factorize_symbolic_cholesky,
};
use faer::{Par, Side};

use super::pencil::Pencil;
use super::rows::Rows;
use crate::ModelError;
use crate::weak_form::System;

/// Cholesky factors of `K + s M` for any number of shifts `s > 0`. The pattern does not depend on s, so its ordering and
/// symbolic factor are found once.
pub struct ShiftedCholesky {
    pencil: Pencil,
    symbolic: SymbolicCholesky<usize>,
    layout: Layout,
    values: Vec<f64>,
    scratch: MemBuffer,
}

impl ShiftedCholesky {
    /// Analyses the pattern of a system at its described parameters.
    ///
    /// # Errors
    /// [`ModelError::Size`] for blocks of another size than the system's, [`ModelError::NotFinite`] for entries that are
    /// not finite, [`ModelError::NotPositive`] where no factor can be laid out.
    pub fn new(system: &System) -> Result<Self, ModelError> {
        Self::of(Pencil::assemble(system, &Vec::new())?)
    }

    pub(super) fn of(pencil: Pencil) -> Result<Self, ModelError> {
        Self::with_threshold(pencil, SupernodalThreshold::AUTO)
    }

    /// As `of`, with a say in which form of factor the library takes.
    fn with_threshold(pencil: Pencil, threshold: SupernodalThreshold) -> Result<Self, ModelError> {
        let symbolic = factorize_symbolic_cholesky(
            pencil.pattern(),
            Side::Lower,
            Default::default(),
            CholeskySymbolicParams {
                supernodal_flop_ratio_threshold: threshold,
                ..Default::default()
            },
        )
        .map_err(|_| not_positive())?;
        let scratch = symbolic.factorize_numeric_llt_scratch::<f64>(Par::Seq, Default::default());
        Ok(Self {
            layout: Layout::of(&symbolic),
            values: vec![0.0; symbolic.len_val()],
            scratch: MemBuffer::new(scratch),
            symbolic,
            pencil,
        })
    }

    pub(super) fn pencil(&self) -> &Pencil {
        &self.pencil
    }

    /// Number of entries of each factor.
    #[must_use]
    pub fn fill(&self) -> usize {
        self.symbolic.len_val()
    }

    /// Factorises `K + s M` in the place of the factor before it.
    ///
    /// # Errors
    /// [`ModelError::NotPositive`] where the matrix is not positive definite.
    pub fn factorise(&mut self, s: f64) -> Result<(), ModelError> {
        let matrix = self.pencil.shifted(s);
        self.factorise_matrix(&matrix)
    }

    /// The same for the pencil of the same system at other parameters.
    pub(super) fn factorise_other(&mut self, pencil: &Pencil, s: f64) -> Result<(), ModelError> {
        self.factorise_matrix(&pencil.shifted(s))
    }

    fn factorise_matrix(&mut self, matrix: &SparseColMat<usize, f64>) -> Result<(), ModelError> {
        self.values.fill(0.0);
        self.symbolic
            .factorize_numeric_llt(
                &mut self.values,
                matrix.as_ref(),
                Side::Lower,
                Default::default(),
                Par::Seq,
                MemStack::new(&mut self.scratch),
                Default::default(),
            )
            .map(|_| ())
            .map_err(|_| not_positive())
    }

    /// Solves `(K + s M) X = B` in place, for the shift factorised last.
    ///
    /// Columns go through in panels of a width known to the compiler: the entries of the factor are read once a panel,
    /// and each meets a few vector instructions.
    pub(super) fn solve(&self, block: &mut Rows) {
        let mut done = 0;
        while done < block.width {
            done += match block.width - done {
                1..=4 => self.solve_panel::<4>(block, done),
                5..=8 => self.solve_panel::<8>(block, done),
                _ => self.solve_panel::<12>(block, done),
            };
        }
    }

    /// Solves for up to P columns from `first` on; returns how many.
    fn solve_panel<const P: usize>(&self, block: &mut Rows, first: usize) -> usize {
        let count = P.min(block.width - first);
        let mut x = vec![[0.0; P]; self.layout.columns.len()];
        for (x, &from) in x.iter_mut().zip(&self.layout.order) {
            x[..count].copy_from_slice(&block.row(from)[first..first + count]);
        }
        self.substitute(&mut x);
        for (x, &to) in x.iter().zip(&self.layout.order) {
            block.row_mut(to)[first..first + count].copy_from_slice(&x[..count]);
        }
        count
    }

    /// Forward and backward substitution.
    fn substitute<const P: usize>(&self, x: &mut [[f64; P]]) {
        for (j, column) in self.layout.columns.iter().enumerate() {
            let (diagonal, below, rows) = column.of(&self.values, &self.layout.rows);
            let (head, tail) = x.split_at_mut(j + 1);
            let pivot = &mut head[j];
            let inverse = diagonal.recip();
            for v in pivot.iter_mut() {
                *v *= inverse;
            }
            for (&l, &i) in below.iter().zip(rows) {
                let target = &mut tail[i - j - 1];
                for (t, v) in target.iter_mut().zip(pivot.iter()) {
                    *t -= l * v;
                }
            }
        }
        for (j, column) in self.layout.columns.iter().enumerate().rev() {
            let (diagonal, below, rows) = column.of(&self.values, &self.layout.rows);
            let (head, tail) = x.split_at_mut(j + 1);
            let pivot = &mut head[j];
            let mut sum = *pivot;
            for (&l, &i) in below.iter().zip(rows) {
                for (s, v) in sum.iter_mut().zip(&tail[i - j - 1]) {
                    *s -= l * v;
                }
            }
            let inverse = diagonal.recip();
            for (v, s) in pivot.iter_mut().zip(sum) {
                *v = s * inverse;
            }
        }
    }
}

/// Where the columns of the factor lie among its values, whichever of its two forms the library chose.
struct Layout {
    /// Node at each position of the factor.
    order: Vec<usize>,
    columns: Vec<Column>,
    /// Row numbers that columns point into; columns of one supernode share theirs.
    rows: Vec<usize>,
}

/// One column of the factor: its diagonal entry, and the entries below it, which follow in the values.
struct Column {
    value: usize,
    row: usize,
    count: usize,
}

impl Column {
    fn of<'a>(&self, values: &'a [f64], rows: &'a [usize]) -> (f64, &'a [f64], &'a [usize]) {
        (
            values[self.value],
            &values[self.value + 1..=self.value + self.count],
            &rows[self.row..self.row + self.count],
        )
    }
}

impl Layout {
    fn of(symbolic: &SymbolicCholesky<usize>) -> Self {
        let n = symbolic.nrows();
        let order = symbolic
            .perm()
            .map_or_else(|| (0..n).collect(), |p| p.arrays().0.to_vec());
        let (mut columns, mut rows) = (Vec::with_capacity(n), Vec::new());
        match symbolic.raw() {
            SymbolicCholeskyRaw::Simplicial(simplicial) => {
                rows.extend_from_slice(simplicial.row_idx());
                for ends in simplicial.col_ptr().windows(2) {
                    columns.push(Column {
                        value: ends[0],
                        row: ends[0] + 1,
                        count: ends[1] - ends[0] - 1,
                    });
                }
            }
            SymbolicCholeskyRaw::Supernodal(supernodal) => {
                for s in 0..supernodal.n_supernodes() {
                    let own = supernodal.supernode_begin()[s]..supernodal.supernode_end()[s];
                    let pattern = supernodal.supernode(s);
                    let (first, width) = (rows.len(), own.len());
                    rows.extend(own);
                    rows.extend_from_slice(pattern.pattern());
                    let height = rows.len() - first;
                    for c in 0..width {
                        columns.push(Column {
                            value: supernodal.col_ptr_for_val()[s] + c * height + c,
                            row: first + c + 1,
                            count: height - c - 1,
                        });
                    }
                }
            }
        }
        Self {
            order,
            columns,
            rows,
        }
    }
}

fn not_positive() -> ModelError {
    ModelError::NotPositive {
        what: "the shifted matrix of the discrete ground",
    }
}

#[cfg(test)]
mod tests {
    use super::super::lattice::{Ends, Lattice};
    use super::*;

    #[test]
    fn both_forms_of_factor_solve_blocks_of_any_width() {
        let lattice = Lattice::new(12, Ends::Open);
        let n = lattice.system.size;
        for threshold in [
            SupernodalThreshold::FORCE_SIMPLICIAL,
            SupernodalThreshold::FORCE_SUPERNODAL,
        ] {
            let pencil = Pencil::assemble(&lattice.system, &Vec::new()).unwrap();
            let mut factors = ShiftedCholesky::with_threshold(pencil, threshold).unwrap();
            let s = 1e-5;
            factors.factorise(s).unwrap();
            for width in [1, 4, 7, 12, 21] {
                let mut b = Rows::zeros(n, width);
                for (k, v) in b.values.iter_mut().enumerate() {
                    *v = (k as f64 * 0.7).sin();
                }
                let mut x = b.clone();
                factors.solve(&mut x);
                let (stiff, mass) = factors.pencil().both_times(&x);
                let scale = stiff.values.iter().fold(0.0_f64, |a, v| a.max(v.abs()));
                for ((k, m), b) in stiff.values.iter().zip(&mass.values).zip(&b.values) {
                    assert!((k + s * m - b).abs() < 1e-12 * scale.max(1.0));
                }
            }
        }
    }
}
