//! Lays the points of the mesh: what must be there, rings, and what fills the gaps.

use std::f64::consts::PI;

use super::super::Point;
use super::barrier::{Segment, Trace};
use super::centre::{Centre, Plan};
use super::near::Near;
use super::triangulate::{fail, triangulate};
use super::{Driver, cross, distance, line};
use crate::ModelError;

/// Two points may not lie closer than this share of the size asked for there.
const CLOSE: f64 = 0.7;
/// A triangle with a circumradius above this share of the size is a gap to be filled.
const GAP: f64 = 0.75;
/// Points keep this share of the size away from barriers and the edge, which have points of their own.
const CLEAR: f64 = 0.55;
/// Most points of a mesh: four times what a site with several barriers needs.
const MOST: usize = 40_000;
/// Passes of filling; a gap left after so many only makes a larger triangle.
const PASSES: usize = 24;

/// Points and triangles before barriers are doubled.
#[derive(Debug, Clone)]
pub(super) struct Laid {
    pub(super) points: Vec<Point>,
    pub(super) triangles: Vec<[usize; 3]>,
    /// Centre points come first: point `i` is centre `i`, for all centres.
    pub(super) rings: Vec<Vec<usize>>,
    /// Pieces of barriers.
    pub(super) pieces: Vec<(usize, [usize; 2])>,
    /// Pieces of stages and traces of wells.
    pub(super) drivers: Vec<(Driver, [usize; 2])>,
}

/// Lays points and triangulates them.
pub(super) fn lay(plan: &Plan) -> Result<Laid, ModelError> {
    let mut points: Vec<Point> = plan.centres.iter().map(|c| c.at).collect();
    let mut constraints = Vec::new();
    let mut rings = Vec::new();
    for place in &plan.wells {
        let Some((centre, radius)) = place.and_then(|(c, r)| Some((plan.centres.get(c)?, r)))
        else {
            rings.push(Vec::new());
            continue;
        };
        let ring = anchored_ring(plan, centre, radius, &mut points);
        for (i, &a) in ring.iter().enumerate() {
            if let Some(&b) = ring.get((i + 1) % ring.len()) {
                constraints.push(super::ordered(a, b));
            }
        }
        rings.push(ring);
    }
    constraints.sort_unstable();
    constraints.dedup();
    let Pieces {
        barriers,
        outlines,
        drivers,
    } = lay_lines(plan, &mut points)?;
    constraints.extend(barriers.iter().map(|(_, piece)| *piece));
    constraints.extend(outlines);
    constraints.extend(drivers.iter().map(|(_, piece)| *piece));
    constraints.sort_unstable();
    constraints.dedup();
    lay_outline(plan, &mut points);
    lay_rings(plan, &mut points);
    let mut triangles = triangulate(&points, &constraints, plan.apart)?;
    for _ in 0..PASSES {
        if !fill(plan, &mut points, &triangles) {
            break;
        }
        if points.len() > MOST {
            break;
        }
        triangles = triangulate(&points, &constraints, plan.apart)?;
    }
    if points.len() > MOST {
        let why = "the mesh needs more than 40,000 points; give barriers fewer corners";
        return Err(fail(plan.middle, why));
    }
    Ok(Laid {
        points,
        triangles,
        rings,
        pieces: barriers,
        drivers,
    })
}

/// The ring of a cut-out; wells of other layers with the same radius share it.
fn anchored_ring(plan: &Plan, centre: &Centre, radius: f64, points: &mut Vec<Point>) -> Vec<usize> {
    (0..centre.ring)
        .map(|k| {
            let p = on_ring(centre, radius, k, 0.0);
            let known = points.iter().position(|q| distance(*q, p) <= plan.apart);
            known.unwrap_or_else(|| {
                points.push(p);
                points.len() - 1
            })
        })
        .collect()
}

fn on_ring(centre: &Centre, radius: f64, k: usize, offset: f64) -> Point {
    let angle = centre.turn + 2.0 * PI * (k as f64 + offset) / centre.ring as f64;
    [
        centre.at[0] + radius * angle.cos(),
        centre.at[1] + radius * angle.sin(),
    ]
}

/// Pieces of lines, with what they are pieces of.
#[derive(Debug, Default)]
struct Pieces {
    barriers: Vec<(usize, [usize; 2])>,
    outlines: Vec<[usize; 2]>,
    drivers: Vec<(Driver, [usize; 2])>,
}

