//! What the mesh is drawn round: wells, gauges, neighbours, ends and corners of barriers, the edge.

use std::f64::consts::PI;

use super::super::{Ground, Point, Seat};
use super::barrier::{Part, Trace};
use super::size::Size;
use super::triangulate::fail;
use super::{MeshOptions, capacity, distance, line, outline_factor};
use crate::ModelError;

/// A point with rings round it.
#[derive(Debug, Clone)]
pub(super) struct Centre {
    pub(super) at: Point,
    /// Circumradii that rings must have exactly: the cut-outs of wells, ascending.
    pub(super) anchors: Vec<f64>,
    /// Radius of the first ring.
    pub(super) start: f64,
    /// Direction of the first point of the first ring \[radians\].
    pub(super) turn: f64,
    /// Points on each ring.
    pub(super) ring: usize,
    /// Whether it is an end or corner of a barrier.
    pub(super) on_barrier: bool,
    /// What it is, for messages.
    pub(super) name: String,
}

impl Centre {
    /// Side of a triangle as a share of its distance from here.
    pub(super) fn share(&self) -> f64 {
        2.0 * (PI / self.ring as f64).sin()
    }
}

/// All that points are laid from.
#[derive(Debug, Clone)]
pub(super) struct Plan {
    /// Points on a ring, and on one round a well.
    ring: (usize, usize),
    pub(super) centres: Vec<Centre>,
    /// Centre of each well, and which of its anchors is the well's; none of a well with a trace.
    pub(super) wells: Vec<Option<(usize, f64)>>,
    /// Centre of each gauge in the ground that has one.
    pub(super) gauges: Vec<Option<usize>>,
    /// Centre of each neighbour that has one.
    pub(super) neighbours: Vec<Option<usize>>,
    /// Barriers and outlines of zones.
    pub(super) lines: Vec<Part>,
    pub(super) middle: Point,
    /// Circumradius of the outline.
    pub(super) outline: f64,
    /// Points on the outline.
    pub(super) outline_points: usize,
    pub(super) size: Size,
    /// Points closer than this are one.
    pub(super) apart: f64,
}

/// Where a point of the ground stands.
enum Spot {
    /// At this centre, found or made.
    Centre(usize),
    /// In the circle of a well of another layer: interpolated.
    Between,
}

impl Plan {
    pub(super) fn of(ground: &Ground, options: &MeshOptions) -> Result<Self, ModelError> {
        check_numbers(ground)?;
        let ring = options.ring();
        let radius = ground.edge.distance;
        let outline_points = 2 * ring;
        let outline = radius * outline_factor(ground.edge.kind, outline_points);
        let mut plan = Self {
            // At a well the logarithm is followed down to its radius, and there its error is felt in full.
            ring: (ring, ring + ring / 2),
            centres: Vec::new(),
            wells: Vec::new(),
            gauges: Vec::new(),
            neighbours: Vec::new(),
            lines: Vec::new(),
            middle: middle(ground),
            outline,
            outline_points,
            size: Size {
                centres: Vec::new(),
                lines: Vec::new(),
                line_share: 2.0 * (PI / ring as f64).sin(),
                edge: (
                    middle(ground),
                    radius,
                    2.0 * outline * (PI / outline_points as f64).sin(),
                ),
            },
            apart: 1e-9 * radius,
        };
        plan.place_wells(ground)?;
        for gauge in &ground.gauges {
            let place = match gauge.seat {
                Seat::InWell(_) => None,
                Seat::InGround { at, layer } => {
                    plan.place(ground, at, layer, &format!("gauge {}", gauge.name))?
                }
            };
            plan.gauges.push(place);
        }
        for other in &ground.neighbours {
            let name = format!("neighbour {}", other.name);
            let place = plan.place(ground, other.at, other.layer, &name)?;
            plan.neighbours.push(place);
        }
        plan.place_barriers(ground)?;
        plan.place_zones(ground)?;
        plan.place_drivers(ground)?;
        if plan
            .lines
            .iter()
            .any(|part| !matches!(part.of, Trace::Barrier(_)))
        {
            plan.add_corners();
        }
        plan.check_lines(ground)?;
        plan.settle(ground)?;
        plan.size.lines = plan.fine_lines();
        plan.size.centres = plan
            .centres
            .iter()
            .map(|c| (c.at, c.start, c.share()))
            .collect();
        Ok(plan)
    }

