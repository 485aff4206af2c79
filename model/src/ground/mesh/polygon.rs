//! Regular polygons that stand for circles.

use std::f64::consts::PI;

/// Logarithmic capacity of a regular polygon of `sides` sides and circumradius one.
///
/// It is the radius of the circle that the polygon cannot be told from, seen from afar, when its outline is
/// held at one pressure: `sin(pi x)/(pi x) Gamma(1+x)^2/Gamma(1+2x)` with `x = 1/sides` (Polya & Szego 1951,
/// Isoperimetric Inequalities in Mathematical Physics, table of capacities; rewritten by the duplication formula).
#[must_use]
pub fn capacity(sides: usize) -> f64 {
    let x = 1.0 / sides as f64;
    // Gamma(1+x)^2/Gamma(1+2x) = product of 1 - (x/(m+x))^2 over m from 1, its tail summed as an integral.
    let terms = 2000;
    let mut log = 0.0;
    for m in 1..=terms {
        let share = x / (f64::from(m) + x);
        log += (-share * share).ln_1p();
    }
    log -= x * x / (f64::from(terms) + x + 0.5);
    (PI * x).sin() / (PI * x) * log.exp()
}

/// Circumradius of a regular polygon that has the area of the circle of radius one.
pub(super) fn equal_area(sides: usize) -> f64 {
    let step = 2.0 * PI / sides as f64;
    (step / step.sin()).sqrt()
}

#[cfg(test)]
mod tests {
    use super::{capacity, equal_area};

    #[test]
    fn capacity_of_the_square_and_the_triangle() {
        // Polya & Szego 1951: square 0.590170299508 of the side, equilateral triangle 0.4217539346 of it.
        assert!((capacity(4) / 2f64.sqrt() - 0.590_170_299_508).abs() < 1e-10);
        assert!((capacity(3) / 3f64.sqrt() - 0.421_753_934_6).abs() < 1e-9);
        assert!((capacity(10_000) - 1.0).abs() < 1e-7);
    }

    #[test]
    fn area_is_kept() {
        let (n, r) = (7, equal_area(7));
        let area = 3.5 * r * r * (2.0 * std::f64::consts::PI / f64::from(n)).sin();
        assert!((area - std::f64::consts::PI).abs() < 1e-12);
    }
}
