//! Where a leak may be looked for, and the mirror images of wells in barriers nobody declared.
//!
//! A leak may sit anywhere inside the outline of wells and gauges and some way round it: the candidates are a
//! hexagonal lattice with rings close to every well and gauge, where signatures change fastest. A straight sealing
//! barrier acts like an image of every well behind it (Ferris et al. 1962, USGS WSP 1536-E): a fan of lines by
//! distance and azimuth, each with one image a well. Images lie anywhere, so their ports are mixed from those of a polar
//! lattice. Images near the outer edge are left out, because the edge of the model would answer them.

use std::f64::consts::TAU;

use crate::ground::{Ground, Point};
use crate::weak_form::Rock;

/// Spacing of the lattice of candidates, as a share of the array's half-width.
const SPACING: f64 = 0.12;
/// Radius of the lattice, as a multiple of the array's half-width.
const REACH: f64 = 1.45;
/// Radii of the rings round wells and gauges, as shares of the array's half-width.
const RINGS: [f64; 2] = [0.025, 0.06];
/// Points on a ring.
const ON_RING: u32 = 6;
/// Azimuths of the fan of barriers.
const AZIMUTHS: u32 = 20;
/// Distance of a line behind the outermost well or gauge, as multiples of the array's half-width.
const BEHIND: [f64; 7] = [0.06, 0.2, 0.45, 0.8, 1.3, 2.0, 3.2];
/// The lattice of images: its innermost ring and the farthest image, in half-widths of the array, the logarithm of the
/// ratio of two rings, and places on a ring.
const NEAREST: f64 = 0.3;
const FARTHEST: f64 = 14.0;
const RING_STEP: f64 = 0.16;
const AROUND: u32 = 36;
/// Share of the edge's distance within which an image may lie.
const WITHIN_EDGE: f64 = 0.9;

/// A straight barrier nobody declared, by its images.
#[derive(Debug, Clone, PartialEq)]
pub struct Line {
    /// Distance from the array's centre \[m\].
    pub distance: f64,
    /// Direction of its normal \[rad from east, counter-clockwise\].
    pub azimuth: f64,
    /// The image of each well, as a mix of places: order in [`Places::all`] and weight.
    pub images: Vec<Vec<(usize, f64)>>,
}

impl Line {
    /// The point of the line that is nearest to the array's centre.
    #[must_use]
    pub fn foot(&self, centre: Point) -> Point {
        [
            centre[0] + self.distance * self.azimuth.cos(),
            centre[1] + self.distance * self.azimuth.sin(),
        ]
    }
}

/// All places at which the reduction is asked for a port.
#[derive(Debug, Clone, PartialEq)]
pub struct Places {
    /// Every place: candidates first, then images.
    pub all: Vec<(Point, usize)>,
    /// How many of them are candidates for a source or sink.
    pub candidates: usize,
    /// The fan of barriers.
    pub lines: Vec<Line>,
    /// Centre of the array \[m\].
    pub centre: Point,
    /// Half-width of the array: the largest distance of a well or gauge from its centre \[m\].
    pub half_width: f64,
    /// Wells and gauges, each place once.
    pub(crate) seats: Vec<Point>,
    /// Rings of the lattice of images.
    rings: usize,
    /// Distance from the centre within which an image may lie \[m\].
    reach: f64,
}

/// Places of candidate leaks and of images, in a fixed order: what the reduction needs.
#[must_use]
pub fn places(ground: &Ground) -> Vec<(Point, usize)> {
    Places::of(ground).all
}

impl Places {
    /// The places of a ground; the same ground always gives the same places in the same order.
    #[must_use]
    pub fn of(ground: &Ground) -> Self {
        let seats = seats(ground);
        let (centre, half_width) = array(&seats);
        let mut all = candidates(ground, &seats, centre, half_width);
        let candidates = all.len();
        let reach = (WITHIN_EDGE * ground.edge.distance).min(FARTHEST * half_width);
        let rings = polar(ground, centre, half_width, reach, &mut all);
        let mut places = Self {
            all,
            candidates,
            lines: Vec::new(),
            centre,
            half_width,
            seats,
            rings,
            reach,
        };
        places.lines = places.fan(ground);
        places
    }

    /// No place at all: for sites of which none is known.
    pub(crate) fn nowhere() -> Self {
        Self {
            all: Vec::new(),
            candidates: 0,
            lines: Vec::new(),
            centre: [0.0; 2],
            half_width: 1.0,
            seats: Vec::new(),
            rings: 0,
            reach: 0.0,
        }
    }

