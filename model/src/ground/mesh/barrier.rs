//! What of the barriers lies inside the edge, and which of them cannot be meshed.
//!
//! Barriers and outlines of zones are both lines that triangles must not cross: traces.

use std::f64::consts::PI;

use super::super::{Ground, Point};
use super::centre::Plan;
use super::triangulate::fail;
use super::{distance, line};
use crate::ModelError;

/// What a line belongs to, by its order in the ground.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Trace {
    Barrier(usize),
    Zone(usize),
    Well(usize),
    Stage(usize),
}

impl Trace {
    /// What it is, for messages.
    pub(super) fn name(self, ground: &Ground) -> String {
        match self {
            Self::Barrier(b) => {
                let name = ground.barriers.get(b).map_or("", |b| b.name.as_str());
                format!("barrier {name}")
            }
            Self::Zone(z) => {
                let name = ground.zones.get(z).map_or("", |z| z.name.as_str());
                format!("the outline of zone {name}")
            }
            Self::Well(w) => {
                let name = ground.wells.get(w).map_or("", |w| w.name.as_str());
                format!("the trace of well {name}")
            }
            Self::Stage(s) => {
                let name = ground.stages.get(s).map_or("", |s| s.name.as_str());
                format!("stage {name}")
            }
        }
    }
}

/// A part of a line inside the edge.
#[derive(Debug, Clone)]
pub(super) struct Part {
    pub(super) of: Trace,
    pub(super) line: Vec<Point>,
}

/// A piece of a line from corner to corner.
pub(super) type Segment = (Point, Point);

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
                self.place_ends(&format!("barrier {}", barrier.name), &part);
                self.lines.push(Part {
                    of: Trace::Barrier(b),
                    line: part,
                });
            }
        }
        Ok(())
    }

    /// Flow crowds at the ends of a barrier or trace and at its sharp corners: they are centres too.
    pub(super) fn place_ends(&mut self, name: &str, part: &[Point]) {
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
            let index = self.add(p, name);
            if let Some(centre) = self.centres.get_mut(index) {
                centre.on_barrier = true;
                centre.turn = (toward[1] - p[1]).atan2(toward[0] - p[0]);
                // The flow's singularity is strong at an end and weak at a corner.
                centre.start = if end { 0.02 } else { 0.3 } * distance(p, toward);
            }
        }
    }

    /// Refuses lines that cross, and lines that leave a corner too close together.
    pub(super) fn check_lines(&self, ground: &Ground) -> Result<(), ModelError> {
        let all = self.segments();
        for (i, &(b, s)) in all.iter().enumerate() {
            for &(c, t) in all.iter().skip(i + 1) {
                let zones = matches!(b, Trace::Zone(_)) || matches!(c, Trace::Zone(_));
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
                    // An outline may follow a barrier or another outline.
                    let one = zones && same(q, r);
                    if !one && line::angle(p, q, r) < 0.1 {
                        let why = format!(
                            "{} and {} run back along each other; {}",
                            b.name(ground),
                            c.name(ground),
                            if zones {
                                "let them share a line or part at a wider angle"
                            } else {
                                "leave one of them out"
                            }
                        );
                        return Err(fail(p, &why));
                    }
                } else if line::between(s, t) <= 1e3 * self.apart {
                    let why = format!(
                        "{} and {} cross; give both a corner at the crossing",
                        b.name(ground),
                        c.name(ground)
                    );
                    return Err(fail(line::meeting(s, t), &why));
                }
            }
        }
        Ok(())
    }

    /// All segments of lines inside the edge, with what they belong to.
    pub(super) fn segments(&self) -> Vec<(Trace, Segment)> {
        let pairs = self.lines.iter().flat_map(|part| {
            part.line.windows(2).filter_map(move |w| match w {
                &[a, b] => Some((part.of, (a, b))),
                _ => None,
            })
        });
        pairs.collect()
    }
}
