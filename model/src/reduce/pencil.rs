//! The full sparse pencil: K and M at one set of parameters, and their products with tall blocks.

#![expect(
    clippy::indexing_slicing,
    reason = "column pointers and row numbers come from checked sparse matrices of the size tested in `Pencil::assemble`"
)]

use faer::sparse::{SparseColMat, SparseColMatRef, SymbolicSparseColMat, SymbolicSparseColMatRef};

use super::Factors;
use super::modal::{factor_on, layer_of};
use super::rows::Rows;
use crate::ModelError;
use crate::weak_form::{PatchShares, SparseBlock, System};

/// K and M of the full system at one set of parameters, on their common pattern.
pub(super) struct Pencil {
    pattern: SymbolicSparseColMat<usize>,
    stiffness: Vec<f64>,
    mass: Vec<f64>,
}

impl Pencil {
    /// Sums the blocks, each times its factor.
    pub(super) fn assemble(system: &System, factors: &Factors) -> Result<Self, ModelError> {
        Self::assemble_patched(system, &PatchShares::default(), factors)
    }

    /// The same with patches: with a factor f on a patch, f - 1 times its share is added to that of its layer.
    pub(super) fn assemble_patched(
        system: &System,
        patches: &PatchShares,
        factors: &Factors,
    ) -> Result<Self, ModelError> {
        let n = system.size;
        let all = system.mass.iter().chain(&system.stiffness);
        for block in all.chain(&patches.mass).chain(&patches.stiffness) {
            if block.matrix.nrows() != n || block.matrix.ncols() != n {
                return Err(ModelError::Size {
                    what: "rows of a block of the discrete ground",
                    found: block.matrix.nrows(),
                    expected: n,
                });
            }
        }
        let shares = [
            scaled(&system.stiffness, &patches.stiffness, factors)?,
            scaled(&system.mass, &patches.mass, factors)?,
        ];
        let (mut ends, mut rows) = (vec![0], Vec::new());
        let mut values = [Vec::new(), Vec::new()];
        let mut sums = [vec![0.0; n], vec![0.0; n]];
        let mut seen = vec![usize::MAX; n];
        for j in 0..n {
            let start = rows.len();
            for (which, blocks) in shares.iter().enumerate() {
                for (matrix, factor) in blocks {
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

/// A matrix and what it is multiplied by.
type Weighed<'a> = (SparseColMatRef<'a, usize, f64>, f64);

/// Blocks and patches, each with what it is multiplied by.
fn scaled<'a>(
    blocks: &'a [SparseBlock],
    patches: &'a [SparseBlock],
    factors: &Factors,
) -> Result<Vec<Weighed<'a>>, ModelError> {
    let mut scaled = Vec::with_capacity(blocks.len());
    for block in blocks {
        scaled.push((block.matrix.as_ref(), factor_on(block.parameter, factors)?));
    }
    for block in patches {
        let more = factor_on(layer_of(block.parameter), factors)?
            * (factor_on(block.parameter, factors)? - 1.0);
        if more != 0.0 {
            scaled.push((block.matrix.as_ref(), more));
        }
    }
    Ok(scaled)
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
