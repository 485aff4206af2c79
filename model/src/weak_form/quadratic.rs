//! Quadratic hat functions on triangles with nodes at corners and mid-sides.
//!
//! Trial and test space are the same (Galerkin); integrals are exact. The value error falls with the third
//! power of the size of triangles, and with the fourth at the ports.

use super::space::{Local, MOST, Space, gradients, product};
use crate::ground::{Point, Tensor};

pub(super) struct Quadratic;

/// Storage of a triangle of area 180: corners, then mid-sides opposite to them.
const STORAGE: [[f64; 6]; 6] = [
    [6.0, -1.0, -1.0, -4.0, 0.0, 0.0],
    [-1.0, 6.0, -1.0, 0.0, -4.0, 0.0],
    [-1.0, -1.0, 6.0, 0.0, 0.0, -4.0],
    [-4.0, 0.0, 0.0, 32.0, 16.0, 16.0],
    [0.0, -4.0, 0.0, 16.0, 32.0, 16.0],
    [0.0, 0.0, -4.0, 16.0, 16.0, 32.0],
];

/// Storage of a segment of length 30: ends, then middle.
const LINE: [[f64; 3]; 3] = [[4.0, -1.0, 2.0], [-1.0, 4.0, 2.0], [2.0, 2.0, 16.0]];

impl Space for Quadratic {
    fn midsides(&self) -> bool {
        true
    }

    fn storage(&self, corners: &[Point; 3]) -> Local {
        let (_, area) = gradients(corners);
        Local::scaled(area / 180.0, &STORAGE)
    }

    fn takes(&self, _tensor: &Tensor) -> bool {
        true
    }

    fn conduction(&self, corners: &[Point; 3], tensor: &Tensor) -> Local {
        let (hat, area) = gradients(corners);
        let mut local = Local::zero(6);
        // Products of gradients are quadratic: the three mid-sides integrate them exactly.
        for shares in [[0.0, 0.5, 0.5], [0.5, 0.0, 0.5], [0.5, 0.5, 0.0]] {
            let slope = slopes(&hat, shares);
            for (row, a) in local.entries.iter_mut().zip(&slope) {
                for (entry, b) in row.iter_mut().zip(&slope) {
                    *entry += area / 3.0 * product(*a, tensor, *b);
                }
            }
        }
        local
    }

    fn line(&self, length: f64) -> Local {
        Local::scaled(length / 30.0, &LINE)
    }

    fn values(&self, _corners: &[Point; 3], [a, b, c]: [f64; 3]) -> [f64; MOST] {
        [
            a * (2.0 * a - 1.0),
            b * (2.0 * b - 1.0),
            c * (2.0 * c - 1.0),
            4.0 * b * c,
            4.0 * c * a,
            4.0 * a * b,
        ]
    }
}

/// Gradients of the six functions at a point.
fn slopes(&[ga, gb, gc]: &[Point; 3], [a, b, c]: [f64; 3]) -> [Point; 6] {
    let corner = |s: f64, g: Point| [(4.0 * s - 1.0) * g[0], (4.0 * s - 1.0) * g[1]];
    let middle = |s: f64, g: Point, t: f64, h: Point| {
        [4.0 * (s * h[0] + t * g[0]), 4.0 * (s * h[1] + t * g[1])]
    };
    [
        corner(a, ga),
        corner(b, gb),
        corner(c, gc),
        middle(b, gb, c, gc),
        middle(c, gc, a, ga),
        middle(a, ga, b, gb),
    ]
}
