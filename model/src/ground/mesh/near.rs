//! Points in a tree of squares, so that finding a close one takes no longer on a large mesh.

use super::super::Point;
use super::distance;

/// Points a square holds before it is parted into four.
const FULL: usize = 8;
/// Partings at most; points that fall together would part a square for ever.
const DEEPEST: usize = 60;

/// A set of points that grows.
#[derive(Debug, Clone)]
pub(super) struct Near {
    squares: Vec<Square>,
}

#[derive(Debug, Clone)]
struct Square {
    middle: Point,
    half: f64,
    points: Vec<Point>,
    /// The first of its four parts, where it is parted.
    parts: Option<usize>,
}

impl Near {
    /// Points within a circle.
    pub(super) fn of(points: &[Point], middle: Point, radius: f64) -> Self {
        let mut near = Self {
            squares: vec![Square {
                middle,
                half: radius,
                points: Vec::new(),
                parts: None,
            }],
        };
        points.iter().for_each(|p| near.add(*p));
        near
    }

    /// Adds a point; one outside the circle too.
    pub(super) fn add(&mut self, p: Point) {
        let (mut at, mut depth) = (0, 0);
        while let Some((middle, Some(first))) = self.squares.get(at).map(|s| (s.middle, s.parts)) {
            at = first + part(middle, p);
            depth += 1;
        }
        let Some(square) = self.squares.get_mut(at) else {
            return;
        };
        square.points.push(p);
        if square.points.len() > FULL && depth < DEEPEST {
            self.split(at);
        }
    }

    fn split(&mut self, at: usize) {
        let first = self.squares.len();
        let Some(square) = self.squares.get_mut(at) else {
            return;
        };
        square.parts = Some(first);
        let (middle, half) = (square.middle, 0.5 * square.half);
        let points = std::mem::take(&mut square.points);
        for (x, y) in [(-1.0, -1.0), (1.0, -1.0), (-1.0, 1.0), (1.0, 1.0)] {
            self.squares.push(Square {
                middle: [middle[0] + x * half, middle[1] + y * half],
                half,
                points: Vec::new(),
                parts: None,
            });
        }
        for p in points {
            if let Some(square) = self.squares.get_mut(first + part(middle, p)) {
                square.points.push(p);
            }
        }
    }

    /// Whether a point lies within a distance of `p`, that distance included.
    pub(super) fn any(&self, p: Point, within: f64) -> bool {
        let mut open = vec![0];
        while let Some(square) = open.pop().and_then(|at: usize| self.squares.get(at)) {
            if square.points.iter().any(|q| distance(*q, p) <= within) {
                return true;
            }
            if let Some(first) = square.parts {
                // A square on the rim also holds what lies beyond it, so only middle lines bound what is looked at.
                let middle = square.middle;
                let (left, right) = (p[0] - within <= middle[0], p[0] + within > middle[0]);
                let (below, above) = (p[1] - within <= middle[1], p[1] + within > middle[1]);
                for (k, meets) in [left && below, right && below, left && above, right && above]
                    .into_iter()
                    .enumerate()
                {
                    if meets {
                        open.push(first + k);
                    }
                }
            }
        }
        false
    }
}

/// Which of the four parts of a square holds a point.
fn part(middle: Point, p: Point) -> usize {
    usize::from(p[0] > middle[0]) + 2 * usize::from(p[1] > middle[1])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn it_finds_what_a_walk_over_all_points_finds() {
        let spiral = |k: u32| {
            let (angle, r) = (f64::from(k) * 2.4, 1e-2 * f64::from(k % 97).exp2().min(1e5));
            [r * angle.cos(), r * angle.sin()]
        };
        let points: Vec<Point> = (0..600).map(spiral).chain([[3e5, 1.0]; 12]).collect();
        let near = Near::of(&points, [0.0, 0.0], 1e3);
        for k in 0..400 {
            let p = spiral(7 * k + 3);
            for within in [1e-6, 0.1, 3.0, 500.0] {
                let walked = points.iter().any(|q| distance(*q, p) <= within);
                assert_eq!(near.any(p, within), walked, "{p:?} {within}");
            }
        }
    }
}
