//! What a mesh is like: size, angles, grading, and the signs of two-point conductances.

use std::collections::BTreeMap;

use serde::{Deserialize, Serialize};

use super::super::Point;
use super::{Mesh, cross, ordered};

/// What a mesh is like outside the cut-outs of wells.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Quality {
    /// Vertices.
    pub vertices: usize,
    /// Triangles.
    pub triangles: usize,
    /// Vertices and sides together: the nodes of quadratic elements in one layer.
    pub quadratic_nodes: usize,
    /// The smallest angle of any triangle \[degrees\].
    pub least_angle: f64,
    /// Where it is.
    pub least_angle_at: Point,
    /// The largest ratio of the sizes of two triangles that share a side, as lengths.
    pub grading: f64,
    /// Where it is.
    pub grading_at: Point,
    /// Inner sides whose two-point conductance in an even ground is below nothing: where no maximum principle holds for
    /// linear elements and volumes. None on a Delaunay mesh; lines that triangles keep to may force some.
    pub negative_conductances: usize,
}

impl Mesh {
    /// What the mesh is like.
    #[must_use]
    pub fn quality(&self) -> Quality {
        let mut inside: Vec<usize> = self.wells.iter().flat_map(|w| w.inside.clone()).collect();
        inside.sort_unstable();
        let mut quality = Quality {
            vertices: self.points.len(),
            triangles: self.triangles.len(),
            quadratic_nodes: self.points.len() + self.sides().len(),
            least_angle: 180.0,
            least_angle_at: self.centre,
            grading: 1.0,
            grading_at: self.centre,
            negative_conductances: 0,
        };
        // For each side: the cotangents of the angles opposite to it, and the areas beside it.
        let mut sides: BTreeMap<[usize; 2], (f64, Vec<f64>)> = BTreeMap::new();
        for (t, &[a, b, c]) in self.triangles.iter().enumerate() {
            if inside.binary_search(&t).is_ok() {
                continue;
            }
            let [p, q, r] = self.corners(t);
            let twice = cross(p, q, r);
            for (top, from, to, side) in [(p, q, r, [b, c]), (q, r, p, [c, a]), (r, p, q, [a, b])] {
                let dot =
                    (from[0] - top[0]) * (to[0] - top[0]) + (from[1] - top[1]) * (to[1] - top[1]);
                let angle = twice.atan2(dot).to_degrees();
                if angle < quality.least_angle {
                    (quality.least_angle, quality.least_angle_at) = (angle, top);
                }
                let entry = sides.entry(ordered(side[0], side[1])).or_default();
                entry.0 += dot / twice;
                entry.1.push(twice);
            }
        }
        for (side, (cotangents, areas)) in &sides {
            let &[one, other] = areas.as_slice() else {
                continue;
            };
            if *cotangents < -1e-9 {
                quality.negative_conductances += 1;
            }
            let ratio = (one / other).max(other / one).sqrt();
            if ratio > quality.grading {
                let at = self.points.get(side[0]).copied();
                (quality.grading, quality.grading_at) = (ratio, at.unwrap_or(self.centre));
            }
        }
        quality
    }
}
