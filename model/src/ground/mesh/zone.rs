//! Outlines of zones: lines that triangles keep to, which may follow or cross barriers and each other.

use super::super::{Ground, Point};
use super::barrier::{Part, Segment, Trace};
use super::centre::Plan;
use super::triangulate::fail;
use super::{distance, line};
use crate::ModelError;

impl Plan {
    /// Lays the parts of all outlines that lie inside the edge.
    pub(super) fn place_zones(&mut self, ground: &Ground) -> Result<(), ModelError> {
        for (z, zone) in ground.zones.iter().enumerate() {
            let outline = self.outline_of(&zone.name, &zone.outline)?;
            let parts = line::inside(&outline, self.middle, self.outline);
            if parts.is_empty() && !zone.holds(self.middle) {
                let at = outline.first().copied().unwrap_or(self.middle);
                let why = format!(
                    "zone {} lies outside the edge; remove it, or give the edge a larger distance",
                    zone.name
                );
                return Err(fail(at, &why));
            }
            for line in parts {
                let of = Trace::Zone(z);
                self.lines.push(Part { of, line });
            }
        }
        Ok(())
    }

    /// The outline as a closed line without doubled corners.
    fn outline_of(&self, name: &str, corners: &[Point]) -> Result<Vec<Point>, ModelError> {
        let same = |p: Point, q: Point| distance(p, q) <= self.apart;
        let mut outline: Vec<Point> = corners.to_vec();
        outline.dedup_by(|p, q| same(*p, *q));
        if let (Some(&first), Some(&last)) = (outline.first(), outline.last())
            && outline.len() > 1
            && same(first, last)
        {
            outline.pop();
        }
        let first = outline.first().copied().unwrap_or(self.middle);
        if outline.len() < 3 {
            let why = format!("zone {name} has no area; give its outline three corners or more");
            return Err(fail(first, &why));
        }
        outline.push(first);
        let sides: Vec<Segment> = outline
            .windows(2)
            .filter_map(|w| match w {
                &[a, b] => Some((a, b)),
                _ => None,
            })
            .collect();
        for (i, &s) in sides.iter().enumerate() {
            for (j, &t) in sides.iter().enumerate().skip(i + 1) {
                let next = j == i + 1 || (i == 0 && j + 1 == sides.len());
                if !next && line::between(s, t) <= 1e3 * self.apart {
                    let why = format!(
                        "the outline of zone {name} crosses itself; list its corners in order"
                    );
                    return Err(fail(line::meeting(s, t), &why));
                }
            }
        }
        Ok(outline)
    }

    /// Puts a corner into every line where an outline, a stage or a trace meets it.
    pub(super) fn add_corners(&mut self) {
        let all = self.segments();
        let near = 1e3 * self.apart;
        for part in &mut self.lines {
            let mut cut: Vec<Point> = Vec::new();
            for pair in part.line.windows(2) {
                let &[a, b] = pair else { continue };
                let mut places = vec![a];
                for &(of, (c, d)) in &all {
                    let barriers = matches!((of, part.of), (Trace::Barrier(_), Trace::Barrier(_)));
                    if barriers || of == part.of || line::between((a, b), (c, d)) > near {
                        continue;
                    }
                    let ends = [c, d]
                        .into_iter()
                        .filter(|&p| line::from_segment(p, a, b) <= near);
                    let before = places.len();
                    places.extend(ends);
                    // Two that only cross have no end in common and none on the other.
                    let touches = [a, b]
                        .into_iter()
                        .any(|p| line::from_segment(p, c, d) <= near);
                    if places.len() == before && !touches {
                        places.push(line::meeting((a, b), (c, d)));
                    }
                }
                places.sort_by(|p, q| distance(a, *p).total_cmp(&distance(a, *q)));
                places.dedup_by(|p, q| distance(*p, *q) <= near);
                places.retain(|p| distance(*p, b) > near);
                // The corner itself stands for what falls on it.
                if let Some(first) = places.first_mut()
                    && distance(*first, a) <= near
                {
                    *first = a;
                }
                cut.extend(places);
            }
            cut.extend(part.line.last());
            part.line = cut;
        }
    }
}