/// Points along lines of all kinds, spaced as the size asks, and the pieces between them.
fn lay_lines(plan: &Plan, points: &mut Vec<Point>) -> Result<Pieces, ModelError> {
    let mut pieces = Pieces::default();
    let all = plan.segments();
    for &(of, segment) in &all {
        // Lines that run together must lay the same points, whichever way they run.
        let (a, b) = match segment {
            (a, b) if (a[0], a[1]) > (b[0], b[1]) => (b, a),
            both => both,
        };
        let mut add = |p: Point| {
            let known = points.iter().position(|q| distance(*q, p) <= plan.apart);
            known.unwrap_or_else(|| {
                points.push(p);
                points.len() - 1
            })
        };
        let mut before = add(a);
        for share in shares(plan, &all, (a, b)) {
            let here = add([a[0] + share * (b[0] - a[0]), a[1] + share * (b[1] - a[1])]);
            let piece = super::ordered(before, here);
            match of {
                Trace::Barrier(barrier) => pieces.barriers.push((barrier, piece)),
                Trace::Zone(_) => pieces.outlines.push(piece),
                Trace::Well(w) => pieces.drivers.push((Driver::Well(w), piece)),
                Trace::Stage(s) => pieces.drivers.push((Driver::Stage(s), piece)),
            }
            before = here;
        }
    }
    let mut seen: Vec<[usize; 2]> = pieces.barriers.iter().map(|p| p.1).collect();
    seen.sort_unstable();
    for pair in seen.windows(2) {
        if let [a, b] = pair
            && a == b
        {
            let at = points.get(a[0]).copied().unwrap_or(plan.middle);
            return Err(fail(
                at,
                "a barrier runs twice along one line; leave one of them out",
            ));
        }
    }
    Ok(pieces)
}

/// Size asked for at a point of a line: no larger than the gap to a line beside it, down to a twentieth.
fn size_on_line(plan: &Plan, beside: &[Segment], p: Point) -> f64 {
    let h = plan.size.at(p);
    let gap = beside
        .iter()
        .map(|&(a, b)| line::from_segment(p, a, b))
        .fold(f64::INFINITY, f64::min);
    h.min(gap.max(0.05 * h))
}

/// Ends of the pieces of a segment, as ascending shares of it that end with one; at least two, so that a
/// barrier always has a point with two sides.
fn shares(plan: &Plan, all: &[(Trace, Segment)], (a, b): Segment) -> Vec<f64> {
    let length = distance(a, b);
    let meets = |&(c, d): &Segment| {
        let ends = [(a, c), (a, d), (b, c), (b, d)];
        ends.into_iter().any(|(p, q)| distance(p, q) <= plan.apart)
    };
    let beside: Vec<Segment> = all.iter().map(|s| s.1).filter(|s| !meets(s)).collect();
    let at = |s: f64| [a[0] + s * (b[0] - a[0]), a[1] + s * (b[1] - a[1])];
    // The number of pieces up to each station, found by small steps, since the size varies with place.
    let (mut s, mut count, mut track) = (0.0, 0.0, vec![(0.0, 0.0)]);
    while s < 1.0 {
        let h = size_on_line(plan, &beside, at(s));
        let step = (0.1 * h / length).max(1e-5).min(1.0 - s);
        let middle = size_on_line(plan, &beside, at(s + 0.5 * step));
        count += step * length / middle;
        s = if 1.0 - s - step < 1e-12 {
            1.0
        } else {
            s + step
        };
        track.push((s, count));
    }
    let mut pieces = 2.0;
    while pieces < count {
        pieces += 1.0;
    }
    let (mut ends, mut k, mut i) = (Vec::new(), 1.0, 1);
    while k < pieces {
        let wanted = k * count / pieces;
        while track.get(i).is_some_and(|t| t.1 < wanted) {
            i += 1;
        }
        if let (Some(low), Some(high)) = (track.get(i - 1), track.get(i)) {
            ends.push(low.0 + (high.0 - low.0) * (wanted - low.1) / (high.1 - low.1));
        }
        k += 1.0;
    }
    ends.push(1.0);
    ends
}

/// Points of the outline; where a barrier ends on it, its end stands for the nearest of them.
fn lay_outline(plan: &Plan, points: &mut Vec<Point>) {
    let ends: Vec<Point> = points
        .iter()
        .copied()
        .filter(|p| distance(*p, plan.middle) > (1.0 - 1e-9) * plan.outline)
        .collect();
    let spacing = plan.size.edge.2;
    for k in 0..plan.outline_points {
        let angle = 2.0 * PI * k as f64 / plan.outline_points as f64;
        let p = [
            plan.middle[0] + plan.outline * angle.cos(),
            plan.middle[1] + plan.outline * angle.sin(),
        ];
        if ends.iter().all(|e| distance(*e, p) > 0.4 * spacing) {
            points.push(p);
        }
    }
}

