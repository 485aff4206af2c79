//! Lines that drive the ground: stages, and traces of wells.

use super::super::{Ground, Point};
use super::barrier::{Part, Trace};
use super::centre::Plan;
use super::triangulate::fail;
use super::{distance, line};
use crate::ModelError;

/// Points along a trace, at least: early flow into it is straight, and must be followed from so near.
const ALONG: f64 = 60.0;

impl Plan {
    /// Lays traces of wells, which must lie inside the edge, and what of the stages lies inside it.
    pub(super) fn place_drivers(&mut self, ground: &Ground) -> Result<(), ModelError> {
        for (w, well) in ground.wells.iter().enumerate() {
            if well.trace.is_empty() {
                continue;
            }
            let of = Trace::Well(w);
            let line = self.corners(&of.name(ground), &well.trace)?;
            if let Some(&beyond) = line
                .iter()
                .find(|p| distance(**p, self.middle) > 0.95 * self.outline)
            {
                let why = format!(
                    "well {} lies outside the edge; give the edge a distance above {:.0} m",
                    well.name,
                    distance(beyond, self.middle) / 0.95
                );
                return Err(fail(beyond, &why));
            }
            self.place_ends(&format!("well {}", well.name), &line);
            self.lines.push(Part { of, line });
        }
        for (s, stage) in ground.stages.iter().enumerate() {
            let of = Trace::Stage(s);
            let corners = self.corners(&of.name(ground), &stage.line)?;
            let parts = line::inside(&corners, self.middle, self.outline);
            if parts.is_empty() {
                let first = corners.first().copied().unwrap_or(self.middle);
                let why = format!(
                    "stage {} lies outside the edge; remove it, or give the edge a larger distance",
                    stage.name
                );
                return Err(fail(first, &why));
            }
            for line in parts {
                self.lines.push(Part { of, line });
            }
        }
        self.apart_traces(ground)
    }

    /// Corners of a line, each once.
    fn corners(&self, name: &str, line: &[Point]) -> Result<Vec<Point>, ModelError> {
        let mut corners = line.to_vec();
        corners.dedup_by(|p, q| distance(*p, *q) <= self.apart);
        if corners.len() < 2 {
            let first = corners.first().copied().unwrap_or(self.middle);
            let why = format!("{name} has no length; give it two corners");
            return Err(fail(first, &why));
        }
        Ok(corners)
    }

    /// Refuses traces that meet in one layer: their wells would be one.
    fn apart_traces(&self, ground: &Ground) -> Result<(), ModelError> {
        let all = self.segments();
        for (i, &(one, s)) in all.iter().enumerate() {
            for &(other, t) in all.iter().skip(i + 1) {
                let (Trace::Well(w), Trace::Well(v)) = (one, other) else {
                    continue;
                };
                let wells = ground.wells.get(w).zip(ground.wells.get(v));
                let joined = wells.is_some_and(|(a, b)| a.layers().any(|l| b.meets(l)));
                if w != v && joined && line::between(s, t) <= 1e3 * self.apart {
                    let why = format!(
                        "{} and {} meet in one layer; move them apart, or make them one well",
                        one.name(ground),
                        other.name(ground)
                    );
                    return Err(fail(line::meeting(s, t), &why));
                }
            }
        }
        Ok(())
    }

    /// Lines beside which triangles must be small, and how small.
    pub(super) fn fine_lines(&self) -> Vec<((Point, Point), Option<f64>)> {
        let mut fine = Vec::new();
        for part in &self.lines {
            let length: f64 = part
                .line
                .windows(2)
                .map(|w| match w {
                    &[a, b] => distance(a, b),
                    _ => 0.0,
                })
                .sum();
            let start = match part.of {
                Trace::Well(_) => Some(length / (ALONG * self.size.line_share)),
                Trace::Stage(_) => None,
                Trace::Barrier(_) | Trace::Zone(_) => continue,
            };
            fine.extend(part.line.windows(2).filter_map(|w| match w {
                &[a, b] => Some(((a, b), start)),
                _ => None,
            }));
        }
        fine
    }
}
