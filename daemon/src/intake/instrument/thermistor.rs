//! Thermistors.

use crate::config::Thermistor;

/// 0 degC \[K\].
const ICE: f64 = 273.15;

impl Thermistor {
    /// Temperature \[degC\] of a resistance \[ohm\]; `None` where the equation has none.
    #[must_use]
    pub fn temperature(&self, resistance: f64) -> Option<f64> {
        let log = resistance.ln();
        let inverse = self.a + self.b * log + self.c * log * log * log;
        let temperature = 1.0 / inverse - ICE;
        (resistance > 0.0 && inverse > 0.0 && inverse.is_finite()).then_some(temperature)
    }
}

#[cfg(test)]
mod tests {
    use super::Thermistor;

    /// The common 3 kohm curve gives 24.99 degC at 3000 ohm and -0.02 degC at 9796 ohm (coefficients from memory, results
    /// computed).
    #[test]
    fn a_common_curve_gives_its_temperatures() {
        let thermistor = Thermistor {
            a: 1.4051e-3,
            b: 2.369e-4,
            c: 1.019e-7,
        };
        for (ohm, due) in [(3000.0, 24.99), (9796.0, -0.02)] {
            let found = thermistor.temperature(ohm).unwrap();
            assert!((found - due).abs() < 0.005, "{ohm}: {found}");
        }
        assert_eq!(thermistor.temperature(0.0), None);
        assert_eq!(thermistor.temperature(-3.0), None);
        assert_eq!(thermistor.temperature(f64::INFINITY), None);
    }
}