/// Rings round every centre, as far as it is the nearest one.
fn lay_rings(plan: &Plan, points: &mut Vec<Point>) {
    let lines = plan.segments();
    let mut wanted: Vec<(f64, Point)> = Vec::new();
    for (i, centre) in plan.centres.iter().enumerate() {
        let growth = (0.5 * 3f64.sqrt() * centre.share()).exp();
        let reach = plan.outline + distance(centre.at, plan.middle);
        for (k, &(radius, fixed)) in radii(centre, growth, reach).iter().enumerate() {
            if fixed {
                continue;
            }
            let offset = if k % 2 == 0 { 0.0 } else { 0.5 };
            for j in 0..centre.ring {
                let p = on_ring(centre, radius, j, offset);
                if plan.size.owner(p) == Some(i) && clear(plan, &lines, p) {
                    wanted.push((plan.size.at(p), p));
                }
            }
        }
    }
    wanted.sort_by(|a, b| a.0.total_cmp(&b.0));
    add_apart(plan, points, wanted.into_iter().map(|(h, p)| (p, h)));
}

/// Adds points in order, each unless another lies close for the size asked for there.
fn add_apart(plan: &Plan, points: &mut Vec<Point>, wanted: impl Iterator<Item = (Point, f64)>) {
    let mut near = Near::of(points, plan.middle, plan.outline);
    for (p, h) in wanted {
        if !near.any(p, CLOSE * h) {
            near.add(p);
            points.push(p);
        }
    }
}

/// Radii of the rings of a centre, and whether a ring is a cut-out's, laid already.
///
/// Rings alternate in angle; an even number of steps between cut-outs keeps both unturned.
fn radii(centre: &Centre, growth: f64, reach: f64) -> Vec<(f64, bool)> {
    let mut all: Vec<(f64, bool)> = Vec::new();
    for &anchor in &centre.anchors {
        if let Some(&(below, _)) = all.last() {
            let ratio = f64::ln(anchor / below);
            let mut steps = 2.0;
            while steps * growth.ln() < 0.8 * ratio {
                steps += 2.0;
            }
            let mut k = 1.0;
            while k < steps {
                all.push((below * (ratio * k / steps).exp(), false));
                k += 1.0;
            }
        }
        all.push((anchor, true));
    }
    if all.is_empty() {
        all.push((centre.start, false));
    }
    while let Some(&(last, _)) = all.last() {
        let next = last * growth;
        if next > reach {
            break;
        }
        all.push((next, false));
    }
    all
}

/// Whether a point is inside the edge and keeps off it and off barriers.
fn clear(plan: &Plan, lines: &[(Trace, Segment)], p: Point) -> bool {
    let h = plan.size.at(p);
    let apothem = plan.outline * (PI / plan.outline_points as f64).cos();
    apothem - distance(p, plan.middle) > CLEAR * h
        && lines
            .iter()
            .all(|&(_, (a, b))| line::from_segment(p, a, b) > CLEAR * h)
}

/// Puts points into the middle of triangles that are too large. Says whether there was one.
fn fill(plan: &Plan, points: &mut Vec<Point>, triangles: &[[usize; 3]]) -> bool {
    let lines = plan.segments();
    let mut wanted: Vec<(f64, Point)> = Vec::new();
    for t in triangles {
        let [Some(&a), Some(&b), Some(&c)] = t.map(|v| points.get(v)) else {
            continue;
        };
        let Some((middle, radius)) = circumcircle(a, b, c) else {
            continue;
        };
        let h = plan.size.at(middle);
        let in_first_ring = plan
            .centres
            .iter()
            .any(|centre| distance(centre.at, middle) < 0.99 * centre.start);
        if radius > GAP * h && !in_first_ring && clear(plan, &lines, middle) {
            wanted.push((h / radius, middle));
        }
    }
    wanted.sort_by(|a, b| a.0.total_cmp(&b.0));
    let before = points.len();
    let sized = wanted.into_iter().map(|(_, p)| (p, plan.size.at(p)));
    add_apart(plan, points, sized);
    points.len() > before
}

fn circumcircle(a: Point, b: Point, c: Point) -> Option<(Point, f64)> {
    let twice = cross(a, b, c);
    if twice <= 0.0 {
        return None;
    }
    let (u, v) = ([b[0] - a[0], b[1] - a[1]], [c[0] - a[0], c[1] - a[1]]);
    let (uu, vv) = (u[0] * u[0] + u[1] * u[1], v[0] * v[0] + v[1] * v[1]);
    let x = (v[1] * uu - u[1] * vv) / (2.0 * twice);
    let y = (u[0] * vv - v[0] * uu) / (2.0 * twice);
    Some(([a[0] + x, a[1] + y], x.hypot(y)))
}
