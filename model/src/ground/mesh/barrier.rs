//! What of the barriers lies inside the edge, and which of them cannot be meshed.

use std::f64::consts::PI;

use super::super::{Ground, Point};
use super::centre::Plan;
use super::triangulate::fail;
use super::{distance, line};
use crate::ModelError;

/// A part of a barrier inside the edge.
#[derive(Debug, Clone)]
pub(super) struct Part {
    pub(super) barrier: usize,
    pub(super) line: Vec<Point>,
}

impl Plan {
    /// Lays the parts of all barriers that lie inside the edge.
    pub(super) fn place_barriers(&mut self, ground: &Ground) -> Result<(), ModelError> {
        for (b, barrier) in ground.barriers.iter().enumerate() {
            let mut corners: Vec<Point> = barrier.line.clone();
            corners.dedup_by(|p, q| distance(*p, *q) <= self.apart);
            let first = corners.first().copied().unwrap_or(self.middle);
            if corners.len() < 2 {
                let why = format!(
                    "barrier {} has no length; give it two corners",
                    barrier.name
                );
                return Err(fail(first, &why));
            }
            let parts = line::inside(&corners, self.middle, self.outline);
            if parts.is_empty() {
                let why = format!(
                    "barrier {} lies outside the edge; remove it, or give the edge a larger distance",
                    barrier.name
                );
                return Err(fail(first, &why));
            }
            for part in parts {
                self.place_ends(&barrier.name, &part);
                self.barriers.push(Part {
                    barrier: b,
                    line: part,
                });
            }
        }
        self.check_barriers(ground)
    }

    /// Flow crowds at the ends of a barrier and at its sharp corners: they are centres too.
    fn place_ends(&mut self, name: &str, part: &[Point]) {
        let closed = matches!((part.first(), part.last()), (Some(a), Some(b)) if distance(*a, *b) <= self.apart);
        let last = part.len().saturating_sub(1);
        for (i, &p) in part.iter().enumerate() {
            let near = distance(p, self.middle) > 0.999 * self.outline;
            let end = i == 0 || i == last;
            let straight = !end
                && match (part.get(i - 1), part.get(i + 1)) {
                    (Some(&q), Some(&r)) => line::angle(p, q, r) > 0.8 * PI,
                    _ => false,
                };
            if near || straight || (end && closed && i == last) || self.find(p).is_some() {
                continue;
            }
            let toward = part
                .get(if i == 0 { 1 } else { i - 1 })
                .copied()
                .unwrap_or(p);
            let index = self.add(p, &format!("barrier {name}"));
            if let Some(centre) = self.centres.get_mut(index) {
                centre.on_barrier = true;
                centre.turn = (toward[1] - p[1]).atan2(toward[0] - p[0]);
                // The flow's singularity is strong at an end and weak at a corner.
                centre.start = if end { 0.02 } else { 0.3 } * distance(p, toward);
            }
        }
    }

    fn check_barriers(&self, ground: &Ground) -> Result<(), ModelError> {
        let name = |b: usize| ground.barriers.get(b).map_or("", |b| b.name.as_str());
        let all = self.segments();
        for (i, &(b, s)) in all.iter().enumerate() {
            for &(c, t) in all.iter().skip(i + 1) {
                let same = |p: Point, q: Point| distance(p, q) <= self.apart;
                let shared = [
                    (s.0, s.1, t.0, t.1),
                    (s.0, s.1, t.1, t.0),
                    (s.1, s.0, t.0, t.1),
                    (s.1, s.0, t.1, t.0),
                ]
                .into_iter()
                .find(|&(p, _, q, _)| same(p, q));
                if let Some((p, q, _, r)) = shared {
                    if line::angle(p, q, r) < 0.1 {
                        let why = format!(
                            "barriers {} and {} run back along each other; leave one of them out",
                            name(b),
                            name(c)
                        );
                        return Err(fail(p, &why));
                    }
                } else if line::between(s, t) <= 1e3 * self.apart {
                    let why = format!(
                        "barriers {} and {} cross; give both a corner at the crossing",
                        name(b),
                        name(c)
                    );
                    return Err(fail(meeting(s, t), &why));
                }
            }
        }
        Ok(())
    }

    /// All segments of barriers inside the edge, with their barrier.
    pub(super) fn segments(&self) -> Vec<(usize, (Point, Point))> {
        let pairs = self.barriers.iter().flat_map(|part| {
            part.line.windows(2).filter_map(move |w| match w {
                &[a, b] => Some((part.barrier, (a, b))),
                _ => None,
            })
        });
        pairs.collect()
    }
}

/// Where two crossing segments meet, or the first's start where they only touch.
fn meeting((a, b): (Point, Point), (c, d): (Point, Point)) -> Point {
    let (u, v) = ([b[0] - a[0], b[1] - a[1]], [d[0] - c[0], d[1] - c[1]]);
    let det = u[0] * v[1] - u[1] * v[0];
    if det == 0.0 {
        return a;
    }
    let t = ((c[0] - a[0]) * v[1] - (c[1] - a[1]) * v[0]) / det;
    let t = t.clamp(0.0, 1.0);
    [a[0] + t * u[0], a[1] + t * u[1]]
}
