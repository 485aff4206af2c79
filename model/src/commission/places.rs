//! Where a leak may be looked for, and the mirror images of wells in barriers nobody declared.
//!
//! A leak may sit anywhere inside the outline of wells and gauges and some way round it: the candidates are a
//! hexagonal lattice with rings close to every well and gauge, where signatures change fastest. A straight sealing
//! barrier acts like an image of every well behind it (Ferris et al. 1962, USGS WSP 1536-E): a fan of lines by
//! distance and azimuth, each with one image place a well. Images near the outer edge are left out, because the edge
//! of the model would answer them.

use std::f64::consts::TAU;

use crate::ground::{Ground, Point};

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
/// Share of the edge's distance within which an image may lie.
const WITHIN_EDGE: f64 = 0.9;

/// A straight barrier nobody declared, by its images.
#[derive(Debug, Clone, PartialEq)]
pub struct Line {
    /// Distance from the array's centre \[m\].
    pub distance: f64,
    /// Direction of its normal \[rad from east, counter-clockwise\].
    pub azimuth: f64,
    /// Place (by order in [`Places::all`]) of the image of each well.
    pub images: Vec<usize>,
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
        let lines = fan(ground, &seats, centre, half_width, &mut all);
        Self {
            all,
            candidates,
            lines,
            centre,
            half_width,
        }
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

/// Lines behind the whole array, with the images of all wells appended to `all`.
fn fan(
    ground: &Ground,
    seats: &[Point],
    centre: Point,
    half_width: f64,
    all: &mut Vec<(Point, usize)>,
) -> Vec<Line> {
    let mut lines = Vec::new();
    for step in 0..AZIMUTHS {
        let azimuth = TAU * f64::from(step) / f64::from(AZIMUTHS);
        let normal = [azimuth.cos(), azimuth.sin()];
        let along = |at: Point| (at[0] - centre[0]) * normal[0] + (at[1] - centre[1]) * normal[1];
        let outermost = seats.iter().map(|&s| along(s)).fold(f64::MIN, f64::max);
        for behind in BEHIND {
            let distance_of_line = outermost + behind * half_width;
            let images: Vec<(Point, usize)> = ground
                .wells
                .iter()
                .map(|well| {
                    let shift = 2.0 * (distance_of_line - along(well.at));
                    let at = [
                        well.at[0] + shift * normal[0],
                        well.at[1] + shift * normal[1],
                    ];
                    (at, well.layer)
                })
                .collect();
            let inside = images
                .iter()
                .all(|&(at, _)| distance(at, centre) <= WITHIN_EDGE * ground.edge.distance);
            if inside {
                lines.push(Line {
                    distance: distance_of_line,
                    azimuth,
                    images: (all.len()..all.len() + images.len()).collect(),
                });
                all.extend(images);
            }
        }
    }
    lines
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
