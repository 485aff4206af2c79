//! How large triangles may be, place by place.

use super::super::Point;
use super::distance;

/// The size asked for: in proportion to the distance from the nearest centre, and fine enough at the edge.
#[derive(Debug, Clone)]
pub(super) struct Size {
    /// Centres, the distance below which triangles shrink no further, and their side as a share of the distance.
    pub(super) centres: Vec<(Point, f64, f64)>,
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
            .fold(f64::INFINITY, f64::min);
        let (middle, radius, spacing) = self.edge;
        let inward = (radius - distance(middle, p)).max(0.0);
        near.min(spacing + 0.35 * inward)
    }

    /// The centre that sets the size at `p`, the first of equals.
    pub(super) fn owner(&self, p: Point) -> Option<usize> {
        let mut best: Option<(usize, f64)> = None;
        for (i, &(c, start, share)) in self.centres.iter().enumerate() {
            let d = share * distance(c, p).max(start);
            if best.is_none_or(|(_, least)| d < least) {
                best = Some((i, d));
            }
        }
        best.map(|(i, _)| i)
    }
}