    fn place_wells(&mut self, ground: &Ground) -> Result<(), ModelError> {
        let factor = 1.0 / capacity(self.ring.1);
        for (w, well) in ground.wells.iter().enumerate() {
            if !well.trace.is_empty() {
                self.wells.push(None);
                continue;
            }
            let radius = factor * well.radius * (-well.skin.min(0.0)).exp();
            let others = ground.wells.iter().take(w);
            let twin = others.filter(|o| o.trace.is_empty()).find(|o| {
                o.layers().any(|l| well.meets(l)) && distance(o.at, well.at) <= self.apart
            });
            if let Some(twin) = twin {
                let why = format!(
                    "wells {} and {} stand at one place in one layer; make them one well",
                    twin.name, well.name
                );
                return Err(fail(well.at, &why));
            }
            let name = format!("well {}", well.name);
            let index = self
                .find(well.at)
                .unwrap_or_else(|| self.add(well.at, &name));
            let ring = self.ring.1;
            if let Some(centre) = self.centres.get_mut(index) {
                centre.ring = ring;
                let close =
                    |a: &f64| (a / radius).ln().abs() < 0.2 && (a / radius - 1.0).abs() > 1e-9;
                if centre.anchors.iter().any(close) {
                    let why = format!(
                        "{} and {name} share a place with nearly equal radii; give them one radius, or move one by a metre",
                        centre.name
                    );
                    return Err(fail(well.at, &why));
                }
                let known = centre
                    .anchors
                    .iter()
                    .find(|a| (**a / radius - 1.0).abs() <= 1e-9);
                let radius = known.copied().unwrap_or(radius);
                if known.is_none() {
                    centre.anchors.push(radius);
                    centre.anchors.sort_by(f64::total_cmp);
                }
                self.wells.push(Some((index, radius)));
            }
        }
        Ok(())
    }

    pub(super) fn find(&self, at: Point) -> Option<usize> {
        self.centres
            .iter()
            .position(|c| distance(c.at, at) <= self.apart)
    }

    pub(super) fn add(&mut self, at: Point, name: &str) -> usize {
        self.centres.push(Centre {
            at,
            anchors: Vec::new(),
            start: f64::NAN,
            turn: 0.0,
            ring: self.ring.0,
            on_barrier: false,
            name: name.to_owned(),
        });
        self.centres.len() - 1
    }

    fn place(
        &mut self,
        ground: &Ground,
        at: Point,
        layer: usize,
        name: &str,
    ) -> Result<Option<usize>, ModelError> {
        match self.spot(ground, at, layer, name)? {
            Spot::Centre(index) => Ok(Some(index)),
            Spot::Between => Ok(None),
        }
    }

    fn spot(
        &mut self,
        ground: &Ground,
        at: Point,
        layer: usize,
        name: &str,
    ) -> Result<Spot, ModelError> {
        let mut within = false;
        for (well, place) in ground.wells.iter().zip(&self.wells) {
            let Some((_, radius)) = *place else { continue };
            let d = distance(well.at, at);
            if d > 3.0 * radius {
                continue;
            }
            if well.meets(layer) {
                let why = format!(
                    "{name} stands in well {} (within {:.2} m of it, skin included); seat it in the well, or move it",
                    well.name,
                    3.0 * radius
                );
                return Err(fail(at, &why));
            }
            within = true;
        }
        if let Some(index) = self.find(at) {
            return Ok(Spot::Centre(index));
        }
        if within {
            return Ok(Spot::Between);
        }
        Ok(Spot::Centre(self.add(at, name)))
    }

