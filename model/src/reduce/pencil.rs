//! The full sparse pencil: K and M at one set of parameters, and their products with tall blocks.

#![expect(
    clippy::indexing_slicing,
    reason = "column pointers and row numbers come from checked sparse matrices of the size tested in `Pencil::assemble`"
)]

use faer::sparse::{SparseColMat, SparseColMatRef, SymbolicSparseColMat, SymbolicSparseColMatRef};

use super::Factors;
use super::modal::factor_on;
use super::rows::Rows;
use crate::ModelError;
use crate::weak_form::{SparseBlock, System};

/// K and M of the full system at one set of parameters, on their common pattern.
pub(super) struct Pencil {
    pattern: SymbolicSparseColMat<usize>,
    stiffness: Vec<f64>,
    mass: Vec<f64>,
}

impl Pencil {
    /// Sums the blocks, each times its factor.
    pub(super) fn assemble(system: &System, factors: &Factors) -> Result<Self, ModelError> {
        let n = system.size;
        for block in system.mass.iter().chain(&system.stiffness) {
            if block.matrix.nrows() != n || block.matrix.ncols() != n {
                return Err(ModelError::Size {
                    what: "rows of a block of the discrete ground",
                    found: block.matrix.nrows(),
                    expected: n,
                });
            }
        }
        let scaled = |blocks: &[SparseBlock]| -> Result<Vec<f64>, ModelError> {
            blocks
                .iter()
                .map(|b| factor_on(b.parameter, factors))
                .collect()
        };
        let shares = [
            (&system.stiffness, scaled(&system.stiffness)?),
            (&system.mass, scaled(&system.mass)?),
        ];
        let (mut ends, mut rows) = (vec![0], Vec::new());
        let mut values = [Vec::new(), Vec::new()];
        let mut sums = [vec![0.0; n], vec![0.0; n]];
        let mut seen = vec![usize::MAX; n];
        for j in 0..n {
            let start = rows.len();
            for (which, (blocks, factors)) in shares.iter().enumerate() {
                for (block, factor) in blocks.iter().zip(factors) {
                    let matrix = block.matrix.as_ref();
                    let range = matrix.symbolic().col_range(j);
                    for (&i, &value) in matrix.symbolic().row_idx()[range.clone()]
                        .iter()
                        .zip(&matrix.val()[range])
                    {
                        if seen[i] != j {
                            seen[i] = j;
                            rows.push(i);
                        }
                        sums[which][i] += factor * value;
                    }
                }
            }
            rows[start..].sort_unstable();
            for &i in &rows[start..] {
                for (values, sums) in values.iter_mut().zip(&mut sums) {
                    values.push(std::mem::take(&mut sums[i]));
                }
            }
            ends.push(rows.len());
        }
        let [stiffness, mass] = values;
        if !stiffness.iter().chain(&mass).all(|v| v.is_finite()) {
            return Err(ModelError::NotFinite("an entry of the discrete ground"));
        }
        Ok(Self {
            pattern: SymbolicSparseColMat::new_checked(n, n, ends, None, rows),
            stiffness,
            mass,
        })
    }

    pub(super) fn size(&self) -> usize {
        self.pattern.nrows()
    }

    pub(super) fn pattern(&self) -> SymbolicSparseColMatRef<'_, usize> {
        self.pattern.as_ref()
    }

    /// M times a tall block.
    pub(super) fn mass_times(&self, x: &Rows) -> Rows {
        multiply(SparseColMatRef::new(self.pattern(), &self.mass), x)
    }

    /// K and M times a tall block.
    pub(super) fn both_times(&self, x: &Rows) -> (Rows, Rows) {
        let times =
            |values: &[f64]| multiply(SparseColMatRef::new(self.pattern.as_ref(), values), x);
        (times(&self.stiffness), times(&self.mass))
    }

    /// `K + s M`.
    pub(super) fn shifted(&self, s: f64) -> SparseColMat<usize, f64> {
        let values = self
            .stiffness
            .iter()
            .zip(&self.mass)
            .map(|(k, m)| k + s * m);
        SparseColMat::new(self.pattern.clone(), values.collect())
    }
}

/// A symmetric sparse matrix (both triangles stored) times a tall block: column j of the matrix is its row j.
pub(super) fn multiply(matrix: SparseColMatRef<'_, usize, f64>, x: &Rows) -> Rows {
    let mut y = Rows::zeros(matrix.ncols(), x.width);
    if x.width == 0 {
        return y;
    }
    for (j, y) in y.values.chunks_exact_mut(x.width).enumerate() {
        let range = matrix.symbolic().col_range(j);
        for (&i, &a) in matrix.symbolic().row_idx()[range.clone()]
            .iter()
            .zip(&matrix.val()[range])
        {
            for (y, x) in y.iter_mut().zip(x.row(i)) {
                *y += a * x;
            }
        }
    }
    y
}
