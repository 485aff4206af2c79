//! 4 to 20 mA.

use crate::config::CurrentLoop;
use crate::record::{DeviceStatus, Quality, Stamp};

use super::Outcome;

/// The bands of NAMUR NE 43: what a current means. Limits \[mA\].
const FAILURE_LOW: f64 = 3.6;
const UNDER: f64 = 3.8;
const LOW: f64 = 4.0;
const HIGH: f64 = 20.0;
const OVER: f64 = 20.5;
const FAILURE_HIGH: f64 = 21.0;

/// What is remembered of a loop: since when its current lies between measurement and fault.
#[derive(Debug, Clone, Copy, Default)]
pub(crate) struct Between(Option<Stamp>);

impl CurrentLoop {
    /// Value of a current \[mA\].
    #[must_use]
    pub fn value(&self, current: f64) -> f64 {
        self.low + (current - LOW) / (HIGH - LOW) * (self.high - self.low)
    }
}

/// Judges a current. A current that fails never becomes a scaled number.
pub(crate) fn convert(
    settings: &CurrentLoop,
    between: &mut Between,
    current: f64,
    sampled: Stamp,
) -> Outcome {
    let value = Some(settings.value(current));
    if (UNDER..=OVER).contains(&current) {
        between.0 = None;
        let quality = if (LOW..=HIGH).contains(&current) {
            Quality::Good
        } else {
            Quality::Suspect
        };
        return Outcome::of(value, quality);
    }
    if !(FAILURE_LOW..=FAILURE_HIGH).contains(&current) {
        between.0 = None;
        return Outcome::failed(DeviceStatus::Failure);
    }
    let since = *between.0.get_or_insert(sampled);
    let held = u128::try_from(sampled.0.saturating_sub(since.0)).unwrap_or(0);
    if held >= settings.hold.as_micros() && held > 0 {
        return Outcome::failed(DeviceStatus::Failure);
    }
    Outcome {
        value,
        quality: Quality::Suspect,
        device: DeviceStatus::OutOfSpecification,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::time::Duration;

    fn settings() -> CurrentLoop {
        CurrentLoop {
            low: 0.0,
            high: 400e3,
            hold: Duration::from_secs(4),
        }
    }

    /// value = low + (I - 4)/16 (high - low): 3.8 mA is -1.25 %, 20.5 mA 103.125 %, 3.6 mA -2.5 %, 21 mA 106.25 % (computed).
    #[test]
    fn currents_are_scaled() {
        for (current, share) in [
            (4.0, 0.0),
            (12.0, 0.5),
            (20.0, 1.0),
            (3.8, -0.0125),
            (20.5, 1.031_25),
            (3.6, -0.025),
            (21.0, 1.0625),
        ] {
            let value = settings().value(current);
            assert!((value - share * 400e3).abs() < 1e-6, "{current}: {value}");
        }
    }

    /// The bands of NAMUR NE 43 as this program draws them.
    #[test]
    fn a_current_is_measurement_range_gap_or_fault() {
        let flag = |current| {
            let o = convert(&settings(), &mut Between::default(), current, Stamp(0));
            (o.quality.flag(), o.device, o.value.is_some())
        };
        let normal = DeviceStatus::Normal;
        let out = DeviceStatus::OutOfSpecification;
        for current in [0.0, 2.0, 3.59, 21.01, 24.0, -1.0] {
            assert_eq!(
                flag(current),
                (4, DeviceStatus::Failure, false),
                "{current}"
            );
        }
        for current in [3.6, 3.79, 20.51, 21.0] {
            assert_eq!(flag(current), (3, out, true), "{current}");
        }
        for current in [3.8, 3.99, 20.01, 20.5] {
            assert_eq!(flag(current), (3, normal, true), "{current}");
        }
        for current in [4.0, 12.0, 20.0] {
            assert_eq!(flag(current), (1, normal, true), "{current}");
        }
    }

    #[test]
    fn the_gap_becomes_a_fault_when_it_lasts() {
        let mut between = Between::default();
        let mut at = |seconds: i64, current| {
            let sampled = Stamp(seconds * Stamp::SECOND);
            convert(&settings(), &mut between, current, sampled).quality
        };
        assert_eq!(at(0, 3.7), Quality::Suspect);
        assert_eq!(at(3, 3.7), Quality::Suspect);
        assert_eq!(at(4, 3.7), Quality::Bad);
        assert_eq!(at(5, 8.0), Quality::Good);
        assert_eq!(at(6, 20.7), Quality::Suspect, "it begins anew");
    }
}
