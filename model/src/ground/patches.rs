//! A partition of the plane into patches, in which a ground may differ from what is described.
//!
//! No ground is even. How it varies is learned from history, patch by patch: small patches within and round the array
//! of wells and gauges, where readings tell them apart, and ever larger ones outwards, as signals grow wider with
//! distance. Storativity is told apart less well than transmissivity, so its patches are larger.

use serde::{Deserialize, Serialize};

use super::Point;

/// Half-width of the fine lattice, as a multiple of the array's half-width.
const INNER: f64 = 1.2;
/// Squares a side of the fine lattice.
const ACROSS: usize = 5;
/// The same for storativity.
const ACROSS_STORATIVITY: usize = 3;
/// Growth of each ring of eight squares round what lies within.
const GROWTH: f64 = 3.0;
/// Rings.
const RINGS: usize = 2;
/// Rings for storativity.
const RINGS_STORATIVITY: usize = 1;

/// Patches round an array of wells and gauges.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Patches {
    /// Centre of the array \[m\].
    pub centre: Point,
    /// Its half-width \[m\].
    pub half_width: f64,
}

impl Patches {
    /// Patch of transmissivity at a point.
    #[must_use]
    pub fn transmissivity(&self, at: Point) -> usize {
        self.patch(at, ACROSS, RINGS)
    }

    /// Patch of storativity at a point.
    #[must_use]
    pub fn storativity(&self, at: Point) -> usize {
        self.patch(at, ACROSS_STORATIVITY, RINGS_STORATIVITY)
    }

    fn patch(&self, at: Point, across: usize, rings: usize) -> usize {
        let scale = INNER * self.half_width;
        let u = (at[0] - self.centre[0]) / scale;
        let v = (at[1] - self.centre[1]) / scale;
        let far = u.abs().max(v.abs());
        let mut before = across * across;
        if far < 1.0 {
            return cell(u, across) + across * cell(v, across);
        }
        let mut reach = 1.0;
        for _ in 0..rings {
            reach *= GROWTH;
            if far < reach {
                // The middle of the nine is what lies within; it never comes out here.
                return before + cell(u / reach, 3) + 3 * cell(v / reach, 3);
            }
            before += 9;
        }
        before
    }
}

/// Which of `count` equal parts of -1..1.
#[expect(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "a small count, clamped"
)]
fn cell(x: f64, count: usize) -> usize {
    let last = count.saturating_sub(1);
    ((0.5 * (x + 1.0) * count as f64).floor().max(0.0) as usize).min(last)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn patches_grow_outwards_and_every_point_has_one() {
        let patches = Patches {
            centre: [100.0, -50.0],
            half_width: 500.0,
        };
        let at = |x: f64, y: f64| patches.transmissivity([100.0 + x, y - 50.0]);
        assert_eq!(at(0.0, 0.0), 12);
        assert_eq!(at(-599.0, -599.0), 0);
        assert_eq!(at(599.0, 599.0), 24);
        assert_eq!(at(601.0, 0.0), 25 + 5);
        assert_eq!(at(0.0, 5_000.0), 34 + 7);
        assert_eq!(at(1e5, 0.0), 43);
        assert_eq!(patches.storativity([100.0, -50.0]), 4);
        assert_eq!(patches.storativity([1e5, 0.0]), 18);
    }
}
