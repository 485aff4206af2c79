//! Accepted findings as nuisances.
use super::drive::{Sampled, Tables};
use super::frame::Frame;
use crate::ModelError;
use nalgebra::DMatrix;

/// One accepted finding.
#[derive(Debug, Clone)]
pub(crate) struct Adopted {
    columns: usize,
}

impl Adopted {
    pub(crate) fn columns(&self) -> usize {
        self.columns
    }

    pub(crate) fn rows(
        &mut self,
        frame: &Frame,
        _tables: &Tables,
        _sampled: &Sampled,
        _pairs: &DMatrix<f64>,
        _start: f64,
    ) -> Result<DMatrix<f64>, ModelError> {
        Ok(DMatrix::zeros(frame.gauges, self.columns))
    }
}