    /// First rings, once all centres are known, and what makes them impossible.
    fn settle(&mut self, ground: &Ground) -> Result<(), ModelError> {
        let segments = self.segments();
        let all = self.centres.clone();
        for (i, centre) in self.centres.iter_mut().enumerate() {
            let reach = centre.anchors.last().copied().unwrap_or(0.0);
            let from_middle = distance(centre.at, self.middle);
            let barrier_end = centre.on_barrier;
            if !barrier_end && from_middle + 3.0 * reach > 0.95 * self.outline {
                let why = format!(
                    "{} lies outside the edge; give the edge a distance above {:.0} m",
                    centre.name,
                    (from_middle + 3.0 * reach) / 0.95
                );
                return Err(fail(centre.at, &why));
            }
            let mut nearest = f64::INFINITY;
            for (j, other) in all.iter().enumerate() {
                if i == j {
                    continue;
                }
                let d = distance(centre.at, other.at);
                let both = reach + other.anchors.last().copied().unwrap_or(0.0);
                if d < 3.0 * both {
                    let why = format!(
                        "{} and {} stand {d:.2} m apart, too near for circles of {both:.2} m (skin included); move one of them",
                        centre.name, other.name
                    );
                    return Err(fail(centre.at, &why));
                }
                nearest = nearest.min(d);
            }
            let (mut barrier, mut nearest_line) = (f64::INFINITY, None);
            for &(of, (a, b)) in &segments {
                let own = distance(a, centre.at).min(distance(b, centre.at)) <= self.apart;
                if own && barrier_end {
                    continue;
                }
                let away = line::from_segment(centre.at, a, b);
                if away < barrier {
                    (barrier, nearest_line) = (away, Some(of));
                }
            }
            if barrier < (3.0 * reach).max(100.0 * self.apart) {
                let passes = match nearest_line {
                    Some(Trace::Zone(_)) => "the outline or the point",
                    Some(Trace::Well(_) | Trace::Stage(_)) => "the line or the point",
                    _ => "the barrier or the point",
                };
                let why = format!(
                    "{} passes through {}; move {passes} to the side it belongs to",
                    nearest_line.map_or_else(String::new, |of| of.name(ground)),
                    centre.name
                );
                return Err(fail(centre.at, &why));
            }
            let wanted = if centre.start.is_nan() {
                1.0
            } else {
                centre.start
            };
            centre.start = match centre.anchors.first() {
                Some(&least) => least,
                None if barrier_end => wanted.min(0.3 * nearest).min(0.3 * barrier),
                None => wanted.min(0.1 * nearest).min(0.3 * barrier),
            };
        }
        Ok(())
    }
}

/// The mean of wells and gauges, each named place once per name.
fn middle(ground: &Ground) -> Point {
    let wells = ground.wells.iter().map(|w| w.at);
    let gauges = (0..ground.gauges.len()).filter_map(|g| ground.gauge_at(g).map(|(at, _)| at));
    let (mut sum, mut count) = ([0.0, 0.0], 0.0);
    for p in wells.chain(gauges) {
        sum = [sum[0] + p[0], sum[1] + p[1]];
        count += 1.0;
    }
    if count == 0.0 {
        return sum;
    }
    [sum[0] / count, sum[1] / count]
}

fn check_numbers(ground: &Ground) -> Result<(), ModelError> {
    let finite = |p: Point| p[0].is_finite() && p[1].is_finite();
    let corners = ground.barriers.iter().map(|b| &b.line);
    let corners = corners.chain(ground.zones.iter().map(|z| &z.outline));
    let corners = corners.chain(ground.wells.iter().map(|w| &w.trace));
    let corners = corners.chain(ground.stages.iter().map(|s| &s.line));
    let corners = corners.flatten().copied();
    let mut places = ground
        .wells
        .iter()
        .map(|w| w.at)
        .chain((0..ground.gauges.len()).filter_map(|g| ground.gauge_at(g).map(|(at, _)| at)))
        .chain(ground.neighbours.iter().map(|n| n.at))
        .chain(corners);
    if !places.all(finite) {
        return Err(ModelError::NotFinite("a place of the ground"));
    }
    let positive = |what: String, value: f64| {
        if value.is_finite() && value > 0.0 {
            return Ok(());
        }
        let must = "it must be positive and finite";
        Err(ModelError::Parameter { what, value, must })
    };
    positive("edge.distance".to_owned(), ground.edge.distance)?;
    for well in &ground.wells {
        positive(format!("radius of well {}", well.name), well.radius)?;
        if !(-6.0..=50.0).contains(&well.skin) {
            return Err(ModelError::Parameter {
                what: format!("skin of well {}", well.name),
                value: well.skin,
                must: "it must lie between -6 and 50",
            });
        }
    }
    Ok(())
}
