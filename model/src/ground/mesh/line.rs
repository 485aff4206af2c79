//! Segments: distances, crossings, and what of a barrier lies inside the edge.

use super::super::Point;
use super::{cross, distance};

/// Distance of `p` from the segment `a b`.
pub(super) fn from_segment(p: Point, a: Point, b: Point) -> f64 {
    let d = [b[0] - a[0], b[1] - a[1]];
    let square = d[0] * d[0] + d[1] * d[1];
    if square == 0.0 {
        return distance(p, a);
    }
    let t = (((p[0] - a[0]) * d[0] + (p[1] - a[1]) * d[1]) / square).clamp(0.0, 1.0);
    distance(p, [a[0] + t * d[0], a[1] + t * d[1]])
}

/// Distance between two segments; zero where they cross.
pub(super) fn between((a, b): (Point, Point), (c, d): (Point, Point)) -> f64 {
    let apart = |p, q, r, s| cross(p, q, r) * cross(p, q, s) > 0.0;
    if !apart(a, b, c, d) && !apart(c, d, a, b) {
        let collinear = cross(a, b, c) == 0.0 && cross(a, b, d) == 0.0;
        if !collinear {
            return 0.0;
        }
    }
    from_segment(a, c, d)
        .min(from_segment(b, c, d))
        .min(from_segment(c, a, b))
        .min(from_segment(d, a, b))
}

/// Where two crossing segments meet, or the first's start where they only touch.
pub(super) fn meeting((a, b): (Point, Point), (c, d): (Point, Point)) -> Point {
    let (u, v) = ([b[0] - a[0], b[1] - a[1]], [d[0] - c[0], d[1] - c[1]]);
    let det = u[0] * v[1] - u[1] * v[0];
    if det == 0.0 {
        return a;
    }
    let t = ((c[0] - a[0]) * v[1] - (c[1] - a[1]) * v[0]) / det;
    let t = t.clamp(0.0, 1.0);
    [a[0] + t * u[0], a[1] + t * u[1]]
}

/// Angle between the directions `p -> q` and `p -> r` \[radians, 0 to pi\].
pub(super) fn angle(p: Point, q: Point, r: Point) -> f64 {
    let dot = (q[0] - p[0]) * (r[0] - p[0]) + (q[1] - p[1]) * (r[1] - p[1]);
    cross(p, q, r).abs().atan2(dot)
}

/// The parts of a polyline inside a circle; ends cut off by the circle lie on it.
pub(super) fn inside(line: &[Point], middle: Point, radius: f64) -> Vec<Vec<Point>> {
    let mut parts: Vec<Vec<Point>> = Vec::new();
    let mut open = false;
    for pair in line.windows(2) {
        let &[a, b] = pair else { continue };
        let Some((from, to)) = chord(a, b, middle, radius) else {
            open = false;
            continue;
        };
        let at = |t: f64| [a[0] + t * (b[0] - a[0]), a[1] + t * (b[1] - a[1])];
        let on = |t: f64| onto(at(t), middle, radius);
        let start = if from > 0.0 { on(from) } else { a };
        let end = if to < 1.0 { on(to) } else { b };
        match parts.last_mut() {
            Some(part) if open && from <= 0.0 => part.push(end),
            _ => parts.push(vec![start, end]),
        }
        open = to >= 1.0;
    }
    parts
}

/// The share of the segment `a b` that lies inside the circle, as parameters of its ends.
fn chord(a: Point, b: Point, middle: Point, radius: f64) -> Option<(f64, f64)> {
    let d = [b[0] - a[0], b[1] - a[1]];
    let f = [a[0] - middle[0], a[1] - middle[1]];
    let (qa, qb) = (d[0] * d[0] + d[1] * d[1], f[0] * d[0] + f[1] * d[1]);
    let qc = f[0] * f[0] + f[1] * f[1] - radius * radius;
    let root = qb * qb - qa * qc;
    if qa == 0.0 || root <= 0.0 {
        return None;
    }
    let root = root.sqrt();
    let (from, to) = (((-qb - root) / qa).max(0.0), ((-qb + root) / qa).min(1.0));
    (to > from).then_some((from, to))
}

/// `p` moved onto the circle.
fn onto(p: Point, middle: Point, radius: f64) -> Point {
    let d = distance(p, middle);
    if d == 0.0 {
        return p;
    }
    let k = radius / d;
    [
        middle[0] + k * (p[0] - middle[0]),
        middle[1] + k * (p[1] - middle[1]),
    ]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_line_through_the_circle_is_cut_twice() {
        let parts = inside(&[[-3.0, 0.0], [0.5, 0.0], [0.5, 3.0]], [0.0, 0.0], 1.0);
        assert_eq!(parts.len(), 1);
        let part = &parts[0];
        assert_eq!(part.len(), 3);
        assert!(distance(part[0], [-1.0, 0.0]) < 1e-12);
        assert!((distance(part[2], [0.0, 0.0]) - 1.0).abs() < 1e-12);
    }

    #[test]
    fn a_line_that_comes_back_has_two_parts() {
        let line = [[0.0, 0.0], [3.0, 0.0], [3.0, 0.5], [0.0, 0.5]];
        assert_eq!(inside(&line, [0.0, 0.0], 1.0).len(), 2);
        assert!(inside(&[[2.0, 0.0], [3.0, 1.0]], [0.0, 0.0], 1.0).is_empty());
    }

    #[test]
    fn crossing_segments_have_no_distance() {
        let a = ([0.0, 0.0], [1.0, 1.0]);
        assert_eq!(between(a, ([0.0, 1.0], [1.0, 0.0])), 0.0);
        assert!((between(a, ([2.0, 2.0], [3.0, 3.0])) - 2f64.sqrt()).abs() < 1e-12);
        assert!((between(a, ([0.0, -1.0], [1.0, -1.0])) - 1.0).abs() < 1e-12);
    }
}
