//! What the zero of a pressure is, the depth it is meant for, and head.

use crate::config::{FluidColumn, ReferenceChange, Zero};
use crate::record::Quality;

use super::{Beside, Outcome};

impl Zero {
    /// Absolute pressure of this zero \[Pa\].
    fn pressure(self, barometer: Option<Beside>) -> Option<f64> {
        match self {
            Self::Absolute => Some(0.0),
            Self::Vented => barometer.map(|b| b.value),
            Self::Sealed(pressure) => Some(pressure),
        }
    }
}

/// The same pressure counted from another zero. A barometer that is stale keeps its last value and makes the pressure
/// suspect; one that was never seen leaves none.
pub(crate) fn change(
    settings: &ReferenceChange,
    pressure: f64,
    quality: Quality,
    barometer: Option<Beside>,
) -> Outcome {
    let shift = settings
        .from
        .pressure(barometer)
        .zip(settings.to.pressure(barometer));
    let Some((from, to)) = shift else {
        return Outcome::of(None, Quality::Missing);
    };
    let quality = match (&settings.barometer, barometer) {
        (Some(_), Some(beside)) => beside.worst(quality),
        _ => quality,
    };
    Outcome::of(Some(pressure + from - to), quality)
}

impl FluidColumn {
    /// Pressure at the datum \[Pa\].
    #[must_use]
    pub fn at_datum(&self, pressure: f64) -> f64 {
        pressure + self.density * self.gravity * self.depth
    }
}

/// Head \[m\] of a pressure counted from the atmosphere \[Pa\] at an elevation \[m\].
#[must_use]
pub fn head(pressure: f64, density: f64, gravity: f64, elevation: f64) -> f64 {
    pressure / (density * gravity) + elevation
}

/// Standard gravity \[m/s2\].
pub const GRAVITY: f64 = 9.806_65;

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::Companion;
    use std::time::Duration;

    fn between(from: Zero, to: Zero) -> ReferenceChange {
        ReferenceChange {
            from,
            to,
            barometer: Some(Companion {
                channel: "b".into(),
                within: Duration::from_secs(60),
            }),
        }
    }

    fn beside(fresh: bool) -> Option<Beside> {
        Some(Beside {
            value: 99_800.0,
            fresh,
        })
    }

    #[test]
    fn a_pressure_is_counted_from_another_zero() {
        let sealed = Zero::Sealed(101_325.0);
        for (from, to, due) in [
            (Zero::Vented, Zero::Absolute, 149_800.0),
            (Zero::Absolute, Zero::Vented, -49_800.0),
            (sealed, Zero::Absolute, 151_325.0),
            (sealed, Zero::Vented, 51_525.0),
            (Zero::Absolute, Zero::Absolute, 50_000.0),
        ] {
            let found = change(&between(from, to), 50_000.0, Quality::Good, beside(true));
            assert_eq!(found.value, Some(due), "{from:?} {to:?}");
            assert_eq!(found.quality, Quality::Good);
        }
    }

    #[test]
    fn a_stale_barometer_tells_and_a_missing_one_gives_nothing() {
        let vented = between(Zero::Vented, Zero::Absolute);
        let stale = change(&vented, 50_000.0, Quality::Good, beside(false));
        assert_eq!(
            (stale.value, stale.quality),
            (Some(149_800.0), Quality::Suspect)
        );
        let never = change(&vented, 50_000.0, Quality::Good, None);
        assert_eq!((never.value, never.quality), (None, Quality::Missing));
    }

    /// 376.75 kPa is 38.418 m of nominal water and 38.487 m at 998.2 kg/m3 (computed).
    #[test]
    fn head_depends_on_density() {
        let close = |a: f64, b: f64| (a - b).abs() < 5e-4;
        assert!(close(head(376_750.0, 1000.0, GRAVITY, 0.0), 38.418));
        assert!(close(head(376_750.0, 998.2, GRAVITY, 0.0), 38.487));
        assert!(close(head(376_750.0, 1000.0, GRAVITY, -12.5), 25.918));
    }

    #[test]
    fn a_column_carries_a_pressure_down() {
        let column = FluidColumn {
            depth: 12.0,
            density: 1025.0,
            gravity: GRAVITY,
        };
        let found = column.at_datum(1e6);
        assert!((found - (1e6 + 120_621.795)).abs() < 1e-3, "{found}");
    }
}
