//! Places between those of the lattice of candidates.
//!
//! Signatures change smoothly from place to place, so between seven places of the hexagonal lattice they are mixed by the
//! quadratic that the first two harmonics round the middle determine. Only about the places that lead is it worth the work.

#![expect(
    clippy::indexing_slicing,
    reason = "six neighbours, columns and places counted here"
)]

use std::f64::consts::{FRAC_PI_3, TAU};

use nalgebra::DMatrix;

use crate::commission::Places;
use crate::commission::places::distance;
use crate::ground::mesh::cross;
use crate::ground::{Ground, Point};

/// Finer places from one place of the lattice to the next.
const FINER: i32 = 5;
/// Places of the lattice looked about.
const LOOKED_ABOUT: usize = 10;
/// Width of a cell's border, in spacings.
const BORDER: f64 = 1e-9;
/// How far a distance may be off and still be that of neighbours, as a share of the spacing.
const LEEWAY: f64 = 1e-3;

/// Candidates for a leak with their signatures' coefficients.
#[derive(Debug, Clone)]
pub(crate) struct Candidates {
    /// By growth: directions by candidates.
    pub(crate) coefficients: Vec<DMatrix<f64>>,
    /// The place of the lattice that each belongs to, by order; where it is; log of its prior weight.
    pub(crate) each: Vec<(usize, Point, f64)>,
}

/// Neighbours on the lattice.
#[derive(Debug, Clone)]
pub(crate) struct Between {
    spacing: f64,
    seats: Vec<Point>,
    /// By candidate: its six neighbours, counter-clockwise from east; `None` on the rim, beside wells and gauges, and at
    /// lines where signatures jump or bend.
    neighbours: Vec<Option<[usize; 6]>>,
}

impl Between {
    pub(crate) fn new(ground: &Ground, places: &Places) -> Self {
        let lines = lines(ground);
        let candidates = places.all.get(..places.candidates).unwrap_or_default();
        let spacing = places.spacing();
        let at = |point: Point, layer: usize| {
            candidates.iter().position(|(other, of)| {
                *of == layer && (other[0] - point[0]).hypot(other[1] - point[1]) < LEEWAY * spacing
            })
        };
        let neighbours = candidates
            .iter()
            .map(|&(point, layer)| {
                let mut six = [0; 6];
                for (k, neighbour) in (0_i32..).zip(&mut six) {
                    let (sin, cos) = (FRAC_PI_3 * f64::from(k)).sin_cos();
                    let there = [point[0] + spacing * cos, point[1] + spacing * sin];
                    if lines.iter().any(|line| crossed(*line, (point, there))) {
                        return None;
                    }
                    *neighbour = at(there, layer)?;
                }
                Some(six)
            })
            .collect();
        Self {
            spacing,
            seats: places.seats.clone(),
            neighbours,
        }
    }

    /// Relative error of a signature mixed at a place: of the third order in the spacing over the distance to the nearest well or
    /// gauge, beside which signatures change fastest.
    pub(crate) fn error(&self, at: Point) -> f64 {
        let nearest = self
            .seats
            .iter()
            .map(|seat| distance(*seat, at))
            .fold(f64::INFINITY, f64::min);
        (0.5 * self.spacing / nearest.max(self.spacing)).powi(3)
    }

    /// Finer candidates about the leading ones of `coarse`, whose places are given with the log of their evidence. Returns the
    /// places that the finer ones stand for, too.
    pub(crate) fn about(
        &self,
        coarse: &Candidates,
        leading: &mut [(usize, f64)],
        places: &Places,
    ) -> (Candidates, Vec<usize>) {
        leading.sort_by(|a, b| b.1.total_cmp(&a.1));
        let offsets = offsets(self.spacing);
        let share = -(offsets.len() as f64).ln();
        let column = |place: usize| coarse.each.iter().position(|(p, ..)| *p == place);
        let mut mixes: Vec<[(usize, f64); 7]> = Vec::new();
        let mut each = Vec::new();
        let mut stood_for = Vec::new();
        for &(place, _) in leading.iter().take(LOOKED_ABOUT) {
            let Some(Some(six)) = self.neighbours.get(place) else {
                continue;
            };
            let columns: Option<Vec<usize>> = std::iter::once(&place)
                .chain(six)
                .map(|&p| column(p))
                .collect();
            let (Some(columns), Some((centre, _))) = (columns, places.all.get(place)) else {
                continue;
            };
            stood_for.push(place);
            let weight = coarse.each[columns[0]].2;
            for offset in &offsets {
                let weights = weights([offset[0] / self.spacing, offset[1] / self.spacing]);
                mixes.push(std::array::from_fn(|k| (columns[k], weights[k])));
                let at = [centre[0] + offset[0], centre[1] + offset[1]];
                each.push((place, at, weight + share));
            }
        }
        let coefficients = coarse
            .coefficients
            .iter()
            .map(|of| {
                let mut mixed = DMatrix::zeros(of.nrows(), mixes.len());
                for (mut column, mix) in mixed.column_iter_mut().zip(&mixes) {
                    for &(index, weight) in mix {
                        column.axpy(weight, &of.column(index), 1.0);
                    }
                }
                mixed
            })
            .collect();
        (Candidates { coefficients, each }, stood_for)
    }
}