    /// Distance of two places of the lattice of candidates \[m\].
    pub(crate) fn spacing(&self) -> f64 {
        SPACING * self.half_width
    }

    /// How far the outermost well or gauge lies in a direction \[m from the array's centre\].
    pub(crate) fn outermost(&self, ground: &Ground, azimuth: f64) -> f64 {
        let normal = [azimuth.cos(), azimuth.sin()];
        seats(ground)
            .iter()
            .map(|s| (s[0] - self.centre[0]) * normal[0] + (s[1] - self.centre[1]) * normal[1])
            .fold(f64::MIN, f64::max)
    }

    /// A line with the images of all wells; `None` where one of them lies too far out.
    pub(crate) fn line(&self, ground: &Ground, azimuth: f64, distance: f64) -> Option<Line> {
        let normal = [azimuth.cos(), azimuth.sin()];
        let images = ground
            .wells
            .iter()
            .map(|well| {
                let along = (well.at[0] - self.centre[0]) * normal[0]
                    + (well.at[1] - self.centre[1]) * normal[1];
                let shift = 2.0 * (distance - along);
                let at = [
                    well.at[0] + shift * normal[0],
                    well.at[1] + shift * normal[1],
                ];
                // A rate divides among the layers as they conduct.
                let conducts = |l: usize| Rock::at(ground, well.at, l).transmissivity.1;
                let all: f64 = well.layers().map(conducts).sum();
                let mut image = Vec::new();
                for layer in well.layers() {
                    let share = conducts(layer) / all;
                    let mix = self.mix(at, layer)?;
                    image.extend(
                        mix.into_iter()
                            .map(|(place, weight)| (place, share * weight)),
                    );
                }
                Some(image)
            })
            .collect::<Option<_>>()?;
        Some(Line {
            distance,
            azimuth,
            images,
        })
    }

    /// A point as a mix of places of the lattice of images: cubic in the logarithm of the distance and in the azimuth.
    fn mix(&self, at: Point, layer: usize) -> Option<Vec<(usize, f64)>> {
        let (x, y) = (at[0] - self.centre[0], at[1] - self.centre[1]);
        let radius = x.hypot(y);
        let nearest = NEAREST * self.half_width;
        let outermost = nearest * (RING_STEP * (self.rings.max(1) - 1) as f64).exp();
        if !(nearest..=outermost.min(self.reach)).contains(&radius) || self.rings < 4 {
            return None;
        }
        let ring = (radius / nearest).ln() / RING_STEP;
        let turn = y.atan2(x).rem_euclid(TAU) / TAU * f64::from(AROUND);
        let first_ring = whole(ring - 1.0).min(self.rings - 4);
        let rings = cubic(ring - first_ring as f64);
        let first_turn = turn.floor() - 1.0;
        let turns = cubic(turn - first_turn);
        let around = whole(f64::from(AROUND));
        let start = self.candidates + layer * self.rings * around;
        let mut mix = Vec::with_capacity(16);
        for (i, a) in rings.iter().enumerate() {
            for (j, b) in turns.iter().enumerate() {
                let step = whole((first_turn + j as f64).rem_euclid(f64::from(AROUND))) % around;
                mix.push((start + (first_ring + i) * around + step, a * b));
            }
        }
        Some(mix)
    }

    /// Lines behind the whole array.
    fn fan(&self, ground: &Ground) -> Vec<Line> {
        let mut lines = Vec::new();
        if self.seats.is_empty() {
            return lines;
        }
        for step in 0..AZIMUTHS {
            let azimuth = TAU * f64::from(step) / f64::from(AZIMUTHS);
            let outermost = self.outermost(ground, azimuth);
            for behind in BEHIND {
                lines.extend(self.line(ground, azimuth, outermost + behind * self.half_width));
            }
        }
        lines
    }
}

/// Wells and gauges, each place once.
fn seats(ground: &Ground) -> Vec<Point> {
    let mut seats: Vec<Point> = ground.wells.iter().map(|w| w.at).collect();
    for index in 0..ground.gauges.len() {
        if let Some((at, _)) = ground.gauge_at(index)
            && seats.iter().all(|&s| distance(s, at) > 1e-6)
        {
            seats.push(at);
        }
    }
    seats
}

