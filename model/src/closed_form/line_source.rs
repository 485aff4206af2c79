//! The line source in an endless ground (Theis 1935), sums of it over a rate's history, and images.

use std::f64::consts::PI;

use super::e1;
use crate::ground::Point;

/// Pressure at distance `r` \[m\] a time `t` \[s\] after one m3/s began to enter: `E1(r^2 S / 4 T t) / 4 pi T`.
///
/// Zero at and before `t = 0`. Source: Theis 1935, Trans. AGU 16.
#[must_use]
pub fn line_source(r: f64, transmissivity: f64, storativity: f64, t: f64) -> f64 {
    if t <= 0.0 {
        return 0.0;
    }
    e1(r * r * storativity / (4.0 * transmissivity * t)) / (4.0 * PI * transmissivity)
}

/// A rate's history: `(from, rate)`, ascending in time; each rate \[m3/s\] holds from its instant \[s\] on.
pub type Path<'a> = &'a [(f64, f64)];

/// Sum of a unit step response over a rate's history, at instant `t`.
pub fn superpose(path: Path<'_>, t: f64, step: impl Fn(f64) -> f64) -> f64 {
    let mut before = 0.0;
    let mut sum = 0.0;
    for &(from, rate) in path {
        if from >= t {
            break;
        }
        sum += (rate - before) * step(t - from);
        before = rate;
    }
    sum
}

/// What a straight line through the ground does to pressure.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Line {
    /// Nothing passes: the image of a well has its sign.
    Sealed,
    /// The pressure on it is held: the image has the opposite sign.
    Held,
}

/// Line source at `well`, felt at `gauge`, beside a straight line through `on` and `through`, by its image.
///
/// The gauge lies on the well's side; beyond the line nothing is felt. Source: Ferris et al. 1962, USGS WSP 1536-E.
#[must_use]
pub fn beside_line(
    line: Line,
    (on, through): (Point, Point),
    (well, gauge): (Point, Point),
    transmissivity: f64,
    storativity: f64,
    t: f64,
) -> f64 {
    let (direct, image, beyond) = distances(well, gauge, on, through);
    if beyond {
        return 0.0;
    }
    let sign = match line {
        Line::Sealed => 1.0,
        Line::Held => -1.0,
    };
    line_source(direct, transmissivity, storativity, t)
        + sign * line_source(image, transmissivity, storativity, t)
}

/// Distance to the well, to its image, and whether the gauge lies beyond the line.
fn distances(well: Point, gauge: Point, on: Point, through: Point) -> (f64, f64, bool) {
    let [dx, dy] = [through[0] - on[0], through[1] - on[1]];
    let length = dx.hypot(dy);
    let normal = [-dy / length, dx / length];
    let off = |p: Point| (p[0] - on[0]) * normal[0] + (p[1] - on[1]) * normal[1];
    let (a, b) = (off(well), off(gauge));
    let image = [well[0] - 2.0 * a * normal[0], well[1] - 2.0 * a * normal[1]];
    let to = |p: Point| (gauge[0] - p[0]).hypot(gauge[1] - p[1]);
    (to(well), to(image), a * b < 0.0)
}
