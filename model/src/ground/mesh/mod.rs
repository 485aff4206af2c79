//! A triangle mesh fitted to a ground: rings round every well, gauge and neighbour, barriers as doubled lines.
//!
//! Pressure near a well is a logarithm of the distance, so triangles grow in proportion to the distance from
//! the nearest point of interest: the same number of points lies on each ring round it, and each ring stands
//! off from the last by the height of a near-equilateral triangle. What is left between the rings of
//! neighbouring points is filled until no gap is larger than the size asked for there, which keeps every
//! angle above 25 degrees away from barriers.

mod barrier;
mod centre;
mod lattice;
mod line;
mod lines;
mod near;
mod points;
mod polygon;
mod quality;
mod size;
mod split;
mod triangulate;
mod zone;

use serde::{Deserialize, Serialize};

use super::{EdgeKind, Ground, Point};
use crate::ModelError;

pub use polygon::capacity;
pub use quality::Quality;

/// How fine a mesh is to be.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct MeshOptions {
    /// Points on a ring round a gauge or neighbour, 8 to 40; rings round wells have half as many again.
    pub points_per_ring: usize,
    /// Factor on that number: below one for a coarser second mesh, 0.5 to 2.
    pub refine: f64,
}

impl Default for MeshOptions {
    fn default() -> Self {
        Self {
            points_per_ring: 16,
            refine: 1.0,
        }
    }
}

impl MeshOptions {
    /// Points on a ring round a gauge after [`MeshOptions::refine`], 8 to 80.
    #[must_use]
    pub fn ring(&self) -> usize {
        let wanted = self.points_per_ring as f64 * self.refine;
        (8..=80)
            .rev()
            .find(|n| *n as f64 <= wanted + 0.5)
            .unwrap_or(8)
    }
}

/// A triangle mesh of one layer's plane; all layers share it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Mesh {
    /// Vertices; on a barrier one for each side.
    pub points: Vec<Point>,
    /// Corners of each triangle, counter-clockwise.
    pub triangles: Vec<[usize; 3]>,
    /// One cut-out per well of the ground, in order.
    pub wells: Vec<CutOut>,
    /// Segments of the outer boundary.
    pub edge: Vec<[usize; 2]>,
    /// Pieces of barriers.
    pub joints: Vec<Joint>,
    /// Pieces of stages and of traces of wells.
    pub lines: Vec<Piece>,
    /// Vertex of each gauge of the ground that has one of its own; others are interpolated or sit in a well.
    pub gauges: Vec<Option<usize>>,
    /// Vertex of each neighbour of the ground that has one of its own; others are interpolated.
    pub neighbours: Vec<Option<usize>>,
    /// Centre of the outer boundary: the mean of wells and gauges.
    pub centre: Point,
    /// Distance of the outer boundary from it \[m\].
    pub radius: f64,
}

/// The circle cut out for a well in its own layers; a well with a trace has none.
///
/// A polygon stands for the circle of radius `r_w exp(-min(skin, 0))`, drawn so that it has the same
/// logarithmic capacity: the same pressure far away at the same rate and ring pressure.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct CutOut {
    /// Its corners, in order.
    pub ring: Vec<usize>,
    /// The triangles inside it: ground in other layers, nothing in the well's own.
    pub inside: Vec<usize>,
    /// The centre.
    pub middle: usize,
}

/// A piece of a line that drives the ground.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub struct Piece {
    /// What it is a piece of.
    pub of: Driver,
    /// Its ends.
    pub ends: [usize; 2],
}

/// What drives the ground along a line, by its order in the ground.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub enum Driver {
    /// A well with a trace.
    Well(usize),
    /// A stage.
    Stage(usize),
}

/// A piece of a barrier: the same two places, seen from either side.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub struct Joint {
    /// The barrier, by its order in the ground.
    pub barrier: usize,
    /// Its ends as vertices of one side.
    pub one: [usize; 2],
    /// The same ends as vertices of the other side.
    pub other: [usize; 2],
}

impl Mesh {
    /// Meshes the ground.
    ///
    /// # Errors
    /// [`ModelError::Mesh`] names the place of what stands in the way: a point outside the edge, a barrier
    /// through a well, barriers that cross, a gauge in the circle of a well of its own layer.
    pub fn fit(ground: &Ground, options: &MeshOptions) -> Result<Self, ModelError> {
        let plan = centre::Plan::of(ground, options)?;
        let laid = points::lay(&plan)?;
        split::assemble(ground, &plan, laid)
    }

