//! Recursive least squares over the columns: the nuisances' posterior, and every signature cleared of them.
//!
//! With rows W, whitened readings e and a standard normal prior, a batch updates mean and covariance as a Kalman
//! filter of constant states does (Plackett 1950). A signature s is regressed on the same columns by the same gain:
//! with `u = R^-1 W's` so far, `s~ = s - W u`, and then
//! `c += s~' S^-1 e~`, `N += s~' S^-1 s~` with `S = I + W C W'` and `e~` the innovation. These equal
//! `c = s'e - z'R^-1 v` and `n = s's - v'R^-1 v` of the batch formulas, but nothing has to be solved again when
//! evidence is asked for, and a column whose influence has passed is marginalised by striking it out.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over matrices made square here"
)]

use nalgebra::{Cholesky, DMatrix, DMatrixView, DVector};
use serde::{Deserialize, Serialize};

use crate::ModelError;

/// Mean and covariance of the coefficients.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Posterior {
    /// Mean.
    pub(crate) mean: DVector<f64>,
    /// Covariance.
    pub(crate) covariance: DMatrix<f64>,
}

/// What one batch of rows teaches.
#[derive(Debug, Clone)]
pub(crate) struct Lesson {
    /// Rows of the batch (readings by columns).
    pub(crate) rows: DMatrix<f64>,
    /// Innovations, scaled to unit variance.
    pub(crate) innovation: DVector<f64>,
    /// `L^-1` with `S = L L'`.
    pub(crate) scale: DMatrix<f64>,
    /// `C W' L'^-1`: gain for scaled innovations (columns by readings).
    pub(crate) gain: DMatrix<f64>,
}

impl Posterior {
    /// The prior of `columns` coefficients.
    pub(crate) fn prior(columns: usize) -> Self {
        Self {
            mean: DVector::zeros(columns),
            covariance: DMatrix::identity(columns, columns),
        }
    }

    /// Number of columns.
    pub(crate) fn len(&self) -> usize {
        self.mean.len()
    }

    /// Adds columns with their prior at the end.
    pub(crate) fn append(&mut self, count: usize) {
        let from = self.len();
        self.mean.resize_vertically_mut(from + count, 0.0);
        self.covariance.resize_mut(from + count, from + count, 0.0);
        for index in from..from + count {
            self.covariance[(index, index)] = 1.0;
        }
    }

    /// Strikes out columns (ascending): they are marginalised.
    pub(crate) fn strike(&mut self, columns: &[usize]) {
        self.mean = std::mem::replace(&mut self.mean, DVector::zeros(0)).remove_rows_at(columns);
        self.covariance = std::mem::replace(&mut self.covariance, DMatrix::zeros(0, 0))
            .remove_rows_at(columns)
            .remove_columns_at(columns);
    }

    /// Lets coefficients forget: each gains `lost` of its prior variance.
    pub(crate) fn forget(&mut self, lost: &[f64]) {
        for (index, share) in lost.iter().enumerate().take(self.mean.len()) {
            self.covariance[(index, index)] += share;
        }
    }

    /// Takes a batch in.
    ///
    /// # Errors
    /// [`ModelError::NotPositive`] where the innovations' covariance cannot be factorised.
    pub(crate) fn learn(
        &mut self,
        rows: DMatrix<f64>,
        readings: &DVector<f64>,
    ) -> Result<Lesson, ModelError> {
        let count = rows.nrows();
        let cross = &self.covariance * rows.transpose();
        let mut s = &rows * &cross;
        for index in 0..count {
            s[(index, index)] += 1.0;
        }
        let s = (&s + s.transpose()) * 0.5;
        let broken = ModelError::NotPositive {
            what: "the covariance of a batch of readings",
        };
        let lower = Cholesky::new(s).ok_or(broken.clone())?.l();
        let scale = lower
            .solve_lower_triangular(&DMatrix::identity(count, count))
            .ok_or(broken)?;
        let innovation = &scale * (readings - &rows * &self.mean);
        let gain = cross * scale.transpose();
        self.mean.gemv(1.0, &gain, &innovation, 1.0);
        self.covariance.gemm(-1.0, &gain, &gain.transpose(), 1.0);
        symmetrise(&mut self.covariance);
        Ok(Lesson {
            rows,
            innovation,
            scale,
            gain,
        })
    }
}

fn symmetrise(matrix: &mut DMatrix<f64>) {
    for column in 0..matrix.ncols() {
        for row in 0..column {
            let mean = 0.5 * (matrix[(row, column)] + matrix[(column, row)]);
            matrix[(row, column)] = mean;
            matrix[(column, row)] = mean;
        }
    }
}

/// Running sums of a group of signatures cleared of the nuisances.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Sums {
    /// `c`.
    pub(crate) c: DVector<f64>,
    /// `N`.
    pub(crate) n: DMatrix<f64>,
}

impl Sums {
    pub(crate) fn new(signatures: usize) -> Self {
        Self {
            c: DVector::zeros(signatures),
            n: DMatrix::zeros(signatures, signatures),
        }
    }

    /// Adds a batch of cleared signatures, scaled as the lesson's innovations are (readings by signatures).
    pub(crate) fn add(&mut self, lesson: &Lesson, scaled: DMatrixView<'_, f64>) {
        self.c.gemv_tr(1.0, &scaled, &lesson.innovation, 1.0);
        self.n.gemm(1.0, &scaled.transpose(), &scaled, 1.0);
    }

    /// Bytes held.
    pub(crate) fn bytes(&self) -> usize {
        8 * (self.c.len() + self.n.len())
    }
}

/// Regressions of signatures on the columns (columns by signatures), moved on by a batch of whitened signatures (readings
/// by signatures). Returns what is left of the signatures, scaled as the lesson's innovations are.
pub(crate) fn clear(
    regressions: &mut DMatrix<f64>,
    lesson: &Lesson,
    mut signatures: DMatrix<f64>,
) -> DMatrix<f64> {
    signatures.gemm(-1.0, &lesson.rows, regressions, 1.0);
    let scaled = &lesson.scale * signatures;
    regressions.gemm(1.0, &lesson.gain, &scaled, 1.0);
    scaled
}

/// A group of signatures cleared of the nuisances, with their regressions and running sums.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Cleared {
    /// Regression of the signatures on the columns (columns by signatures).
    u: DMatrix<f64>,
    /// Their sums.
    pub(crate) sums: Sums,
}

impl Cleared {
    pub(crate) fn new(columns: usize, signatures: usize) -> Self {
        Self {
            u: DMatrix::zeros(columns, signatures),
            sums: Sums::new(signatures),
        }
    }

    pub(crate) fn append(&mut self, count: usize) {
        let from = self.u.nrows();
        self.u.resize_vertically_mut(from + count, 0.0);
    }

    pub(crate) fn strike(&mut self, columns: &[usize]) {
        let u = std::mem::replace(&mut self.u, DMatrix::zeros(0, 0));
        // Rows cannot be taken from a matrix without columns.
        self.u = if u.ncols() == 0 {
            DMatrix::zeros(u.nrows().saturating_sub(columns.len()), 0)
        } else {
            u.remove_rows_at(columns)
        };
    }

    /// Takes a batch of whitened signatures in (readings by signatures).
    pub(crate) fn learn(&mut self, lesson: &Lesson, signatures: DMatrix<f64>) {
        let scaled = clear(&mut self.u, lesson, signatures);
        self.sums.add(lesson, scaled.as_view());
    }

    /// Bytes held.
    pub(crate) fn bytes(&self) -> usize {
        8 * self.u.len() + self.sums.bytes()
    }
}
