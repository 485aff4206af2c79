//! How large triangles may be, place by place.

use super::super::Point;
use super::{distance, line};

/// Triangles at a line shrink no further than at this share of the distance from the nearest centre.
const NEAR_LINE: f64 = 0.25;

/// The size asked for: in proportion to the distance from the nearest centre, and fine enough at the edge.
#[derive(Debug, Clone)]
pub(super) struct Size {
    /// Centres, the distance below which triangles shrink no further, and their side as a share of the distance.
    pub(super) centres: Vec<(Point, f64, f64)>,
    /// Lines that drive the ground: their ends, and the distance from them below which triangles shrink no further, where
    /// that is not a share of the distance from the nearest centre.
    pub(super) lines: Vec<((Point, Point), Option<f64>)>,
    /// Side of a triangle as a share of its distance from a line.
    pub(super) line_share: f64,
    /// Centre, radius and spacing of points of the outer boundary.
    pub(super) edge: (Point, f64, f64),
}

impl Size {
    /// Side of a triangle at `p` \[m\].
    pub(super) fn at(&self, p: Point) -> f64 {
        let near = self
            .centres
            .iter()
            .map(|&(c, start, share)| share * distance(c, p).max(start))
            .fold(self.beside_lines(p), f64::min);
        let (middle, radius, spacing) = self.edge;
        let inward = (radius - distance(middle, p)).max(0.0);
        near.min(spacing + 0.35 * inward)
    }

    /// Side of a triangle at `p` as the lines ask \[m\].
    fn beside_lines(&self, p: Point) -> f64 {
        if self.lines.is_empty() {
            return f64::INFINITY;
        }
        let nearest = self
            .centres
            .iter()
            .map(|&(c, _, _)| distance(c, p))
            .fold(f64::INFINITY, f64::min);
        self.lines
            .iter()
            .map(|&((a, b), start)| {
                let start = start.unwrap_or(NEAR_LINE * nearest);
                self.line_share * line::from_segment(p, a, b).max(start)
            })
            .fold(f64::INFINITY, f64::min)
    }

    /// The centre that sets the size at `p`, the first of equals; none where a line does.
    pub(super) fn owner(&self, p: Point) -> Option<usize> {
        let mut best: Option<(usize, f64)> = None;
        for (i, &(c, start, share)) in self.centres.iter().enumerate() {
            let d = share * distance(c, p).max(start);
            if best.is_none_or(|(_, least)| d < least) {
                best = Some((i, d));
            }
        }
        best.filter(|b| b.1 <= self.beside_lines(p)).map(|(i, _)| i)
    }
}
