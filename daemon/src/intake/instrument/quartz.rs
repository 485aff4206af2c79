//! Polynomials: of quartz gauges in two frequencies, and of one number.

use crate::config::{Polynomial, Quartz};

impl Quartz {
    /// SI pressure of two frequencies; `None` outside the rectangle that was calibrated.
    #[must_use]
    pub fn pressure(&self, frequency: f64, temperature: f64) -> Option<f64> {
        if !within(self.range, frequency) || !within(self.temperature_range, temperature) {
            return None;
        }
        let x = frequency - self.zero;
        let y = temperature - self.temperature_zero;
        let rows: Vec<f64> = self.coefficients.iter().map(|row| horner(row, y)).collect();
        let (scale, offset) = self.unit;
        Some(scale * horner(&rows, x) + offset)
    }
}

impl Polynomial {
    /// SI value of a number; `None` outside the range that was calibrated.
    #[must_use]
    pub fn value(&self, number: f64) -> Option<f64> {
        let (scale, offset) = self.unit;
        let result = || horner(&self.coefficients, number - self.zero);
        within(self.range, number).then(|| scale * result() + offset)
    }
}

fn within((from, to): (f64, f64), x: f64) -> bool {
    (from..=to).contains(&x)
}

/// Sum of the coefficients times rising powers of x.
fn horner(coefficients: &[f64], x: f64) -> f64 {
    coefficients.iter().rev().fold(0.0, |sum, c| sum * x + c)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::Companion;
    use std::time::Duration;

    fn quartz(coefficients: Vec<Vec<f64>>) -> Quartz {
        Quartz {
            temperature: Companion {
                channel: "t".into(),
                within: Duration::from_secs(1),
            },
            zero: 36_000.0,
            temperature_zero: 172_000.0,
            coefficients,
            range: (35_000.0, 40_000.0),
            temperature_range: (171_000.0, 173_000.0),
            unit: (6_894.757_293_168, 0.0),
        }
    }

    /// Invented coefficients; the nine terms summed one by one.
    #[test]
    fn nine_terms_are_summed() {
        let c = [
            [2500.0, -1.5e-2, 3e-7],
            [-4.2, 2.5e-6, -4e-10],
            [1.1e-4, 3e-9, 5e-14],
        ];
        let quartz = quartz(c.iter().map(|row| row.to_vec()).collect());
        let (x, y): (f64, f64) = (812.5, -340.25);
        let mut due = 0.0;
        for (i, row) in c.iter().enumerate() {
            for (j, coefficient) in row.iter().enumerate() {
                let powers = x.powi(i32::try_from(i).unwrap()) * y.powi(i32::try_from(j).unwrap());
                due += coefficient * powers;
            }
        }
        let found = quartz.pressure(36_000.0 + x, 172_000.0 + y).unwrap();
        assert!((found - due * 6_894.757_293_168).abs() < 1e-9 * found.abs());
    }

    /// The six-term form has rows that end early.
    #[test]
    fn short_rows_are_the_lower_terms() {
        let quartz = quartz(vec![vec![1.0, 2.0, 3.0], vec![4.0, 5.0], vec![6.0]]);
        let found = quartz.pressure(36_002.0, 172_003.0).unwrap() / 6_894.757_293_168;
        let due = 1.0 + 2.0 * 3.0 + 3.0 * 9.0 + 2.0 * (4.0 + 5.0 * 3.0) + 4.0 * 6.0;
        assert!((found - due).abs() < 1e-9);
    }

    #[test]
    fn outside_the_calibration_there_is_no_pressure() {
        let quartz = quartz(vec![vec![1.0]]);
        assert!(quartz.pressure(35_000.0, 171_000.0).is_some());
        assert_eq!(quartz.pressure(34_999.9, 172_000.0), None);
        assert_eq!(quartz.pressure(36_000.0, 173_000.1), None);
        assert_eq!(quartz.pressure(f64::NAN, 172_000.0), None);
    }

    #[test]
    fn one_number_has_a_polynomial_too() {
        let polynomial = Polynomial {
            zero: 100.0,
            coefficients: vec![20.0, -0.5, 0.25],
            range: (90.0, 110.0),
            unit: (1.0, 273.15),
        };
        assert_eq!(polynomial.value(104.0), Some(20.0 - 2.0 + 4.0 + 273.15));
        assert_eq!(polynomial.value(110.5), None);
    }
}
