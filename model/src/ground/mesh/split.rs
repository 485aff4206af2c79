//! Gives every point of a barrier one vertex for each side, and puts the mesh together.

use std::collections::BTreeMap;

use super::super::{Ground, Point, Seat};
use super::centre::Plan;
use super::points::Laid;
use super::triangulate::fail;
use super::{CutOut, Joint, Mesh, Piece, distance, ordered};
use crate::ModelError;

/// The mesh from what was laid.
pub(super) fn assemble(ground: &Ground, plan: &Plan, laid: Laid) -> Result<Mesh, ModelError> {
    let Laid {
        mut points,
        mut triangles,
        rings,
        pieces,
        drivers,
    } = laid;
    let original = triangles.clone();
    let sides = sides_of(&original);
    let barrier: BTreeMap<[usize; 2], usize> = pieces.iter().map(|&(b, s)| (s, b)).collect();
    double(&mut points, &mut triangles, &original, &sides, &barrier);

    let mut joints = Vec::new();
    let mut edge = Vec::new();
    for (side, owners) in &sides {
        let seen = |t: usize| view(&original, &triangles, t, *side);
        match (owners.as_slice(), barrier.get(side)) {
            (&[one, other], Some(&barrier)) => {
                if let (Some(one), Some(other)) = (seen(one), seen(other)) {
                    joints.push(Joint {
                        barrier,
                        one,
                        other,
                    });
                }
            }
            (&[one], _) => {
                if let Some([a, b]) = seen(one) {
                    edge.push(counter_clockwise(&triangles, one, a, b));
                }
            }
            _ => {}
        }
    }
    let apart = joints.iter().find(|j| j.one == j.other);
    if let Some(joint) = apart {
        let at = points.get(joint.one[0]).copied().unwrap_or(plan.middle);
        return Err(fail(
            at,
            "a barrier is too short to have two sides; leave it out",
        ));
    }
    // Both sides of a piece that no barrier follows see the same vertices.
    let lines = drivers
        .iter()
        .filter_map(|&(of, side)| {
            let owner = sides.get(&side)?.first()?;
            let ends = view(&original, &triangles, *owner, side)?;
            Some(Piece { of, ends })
        })
        .collect();
    let wells = plan
        .wells
        .iter()
        .zip(&ground.wells)
        .zip(rings)
        .map(|((place, well), ring)| {
            let Some((middle, radius)) = *place else {
                let start = well.trace.first().and_then(|p| plan.find(*p));
                return CutOut {
                    ring,
                    inside: Vec::new(),
                    middle: start.unwrap_or_default(),
                };
            };
            let at = points.get(middle).copied().unwrap_or(plan.middle);
            let inside = (0..triangles.len())
                .filter(|&t| distance(middle_of(&points, triangles.get(t)), at) < 0.99 * radius)
                .collect();
            CutOut {
                ring,
                inside,
                middle,
            }
        })
        .collect();
    let gauges = ground
        .gauges
        .iter()
        .zip(&plan.gauges)
        .map(|(gauge, vertex)| match gauge.seat {
            Seat::InWell(_) => None,
            Seat::InGround { .. } => *vertex,
        })
        .collect();
    Ok(Mesh {
        points,
        triangles,
        wells,
        edge,
        joints,
        lines,
        gauges,
        neighbours: plan.neighbours.clone(),
        centre: plan.middle,
        radius: plan.size.edge.1,
    })
}

/// The mean of a triangle's corners.
fn middle_of(points: &[Point], corners: Option<&[usize; 3]>) -> Point {
    let mut sum = [0.0, 0.0];
    for v in corners.into_iter().flatten() {
        let p = points.get(*v).copied().unwrap_or([f64::NAN; 2]);
        sum = [sum[0] + p[0] / 3.0, sum[1] + p[1] / 3.0];
    }
    sum
}

type Sides = BTreeMap<[usize; 2], Vec<usize>>;

fn sides_of(triangles: &[[usize; 3]]) -> Sides {
    let mut sides = Sides::new();
    for (t, &[a, b, c]) in triangles.iter().enumerate() {
        for side in [ordered(a, b), ordered(b, c), ordered(c, a)] {
            sides.entry(side).or_default().push(t);
        }
    }
    sides
}

/// Splits each point of a barrier into one vertex for each fan of triangles that no barrier parts.
///
/// An end within the ground has one fan and stays single; a point along the line has two; where lines
/// meet there are as many as sectors.
fn double(
    points: &mut Vec<Point>,
    triangles: &mut [[usize; 3]],
    original: &[[usize; 3]],
    sides: &Sides,
    barrier: &BTreeMap<[usize; 2], usize>,
) {
    let mut touched: Vec<usize> = barrier.keys().flatten().copied().collect();
    touched.sort_unstable();
    touched.dedup();
    let mut round: BTreeMap<usize, Vec<usize>> = touched.iter().map(|&v| (v, Vec::new())).collect();
    for (t, corners) in original.iter().enumerate() {
        for v in corners {
            if let Some(list) = round.get_mut(v) {
                list.push(t);
            }
        }
    }
    for (&v, fan) in &round {
        let mut left = fan.clone();
        let mut first = true;
        while let Some(&seed) = left.first() {
            let sector = reach(seed, v, original, sides, barrier);
            left.retain(|t| !sector.contains(t));
            if first {
                first = false;
                continue;
            }
            let copy = points.len();
            if let Some(&p) = points.get(v) {
                points.push(p);
            }
            for &t in &sector {
                if let (Some(now), Some(before)) = (triangles.get_mut(t), original.get(t)) {
                    for (slot, old) in now.iter_mut().zip(before) {
                        if *old == v {
                            *slot = copy;
                        }
                    }
                }
            }
        }
    }
}

/// The triangles round `v` that are reached from `seed` without crossing a barrier.
fn reach(
    seed: usize,
    v: usize,
    original: &[[usize; 3]],
    sides: &Sides,
    barrier: &BTreeMap<[usize; 2], usize>,
) -> Vec<usize> {
    let mut found = vec![seed];
    let mut next = 0;
    while let Some(&t) = found.get(next) {
        next += 1;
        let corners = original.get(t).copied().unwrap_or([v; 3]);
        for w in corners.into_iter().filter(|w| *w != v) {
            let side = ordered(v, w);
            if barrier.contains_key(&side) {
                continue;
            }
            for &other in sides.get(&side).into_iter().flatten() {
                if !found.contains(&other) {
                    found.push(other);
                }
            }
        }
    }
    found
}

/// A side as the vertices that triangle `t` has there now.
fn view(
    original: &[[usize; 3]],
    now: &[[usize; 3]],
    t: usize,
    side: [usize; 2],
) -> Option<[usize; 2]> {
    let (before, after) = (original.get(t)?, now.get(t)?);
    let find = |v: usize| {
        before
            .iter()
            .position(|&o| o == v)
            .and_then(|i| after.get(i).copied())
    };
    Some([find(side[0])?, find(side[1])?])
}

/// The side in the sense in which triangle `t` runs round.
fn counter_clockwise(triangles: &[[usize; 3]], t: usize, a: usize, b: usize) -> [usize; 2] {
    match triangles.get(t) {
        Some(&[p, q, r]) if [[p, q], [q, r], [r, p]].contains(&[b, a]) => [b, a],
        _ => [a, b],
    }
}