    /// Corners of a triangle.
    #[must_use]
    pub fn corners(&self, triangle: usize) -> [Point; 3] {
        let at = |v: usize| self.points.get(v).copied().unwrap_or([f64::NAN; 2]);
        self.triangles
            .get(triangle)
            .map_or([[f64::NAN; 2]; 3], |t| t.map(at))
    }

    /// Sides of all triangles, each once, as ascending pairs of vertices in ascending order.
    #[must_use]
    pub fn sides(&self) -> Vec<[usize; 2]> {
        let mut all: Vec<[usize; 2]> = self
            .triangles
            .iter()
            .flat_map(|&[a, b, c]| [ordered(a, b), ordered(b, c), ordered(c, a)])
            .collect();
        all.sort_unstable();
        all.dedup();
        all
    }

    /// Checks that the mesh is one: every triangle counter-clockwise, every inner side shared by two, every
    /// other side part of the edge or of a barrier, the whole as large as its outline.
    ///
    /// # Errors
    /// [`ModelError::Mesh`] at the first place where it is not.
    pub fn check(&self) -> Result<(), ModelError> {
        let bad = |p: Point, why: &str| {
            Err(ModelError::Mesh {
                x: p[0],
                y: p[1],
                why: format!("{why}; make the ground file anew with commission"),
            })
        };
        let points = self.points.len();
        let known = |v: &usize| *v < points;
        let listed = self.triangles.iter().flatten().all(known)
            && self.edge.iter().flatten().all(known)
            && self
                .joints
                .iter()
                .all(|j| j.one.iter().chain(&j.other).all(known))
            && self.lines.iter().all(|p| p.ends.iter().all(known))
            && self.wells.iter().all(|w| {
                known(&w.middle)
                    && w.ring.iter().all(known)
                    && w.inside.iter().all(|t| *t < self.triangles.len())
            })
            && self
                .gauges
                .iter()
                .chain(&self.neighbours)
                .flatten()
                .all(known);
        if !listed {
            return bad(self.centre, "the mesh names a vertex it does not have");
        }
        let mut total = 0.0;
        for t in 0..self.triangles.len() {
            let corners = self.corners(t);
            let twice = cross(corners[0], corners[1], corners[2]);
            if twice.is_nan() || twice <= 0.0 {
                return bad(corners[0], "a triangle is flat or turned over");
            }
            total += 0.5 * twice;
        }
        let mut outline: Vec<[usize; 2]> = self.edge.iter().map(|&[a, b]| ordered(a, b)).collect();
        for joint in &self.joints {
            outline.push(ordered(joint.one[0], joint.one[1]));
            outline.push(ordered(joint.other[0], joint.other[1]));
        }
        outline.sort_unstable();
        let mut all: Vec<[usize; 2]> = self
            .triangles
            .iter()
            .flat_map(|&[a, b, c]| [ordered(a, b), ordered(b, c), ordered(c, a)])
            .collect();
        all.sort_unstable();
        for same in all.chunk_by(|a, b| a == b) {
            let Some(&side) = same.first() else { continue };
            let alone = outline.binary_search(&side).is_ok();
            if same.len() != if alone { 1 } else { 2 } {
                let at = self.points.get(side[0]).copied().unwrap_or(self.centre);
                return bad(at, "a side of a triangle is joined wrongly");
            }
        }
        let mut expected = 0.0;
        for &[a, b] in &self.edge {
            if let (Some(&a), Some(&b)) = (self.points.get(a), self.points.get(b)) {
                expected += 0.5 * cross(self.centre, a, b);
            }
        }
        if (total - expected).abs() > 1e-9 * expected.abs() {
            return bad(self.centre, "triangles overlap or leave a gap");
        }
        Ok(())
    }
}

/// The pair in ascending order.
pub(crate) fn ordered(a: usize, b: usize) -> [usize; 2] {
    if a < b { [a, b] } else { [b, a] }
}

/// Twice the signed area of the triangle `a b c`.
pub(crate) fn cross(a: Point, b: Point, c: Point) -> f64 {
    (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])
}

/// Distance between two points.
pub(crate) fn distance(a: Point, b: Point) -> f64 {
    (a[0] - b[0]).hypot(a[1] - b[1])
}

/// Circumradius factor of the outer boundary: a closed edge keeps the circle's area.
fn outline_factor(kind: EdgeKind, sides: usize) -> f64 {
    match kind {
        EdgeKind::Closed => polygon::equal_area(sides),
        EdgeKind::Open | EdgeKind::Fixed | EdgeKind::Driven => 1.0,
    }
}