/// Centre and half-width of the array.
fn array(seats: &[Point]) -> (Point, f64) {
    let count = seats.len().max(1) as f64;
    let mut centre = [0.0; 2];
    for &[x, y] in seats {
        centre = [centre[0] + x / count, centre[1] + y / count];
    }
    let half_width = seats
        .iter()
        .map(|&s| distance(s, centre))
        .fold(0.0, f64::max);
    (centre, if half_width > 1.0 { half_width } else { 100.0 })
}

fn candidates(
    ground: &Ground,
    seats: &[Point],
    centre: Point,
    half_width: f64,
) -> Vec<(Point, usize)> {
    let spacing = SPACING * half_width;
    let limit = (REACH * half_width).min(0.8 * ground.edge.distance);
    let mut points = Vec::new();
    let rows = (limit / (spacing * 0.75_f64.sqrt())).floor();
    let mut row = -rows;
    while row <= rows {
        let shift = if row.rem_euclid(2.0) > 0.5 { 0.5 } else { 0.0 };
        let columns = (limit / spacing).floor() + 1.0;
        let mut column = -columns;
        while column <= columns {
            let at = [
                centre[0] + (column + shift) * spacing,
                centre[1] + row * spacing * 0.75_f64.sqrt(),
            ];
            let near = seats
                .iter()
                .map(|&s| distance(s, at))
                .fold(f64::MAX, f64::min);
            if distance(at, centre) <= limit && near > RINGS[1] * half_width * 1.2 {
                points.push(at);
            }
            column += 1.0;
        }
        row += 1.0;
    }
    for (index, &seat) in seats.iter().enumerate() {
        for (ring, share) in RINGS.iter().enumerate() {
            for step in 0..ON_RING {
                let turn = TAU * (f64::from(step) + 0.5 * ring as f64) / f64::from(ON_RING);
                let radius = share * half_width;
                let at = [seat[0] + radius * turn.cos(), seat[1] + radius * turn.sin()];
                let nearest = nearest(seats, at);
                if nearest == Some(index) {
                    points.push(at);
                }
            }
        }
    }
    (0..ground.layers.len())
        .flat_map(|layer| points.iter().map(move |&at| (at, layer)))
        .collect()
}

/// The lattice of images, appended to `all` for every layer; returns the number of its rings.
fn polar(
    ground: &Ground,
    centre: Point,
    half_width: f64,
    reach: f64,
    all: &mut Vec<(Point, usize)>,
) -> usize {
    let mut radii = Vec::new();
    let mut radius = NEAREST * half_width;
    while radius < reach * RING_STEP.exp() && radius < WITHIN_EDGE * ground.edge.distance {
        radii.push(radius);
        radius *= RING_STEP.exp();
    }
    for layer in 0..ground.layers.len() {
        for radius in &radii {
            for step in 0..AROUND {
                let turn = TAU * f64::from(step) / f64::from(AROUND);
                let at = [
                    centre[0] + radius * turn.cos(),
                    centre[1] + radius * turn.sin(),
                ];
                all.push((at, layer));
            }
        }
    }
    radii.len()
}

/// Weights of four values at 0, 1, 2, 3 for the cubic through them.
fn cubic(t: f64) -> [f64; 4] {
    let (a, b, c) = (t - 1.0, t - 2.0, t - 3.0);
    [
        -a * b * c / 6.0,
        t * b * c / 2.0,
        -t * a * c / 2.0,
        t * a * b / 6.0,
    ]
}

#[expect(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "a small number, not negative"
)]
fn whole(value: f64) -> usize {
    value.max(0.0).floor() as usize
}

fn nearest(seats: &[Point], at: Point) -> Option<usize> {
    seats
        .iter()
        .enumerate()
        .min_by(|a, b| distance(*a.1, at).total_cmp(&distance(*b.1, at)))
        .map(|(index, _)| index)
}

/// Distance between two points \[m\].
pub(crate) fn distance(a: Point, b: Point) -> f64 {
    (a[0] - b[0]).hypot(a[1] - b[1])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_cubic_passes_through_what_it_mixes() {
        for t in [0.0, 0.4, 1.0, 1.7, 2.2, 3.0] {
            let value = |x: f64| 2.0 - x + 0.5 * x * x + 0.1 * x * x * x;
            let mixed: f64 = cubic(t)
                .iter()
                .enumerate()
                .map(|(k, w)| w * value(k as f64))
                .sum();
            assert!((mixed - value(t)).abs() < 1e-12, "{t}");
        }
    }
}
