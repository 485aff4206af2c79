//! A rectilinear lattice with lines through every well, gauge and neighbour, for finite differences.

use super::super::{Ground, Point, Seat};
use super::centre::Plan;
use super::triangulate::fail;
use super::{CutOut, Mesh, MeshOptions};
use crate::ModelError;

impl Mesh {
    /// A rectilinear lattice over the square whose half side is the distance of the edge.
    ///
    /// Lines pass through every well, gauge and neighbour; between them they stand wider apart with distance, from
    /// a hundredth of the site's extent up. A well is the node it stands on: its pressure is that at the equivalent
    /// radius of its cell, 0.1985 of the spacing where that is even (Peaceman 1978, SPEJ 18), not that of the bore.
    /// Zones of one pressure, such as cut-outs, and barriers have no place on a lattice.
    ///
    /// # Errors
    /// As [`Mesh::fit`]; [`ModelError::Mesh`] for a ground with barriers.
    pub fn lattice(ground: &Ground, options: &MeshOptions) -> Result<Self, ModelError> {
        if let Some(barrier) = ground.barriers.first() {
            let at = barrier.line.first().copied().unwrap_or_default();
            return Err(fail(
                at,
                "a lattice cannot follow a barrier; use a triangle mesh",
            ));
        }
        let traces = ground.wells.iter().map(|w| &w.trace);
        let lines = traces.chain(ground.stages.iter().map(|s| &s.line));
        if let Some(&at) = lines.flatten().next() {
            let why = "a lattice cannot follow a stage or the trace of a well; use a triangle mesh";
            return Err(fail(at, why));
        }
        let plan = Plan::of(ground, options)?;
        let radius = ground.edge.distance;
        let along = |axis: usize| {
            let middle = plan.middle.get(axis).copied().unwrap_or_default();
            let places = plan.centres.iter().filter_map(|c| c.at.get(axis).copied());
            stations(
                places.collect(),
                middle,
                radius,
                2.0 / options.ring() as f64,
                plan.apart,
            )
        };
        let (xs, ys) = (along(0), along(1));
        let mut mesh = rectangles(&xs, &ys, plan.middle, radius);
        let nearest = |p: Point| {
            let index = |lines: &[f64], x: f64| {
                let mut best = (0, f64::INFINITY);
                for (i, line) in lines.iter().enumerate() {
                    if (line - x).abs() < best.1 {
                        best = (i, (line - x).abs());
                    }
                }
                best.0
            };
            index(&ys, p[1]) * xs.len() + index(&xs, p[0])
        };
        for well in &ground.wells {
            let middle = nearest(well.at);
            mesh.wells.push(CutOut {
                ring: vec![middle],
                inside: Vec::new(),
                middle,
            });
        }
        mesh.gauges = ground
            .gauges
            .iter()
            .map(|gauge| match gauge.seat {
                Seat::InWell(_) => None,
                Seat::InGround { at, .. } => Some(nearest(at)),
            })
            .collect();
        mesh.neighbours = ground
            .neighbours
            .iter()
            .map(|n| Some(nearest(n.at)))
            .collect();
        Ok(mesh)
    }
}

/// Rectangles between lines, each halved by its diagonal.
fn rectangles(xs: &[f64], ys: &[f64], centre: Point, radius: f64) -> Mesh {
    let columns = xs.len();
    let points = ys
        .iter()
        .flat_map(|y| xs.iter().map(|x| [*x, *y]))
        .collect();
    let (mut triangles, mut edge) = (Vec::new(), Vec::new());
    let (right, top) = (columns.saturating_sub(1), ys.len().saturating_sub(1));
    for j in 0..top {
        for i in 0..right {
            let a = j * columns + i;
            let (b, c, d) = (a + 1, a + columns + 1, a + columns);
            triangles.extend([[a, b, c], [a, c, d]]);
            if j == 0 {
                edge.push([a, b]);
            }
            if j + 1 == top {
                edge.push([c, d]);
            }
            if i == 0 {
                edge.push([d, a]);
            }
            if i + 1 == right {
                edge.push([b, c]);
            }
        }
    }
    Mesh {
        points,
        triangles,
        wells: Vec::new(),
        edge,
        joints: Vec::new(),
        lines: Vec::new(),
        gauges: Vec::new(),
        neighbours: Vec::new(),
        centre,
        radius,
    }
}

/// Positions of lines: at every place asked for, and between them as close as the distance from the nearest asks.
fn stations(mut places: Vec<f64>, middle: f64, radius: f64, share: f64, apart: f64) -> Vec<f64> {
    places.sort_by(f64::total_cmp);
    places.dedup_by(|a, b| (*a - *b).abs() <= 10.0 * apart);
    let extent = match (places.first(), places.last()) {
        (Some(a), Some(b)) if b > a => b - a,
        _ => radius / 10.0,
    };
    let least = 0.08 * share * extent;
    let mut ends = vec![middle - radius];
    ends.extend(places);
    ends.push(middle + radius);
    let mut all = Vec::new();
    let last = ends.len().saturating_sub(2);
    for (k, pair) in ends.windows(2).enumerate() {
        let &[a, b] = pair else { continue };
        all.push(a);
        // The number of lines up to each station, spaced by the distance from the nearer place.
        let size = |x: f64| {
            let from_left = if k == 0 { f64::INFINITY } else { x - a };
            let from_right = if k == last { f64::INFINITY } else { b - x };
            (share * from_left.min(from_right)).max(least)
        };
        let (mut x, mut count, mut track) = (a, 0.0, vec![(a, 0.0)]);
        while x < b {
            let step = (0.1 * size(x)).min(b - x);
            count += step / size(x + 0.5 * step);
            x = if b - x - step < 1e-9 * (b - a) {
                b
            } else {
                x + step
            };
            track.push((x, count));
        }
        let mut pieces = 1.0;
        while pieces < count {
            pieces += 1.0;
        }
        let (mut n, mut i) = (1.0, 1);
        while n < pieces {
            let wanted = n * count / pieces;
            while track.get(i).is_some_and(|t| t.1 < wanted) {
                i += 1;
            }
            if let (Some(low), Some(high)) = (track.get(i - 1), track.get(i)) {
                all.push(low.0 + (high.0 - low.0) * (wanted - low.1) / (high.1 - low.1));
            }
            n += 1.0;
        }
    }
    all.push(middle + radius);
    all
}
