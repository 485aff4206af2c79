//! Linear hat functions on triangles; storage as integrated, or gathered at the corners.
//!
//! The value error falls with the second power of the size of triangles. Gathered storage keeps that order
//! and, on a Delaunay mesh, a maximum principle.

use super::space::{Local, MOST, Space, gradients, product};
use crate::ground::{Point, Tensor};

pub(super) struct Linear {
    /// Whether storage and line joints are gathered at the nodes.
    pub(super) lumped: bool,
}

impl Space for Linear {
    fn midsides(&self) -> bool {
        false
    }

    fn storage(&self, corners: &[Point; 3]) -> Local {
        let (_, area) = gradients(corners);
        if self.lumped {
            return Local::scaled(
                area / 3.0,
                &[[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]],
            );
        }
        Local::scaled(
            area / 12.0,
            &[[2.0, 1.0, 1.0], [1.0, 2.0, 1.0], [1.0, 1.0, 2.0]],
        )
    }

    fn takes(&self, _tensor: &Tensor) -> bool {
        true
    }

    fn conduction(&self, corners: &[Point; 3], tensor: &Tensor) -> Local {
        let (hat, area) = gradients(corners);
        let mut local = Local::zero(3);
        for (row, a) in local.entries.iter_mut().zip(&hat) {
            for (entry, b) in row.iter_mut().zip(&hat) {
                *entry = area * product(*a, tensor, *b);
            }
        }
        local
    }

    fn line(&self, length: f64) -> Local {
        if self.lumped {
            return Local::scaled(length / 2.0, &[[1.0, 0.0], [0.0, 1.0]]);
        }
        Local::scaled(length / 6.0, &[[2.0, 1.0], [1.0, 2.0]])
    }

    fn values(&self, _corners: &[Point; 3], [a, b, c]: [f64; 3]) -> [f64; MOST] {
        [a, b, c, 0.0, 0.0, 0.0]
    }
}
