//! Indicators of Voronoi cells as test functions, with a two-point flux through each face.
//!
//! A face of two cells stands square on the line between their vertices, so the flux through it is the
//! pressure difference over the distance, times the face's length. A triangle holds the part of each face
//! between the middle of its side and its circumcentre; a part counts negative where the circumcentre lies
//! beyond the side, and on a Delaunay mesh the two parts of a face never sum to less than nothing.
//! On such a mesh the conduction equals that of linear elements (Bank & Rose 1987, SIAM J. Numer. Anal. 24).

use super::space::{Local, MOST, Space};
use crate::ground::{ISOTROPIC, Point, Tensor};

pub(super) struct FiniteVolume;

impl Space for FiniteVolume {
    fn midsides(&self) -> bool {
        false
    }

    fn storage(&self, corners: &[Point; 3]) -> Local {
        // Each face part and the half side it stands on make a right triangle of the cell at either end.
        let mut local = Local::zero(3);
        let faces = faces(corners);
        if let Some(obtuse) = faces.iter().position(|(face, _)| *face < 0.0) {
            // The circumcentre lies outside, and at an edge nothing makes up for what counts negative: the obtuse corner has half
            // of the triangle and the others a quarter (Meyer et al. 2003, Visualization and Mathematics III, from memory).
            let area: f64 = faces.iter().map(|(face, side)| 0.5 * face * side).sum();
            for (i, row) in local.entries.iter_mut().enumerate().take(3) {
                if let Some(entry) = row.get_mut(i) {
                    *entry = area * if i == obtuse { 0.5 } else { 0.25 };
                }
            }
            return local;
        }
        for (k, (face, side)) in faces.into_iter().enumerate() {
            for (i, row) in local.entries.iter_mut().enumerate().take(3) {
                if i != k
                    && let Some(entry) = row.get_mut(i)
                {
                    *entry += 0.25 * face * side;
                }
            }
        }
        local
    }

    fn takes(&self, tensor: &Tensor) -> bool {
        // Two pressures tell the flux through a face only where that flows straight across it.
        *tensor == ISOTROPIC
    }

    fn conduction(&self, corners: &[Point; 3], _tensor: &Tensor) -> Local {
        let mut local = Local::zero(3);
        for (k, (face, side)) in faces(corners).into_iter().enumerate() {
            let flux = face / side;
            for (i, row) in local.entries.iter_mut().enumerate().take(3) {
                for (j, entry) in row.iter_mut().enumerate().take(3) {
                    if i != k && j != k {
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

    fn values(&self, corners: &[Point; 3], shares: [f64; 3]) -> [f64; MOST] {
        // The cell that holds the point is that of the nearest corner.
        let at = |i: usize| -> f64 {
            corners
                .iter()
                .zip(shares)
                .map(|(c, s)| s * c.get(i).copied().unwrap_or(0.0))
                .sum()
        };
        let p = [at(0), at(1)];
        let [a, b, c] = corners.map(|q| (p[0] - q[0]).hypot(p[1] - q[1]));
        if a <= b && a <= c {
            [1.0, 0.0, 0.0, 0.0, 0.0, 0.0]
        } else if b <= c {
            [0.0, 1.0, 0.0, 0.0, 0.0, 0.0]
        } else {
            [0.0, 0.0, 1.0, 0.0, 0.0, 0.0]
        }
    }
}

/// For the side opposite to each corner: the signed length of the face part on it, and its own length.
///
/// The circumcentre stands above the middle of a side by half the side's length times the cotangent of the angle
/// opposite to it. Differences of corners are all that is used, so that small triangles far from the origin lose nothing.
fn faces(&[a, b, c]: &[Point; 3]) -> [(f64, f64); 3] {
    let twice = (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0]);
    let of = |top: Point, p: Point, q: Point| {
        let (u, v) = (
            [p[0] - top[0], p[1] - top[1]],
            [q[0] - top[0], q[1] - top[1]],
        );
        let side = (q[0] - p[0]).hypot(q[1] - p[1]);
        (0.5 * side * (u[0] * v[0] + u[1] * v[1]) / twice, side)
    };
    [of(a, b, c), of(b, c, a), of(c, a, b)]
}
