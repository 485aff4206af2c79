//! Vibrating wires.
//!
//! The terms are those of makers' manuals and of ISO 18674-4; R0, T0, S0 were read at installation.

use crate::config::{VibratingWire, WireForm, WireReading, WireSense};
use crate::record::Quality;

use super::{Beside, Outcome};

impl WireReading {
    /// Digits of what the readout delivers; `None` where it can be none.
    #[must_use]
    pub fn digits(self, delivered: f64) -> Option<f64> {
        let digits = match self {
            Self::Digits => delivered,
            Self::Hertz => delivered * delivered / 1000.0,
            Self::Microseconds => 1e9 / (delivered * delivered),
        };
        (delivered > 0.0 && digits.is_finite()).then_some(digits)
    }
}

impl WireForm {
    /// Pressure \[Pa\] of a reading, with the zero reading's taken off.
    #[must_use]
    pub fn pressure(self, zero: f64, digits: f64) -> f64 {
        match self {
            Self::Linear { factor, sense } => match sense {
                WireSense::ZeroMinusReading => factor * (zero - digits),
                WireSense::ReadingMinusZero => factor * (digits - zero),
            },
            Self::Polynomial { a, b } => {
                let c = -(a * zero * zero + b * zero);
                a * digits * digits + b * digits + c
            }
        }
    }
}

/// Converts what the readout delivers. A temperature or a barometer that is lost keeps its last value in the sum, and the
/// pressure is suspect; one that was never seen leaves no pressure, as leaving its term out would be a step later.
pub(crate) fn convert(
    settings: &VibratingWire,
    delivered: f64,
    temperature: Option<Beside>,
    barometer: Option<Beside>,
) -> Outcome {
    let Some(digits) = settings.reads.digits(delivered) else {
        return Outcome::of(None, Quality::Bad);
    };
    let mut pressure = settings.form.pressure(settings.zero, digits);
    let mut quality = Quality::Good;
    if let Some(term) = &settings.thermal {
        let Some(beside) = temperature else {
            return Outcome::of(None, Quality::Missing);
        };
        pressure += term.factor * (beside.value - term.zero);
        quality = beside.worst(quality);
    }
    if let Some(term) = &settings.barometric {
        let Some(beside) = barometer else {
            return Outcome::of(None, Quality::Missing);
        };
        pressure -= beside.value - term.zero;
        quality = beside.worst(quality);
    }
    Outcome::of(Some(pressure), quality)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::{Barometric, Companion, Thermal};
    use std::time::Duration;

    fn companion() -> Companion {
        Companion {
            channel: "other".into(),
            within: Duration::from_secs(3600),
        }
    }

    fn wire(form: WireForm) -> VibratingWire {
        VibratingWire {
            reads: WireReading::Digits,
            form,
            zero: 8900.0,
            thermal: Some(Thermal {
                factor: -100.0,
                zero: 12.0,
                temperature: companion(),
            }),
            barometric: Some(Barometric {
                zero: 101_300.0,
                barometer: companion(),
            }),
        }
    }

    fn fresh(value: f64) -> Option<Beside> {
        Some(Beside { value, fresh: true })
    }

    /// Invented coefficients, computed by hand: R0 8900, R1 7400, G 0.2500 kPa, K -0.1000 kPa/K, T0 12, T1 9.5, S0 101.30,
    /// S1 99.80 kPa give 376.75 kPa; A -1.2e-6, B -0.2300 give C 2142.052 and 376.09 kPa.
    #[test]
    fn both_forms_give_the_computed_pressures() {
        let linear = WireForm::Linear {
            factor: 250.0,
            sense: WireSense::ZeroMinusReading,
        };
        let polynomial = WireForm::Polynomial {
            a: -1.2e-3,
            b: -230.0,
        };
        for (form, due) in [(linear, 376_750.0), (polynomial, 376_090.0)] {
            let found = convert(&wire(form), 7400.0, fresh(9.5), fresh(99_800.0));
            let value = found.value.unwrap();
            assert!((value - due).abs() < 0.5, "{form:?}: {value}");
            assert_eq!(found.quality, Quality::Good);
            // At the zero reading, temperature and barometer it is 0.
            let zero = convert(&wire(form), 8900.0, fresh(12.0), fresh(101_300.0));
            assert!(zero.value.unwrap().abs() < 1e-6, "{form:?}");
        }
        let constant = -(-1.2e-3 * 8900.0_f64.powi(2) - 230.0 * 8900.0);
        assert!((constant - 2_142_052.0).abs() < 1e-3);
        let other = WireForm::Linear {
            factor: 250.0,
            sense: WireSense::ReadingMinusZero,
        };
        assert_eq!(other.pressure(8900.0, 7400.0), -375_000.0);
    }

    /// 8000 digits are 2828.4 Hz and 353.55 us (computed).
    #[test]
    fn frequency_and_period_are_digits_too() {
        let hertz = WireReading::Hertz.digits(2_828.427_124_746).unwrap();
        let period = WireReading::Microseconds.digits(353.553_390_593).unwrap();
        assert!((hertz - 8000.0).abs() < 1e-6 && (period - 8000.0).abs() < 1e-5);
        assert_eq!(WireReading::Hertz.digits(0.0), None);
        assert_eq!(WireReading::Microseconds.digits(-1.0), None);
    }

    #[test]
    fn a_lost_temperature_is_frozen_and_tells() {
        let linear = WireForm::Linear {
            factor: 250.0,
            sense: WireSense::ZeroMinusReading,
        };
        let stale = Some(Beside {
            value: 9.5,
            fresh: false,
        });
        let found = convert(&wire(linear), 7400.0, stale, fresh(99_800.0));
        assert_eq!(found.quality, Quality::Suspect);
        assert!((found.value.unwrap() - 376_750.0).abs() < 1e-6);
        let never = convert(&wire(linear), 7400.0, None, fresh(99_800.0));
        assert_eq!((never.value, never.quality), (None, Quality::Missing));
    }
}
