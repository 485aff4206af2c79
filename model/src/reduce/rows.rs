//! Tall blocks stored row by row.

#![expect(
    clippy::indexing_slicing,
    reason = "a row lies within the block by construction: values are height times width"
)]

use faer::{MatMut, MatRef};

use crate::weak_form::Functional;

/// A tall block (nodes by a few columns) stored row by row: what belongs to one node lies together, so that sparse
/// products and substitutions stream it.
#[derive(Clone)]
pub(super) struct Rows {
    pub(super) height: usize,
    pub(super) width: usize,
    pub(super) values: Vec<f64>,
}

impl Rows {
    pub(super) fn zeros(height: usize, width: usize) -> Self {
        Self {
            height,
            width,
            values: vec![0.0; height * width],
        }
    }

    /// Functionals as columns: unit sources by reciprocity.
    pub(super) fn sources(height: usize, functionals: &[&Functional]) -> Self {
        let mut b = Self::zeros(height, functionals.len());
        for (j, functional) in functionals.iter().enumerate() {
            for &(node, weight) in &functional.0 {
                b.row_mut(node)[j] += weight;
            }
        }
        b
    }

    pub(super) fn row(&self, i: usize) -> &[f64] {
        &self.values[i * self.width..(i + 1) * self.width]
    }

    pub(super) fn row_mut(&mut self, i: usize) -> &mut [f64] {
        &mut self.values[i * self.width..(i + 1) * self.width]
    }

    /// Value of a functional on column j.
    pub(super) fn value(&self, functional: &Functional, j: usize) -> f64 {
        functional
            .0
            .iter()
            .map(|&(node, weight)| weight * self.row(node)[j])
            .sum()
    }

    pub(super) fn matrix(&self) -> MatRef<'_, f64> {
        MatRef::from_row_major_slice(&self.values, self.height, self.width)
    }

    pub(super) fn matrix_mut(&mut self) -> MatMut<'_, f64> {
        MatMut::from_row_major_slice_mut(&mut self.values, self.height, self.width)
    }
}