/// Lines at which signatures jump or bend: nothing is mixed across them.
fn lines(ground: &Ground) -> Vec<(Point, Point)> {
    let open = ground.barriers.iter().map(|b| &b.line);
    let open = open.chain(ground.stages.iter().map(|s| &s.line));
    let open = open.chain(ground.wells.iter().map(|w| &w.trace));
    let mut lines: Vec<(Point, Point)> = open.flat_map(|line| segments(line)).collect();
    for zone in &ground.zones {
        lines.extend(segments(&zone.outline));
        lines.extend(
            zone.outline
                .last()
                .copied()
                .zip(zone.outline.first().copied()),
        );
    }
    lines
}

fn segments(line: &[Point]) -> impl Iterator<Item = (Point, Point)> {
    line.iter().copied().zip(line.iter().skip(1).copied())
}

/// Whether two segments cross or touch.
fn crossed((a, b): (Point, Point), (c, d): (Point, Point)) -> bool {
    let sides = |p: Point, q: Point, r: Point, s: Point| cross(p, q, r) * cross(p, q, s) <= 0.0;
    sides(a, b, c, d) && sides(c, d, a, b)
}

/// Offsets of the finer places that are nearer to the middle than to any neighbour \[m\].
fn offsets(spacing: f64) -> Vec<Point> {
    let step = 1.0 / f64::from(FINER);
    let mut out = Vec::new();
    for row in -FINER..=FINER {
        for column in -2 * FINER..=2 * FINER {
            let at = [
                step * (f64::from(column) + 0.5 * f64::from(row)),
                step * f64::from(row) * 0.75_f64.sqrt(),
            ];
            // Of a border two cells share, each has half.
            let within = (0..6).all(|k| {
                let (sin, cos) = (TAU * f64::from(k) / 6.0).sin_cos();
                let border = if k < 3 { 0.5 + BORDER } else { 0.5 - BORDER };
                at[0] * cos + at[1] * sin < border
            });
            if within {
                out.push([spacing * at[0], spacing * at[1]]);
            }
        }
    }
    out
}

/// Weights of the middle and its six neighbours at an offset, in spacings.
fn weights([x, y]: Point) -> [f64; 7] {
    let square = x * x + y * y;
    std::array::from_fn(|k| {
        let Some(k) = k.checked_sub(1) else {
            return 1.0 - square;
        };
        let turn = FRAC_PI_3 * k as f64;
        let (sin, cos) = turn.sin_cos();
        let (sin_2, cos_2) = (2.0 * turn).sin_cos();
        square / 6.0
            + (x * cos + y * sin) / 3.0
            + ((x * x - y * y) * cos_2 + 2.0 * x * y * sin_2) / 3.0
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_quadratic_is_mixed_exactly() {
        let value = |x: f64, y: f64| 1.0 + 2.0 * x - y + 0.5 * x * x - 1.5 * x * y + 0.7 * y * y;
        for at in [[0.0, 0.0], [0.3, -0.2], [-0.1, 0.5], [0.25, 0.4]] {
            let weights = weights(at);
            let mut mixed = weights[0] * value(0.0, 0.0);
            for (k, weight) in weights[1..].iter().enumerate() {
                let turn = FRAC_PI_3 * k as f64;
                mixed += weight * value(turn.cos(), turn.sin());
            }
            assert!((mixed - value(at[0], at[1])).abs() < 1e-12, "{at:?}");
        }
    }

    #[test]
    fn nothing_is_mixed_across_a_line() {
        let line = ([0.0, -1.0], [0.0, 1.0]);
        assert!(crossed(line, ([-1.0, 0.2], [1.0, 0.3])));
        assert!(crossed(line, ([-1.0, 0.0], [0.0, 0.0])));
        assert!(!crossed(line, ([-1.0, 2.0], [1.0, 1.5])));
        assert!(!crossed(line, ([0.5, 0.0], [1.0, 0.0])));
    }

    #[test]
    fn finer_places_fill_a_cell_once() {
        let offsets = offsets(100.0);
        // A cell of the lattice holds as many of the finer lattice as its area does.
        let count = usize::try_from(FINER * FINER).unwrap();
        assert_eq!(offsets.len(), count);
        assert!(
            offsets
                .iter()
                .all(|o| o[0].hypot(o[1]) < 100.0 / 3.0_f64.sqrt() + 1e-9)
        );
    }
}
