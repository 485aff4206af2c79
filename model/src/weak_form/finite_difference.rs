//! Differences between neighbours on a rectilinear lattice.
//!
//! Test functions are points, each scaled by the area of its node's cell so that the matrix is symmetric. The
//! lattice comes as a mesh whose rectangles are halved by a diagonal: flow runs along the legs of the halves, each of
//! which carries the half of its cell face that lies in this rectangle, and none along the diagonal.

use super::space::{Local, MOST, Space};
use crate::ModelError;
use crate::ground::mesh::{Mesh, distance};
use crate::ground::{Point, Tensor};

pub(super) struct FiniteDifference;

impl Space for FiniteDifference {
    fn midsides(&self) -> bool {
        false
    }

    fn storage(&self, corners: &[Point; 3]) -> Local {
        // A quarter of the rectangle belongs to each of its corners; both halves share those on the diagonal.
        let right = right_corner(corners).0;
        let (a, b) = legs(corners, right);
        let mut local = Local::zero(3);
        for (i, row) in local.entries.iter_mut().enumerate().take(3) {
            if let Some(entry) = row.get_mut(i) {
                *entry = a * b * if i == right { 0.25 } else { 0.125 };
            }
        }
        local
    }

    fn takes(&self, tensor: &Tensor) -> bool {
        // A five-point lattice knows no flow across its lines but along them.
        tensor[0][1].abs() < 1e-12 * tensor[0][0].max(tensor[1][1])
    }

    fn conduction(&self, corners: &[Point; 3], tensor: &Tensor) -> Local {
        let right = right_corner(corners).0;
        let (a, b) = legs(corners, right);
        let at = |i: usize| corners.get(i % 3).copied().unwrap_or([f64::NAN; 2]);
        let along = |i: usize| {
            let (p, q) = (at(right), at(i));
            if (p[0] - q[0]).abs() > (p[1] - q[1]).abs() {
                tensor[0][0]
            } else {
                tensor[1][1]
            }
        };
        let mut local = Local::zero(3);
        for (other, flux) in [
            ((right + 1) % 3, 0.5 * along(right + 1) * b / a),
            ((right + 2) % 3, 0.5 * along(right + 2) * a / b),
        ] {
            for (i, row) in local.entries.iter_mut().enumerate().take(3) {
                for (j, entry) in row.iter_mut().enumerate().take(3) {
                    if [i, j].iter().all(|k| *k == right || *k == other) {
                        *entry += if i == j { flux } else { -flux };
                    }
                }
            }
        }
        local
    }

    fn line(&self, length: f64) -> Local {
        Local::scaled(length / 2.0, &[[1.0, 0.0], [0.0, 1.0]])
    }

    fn values(&self, _corners: &[Point; 3], [a, b, c]: [f64; 3]) -> [f64; MOST] {
        [a, b, c, 0.0, 0.0, 0.0]
    }
}

/// Lengths of the legs from the right corner to the next and to the one after.
fn legs(corners: &[Point; 3], right: usize) -> (f64, f64) {
    let at = |i: usize| corners.get(i % 3).copied().unwrap_or([f64::NAN; 2]);
    (
        distance(at(right), at(right + 1)),
        distance(at(right), at(right + 2)),
    )
}

/// The corner nearest to a right angle, and the cosine there.
fn right_corner(corners: &[Point; 3]) -> (usize, f64) {
    let at = |i: usize| corners.get(i % 3).copied().unwrap_or([f64::NAN; 2]);
    let mut best = (0, f64::INFINITY);
    for i in 0..3 {
        let (p, q, r) = (at(i), at(i + 1), at(i + 2));
        let dot = (q[0] - p[0]) * (r[0] - p[0]) + (q[1] - p[1]) * (r[1] - p[1]);
        let cos = (dot / (distance(p, q) * distance(p, r))).abs();
        if cos < best.1 {
            best = (i, cos);
        }
    }
    best
}

/// Refuses a mesh that is no lattice.
pub(super) fn check(mesh: &Mesh) -> Result<(), ModelError> {
    for t in 0..mesh.triangles.len() {
        let corners = mesh.corners(t);
        if right_corner(&corners).1 > 1e-6 {
            let [x, y] = corners.first().copied().unwrap_or(mesh.centre);
            return Err(ModelError::Mesh {
                x,
                y,
                why: "differences need a rectilinear lattice; mesh the ground as one".to_owned(),
            });
        }
    }
    Ok(())
}
