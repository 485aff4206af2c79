//! Real-time tests of readings, after QARTOD's manual for water level data 2.1 (2021). Pure.
//!
//! A test may make a reading worse and never better, and what is flagged stays flagged: later review is another matter. Only a
//! value outside what the instrument can deliver is bad; whatever a real event may look like too (a jump, a flat stretch) is
//! suspect at most, and so never hidden from the watch.
//!
//! The manual's spike test judges a reading by the one after it, when its flag is already on disk; the jump test flags the same
//! reading at once, and the return from it as well.

use std::collections::VecDeque;
use std::time::Duration;

use crate::config::QualityTests;
use crate::record::{ClockEpoch, Quality, Stamp};

/// Points kept of the window: enough for its spread, whatever the rate of readings.
const POINTS: usize = 500;

/// Points of the window before its spread says anything.
const FEW: usize = 10;

/// What is remembered of a channel.
#[derive(Debug, Clone, Default)]
pub(crate) struct History {
    /// Points of the window, thinned to about [`POINTS`].
    window: VecDeque<(Stamp, f64)>,
    last: Option<Last>,
}

/// The reading before.
#[derive(Debug, Clone, Copy)]
struct Last {
    sampled: Stamp,
    epoch: ClockEpoch,
    value: f64,
    raw: f64,
    /// How many readings in a row had this raw number.
    equal: u32,
    /// Mean time between readings, of late \[us\].
    spacing: f64,
}

/// A reading to be judged: its SI value and the number as delivered.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Candidate {
    pub(crate) sampled: Stamp,
    pub(crate) epoch: ClockEpoch,
    pub(crate) value: f64,
    pub(crate) raw: f64,
}

/// Quality of a reading.
pub(crate) fn judge(tests: &QualityTests, history: &mut History, new: Candidate) -> Quality {
    let mut quality = range(tests, new.value);
    let late = history
        .last
        .is_some_and(|l| l.epoch == new.epoch && new.sampled <= l.sampled);
    if late {
        return quality;
    }
    if history.last.is_some_and(|l| l.epoch != new.epoch) {
        *history = History::default();
    }
    if quality == Quality::Bad {
        // What the instrument cannot deliver says nothing of what came before and after.
        return quality;
    }
    history.forget(new.sampled, tests.window);
    let equal = match history.last {
        Some(last) if last.raw == new.raw => last.equal.saturating_add(1),
        _ => 1,
    };
    let suspect = tests.flat.is_some_and(|flat| equal >= flat)
        || tests.jump.is_some_and(|jump| history.jumps(jump, new))
        || tests
            .least
            .is_some_and(|least| history.is_faint(least, tests.window, new));
    if suspect {
        quality = quality.max_concern(Quality::Suspect);
    }
    history.keep(new, equal, tests.window);
    quality
}

/// The gross range test: bad beyond the instrument, suspect beyond what is usual.
fn range(tests: &QualityTests, value: f64) -> Quality {
    let outside = |span: Option<(f64, f64)>| span.is_some_and(|(a, b)| !(a..=b).contains(&value));
    if outside(tests.span) {
        Quality::Bad
    } else if outside(tests.usual) {
        Quality::Suspect
    } else {
        Quality::Good
    }
}

impl History {
    /// Drops what is older than the window.
    fn forget(&mut self, now: Stamp, window: Duration) {
        let old = |at: Stamp| u128::from(at.0.abs_diff(now.0)) > window.as_micros();
        while self.window.front().is_some_and(|(at, _)| old(*at)) {
            self.window.pop_front();
        }
    }

    /// Keeps a reading; of the window no more than about [`POINTS`], evenly.
    fn keep(&mut self, new: Candidate, equal: u32, window: Duration) {
        let least = window.as_micros() / POINTS as u128;
        let apart = |at: Stamp| u128::from(at.0.abs_diff(new.sampled.0)) >= least;
        if self.window.back().is_none_or(|(at, _)| apart(*at)) {
            self.window.push_back((new.sampled, new.value));
        }
        let spacing = self.last.map_or(0.0, |last| {
            let now = new.sampled.0.saturating_sub(last.sampled.0) as f64;
            if last.spacing == 0.0 {
                now
            } else {
                last.spacing + (now - last.spacing) / 16.0
            }
        });
        self.last = Some(Last {
            sampled: new.sampled,
            epoch: new.epoch,
            value: new.value,
            raw: new.raw,
            equal,
            spacing,
        });
    }

    /// Rate of change: whether the step from the reading before is more than so many standard deviations of the window. A
    /// longer time than usual between the two allows for more.
    fn jumps(&self, deviations: f64, new: Candidate) -> bool {
        let Some(last) = self.last.filter(|_| self.window.len() >= FEW) else {
            return false;
        };
        let count = self.window.len() as f64;
        let mean = self.window.iter().map(|(_, v)| v).sum::<f64>() / count;
        let square = |v: f64| (v - mean) * (v - mean);
        let variance = self.window.iter().map(|(_, v)| square(*v)).sum::<f64>() / (count - 1.0);
        let apart = new.sampled.0.saturating_sub(last.sampled.0) as f64;
        let longer = if last.spacing > 0.0 {
            (apart / last.spacing).max(1.0)
        } else {
            1.0
        };
        let allowed = deviations * variance.sqrt() * longer;
        // A window that has not moved at all has no scale to measure by.
        variance > 0.0 && (new.value - last.value).abs() > allowed
    }

    /// Attenuated signal: whether all of a whole window lies within less than `least`.
    fn is_faint(&self, least: f64, window: Duration, new: Candidate) -> bool {
        let Some((first, _)) = self.window.front() else {
            return false;
        };
        // Thinned points may stand a little short of the whole window.
        let whole = window.as_micros() * 19 / 20;
        let spans = u128::from(first.0.abs_diff(new.sampled.0)) >= whole;
        let values = || self.window.iter().map(|(_, v)| *v).chain([new.value]);
        let high = values().fold(f64::NEG_INFINITY, f64::max);
        let low = values().fold(f64::INFINITY, f64::min);
        spans && self.window.len() >= FEW && high - low < least
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn tests() -> QualityTests {
        QualityTests {
            span: None,
            usual: None,
            flat: None,
            jump: None,
            least: None,
            window: Duration::from_secs(3600),
        }
    }

    /// Flags of readings a minute apart, the raw number being the value.
    fn flags(tests: &QualityTests, values: &[f64]) -> Vec<u8> {
        let mut history = History::default();
        let mut one = |(minute, value): (usize, &f64)| {
            let new = Candidate {
                sampled: Stamp(i64::try_from(minute).unwrap() * 60 * Stamp::SECOND),
                epoch: ClockEpoch(1),
                value: *value,
                raw: *value,
            };
            judge(tests, &mut history, new).flag()
        };
        values.iter().enumerate().map(&mut one).collect()
    }

    #[test]
    fn gross_range_is_bad_beyond_the_instrument_and_suspect_beyond_the_usual() {
        let tests = QualityTests {
            span: Some((0.0, 10.0)),
            usual: Some((2.0, 5.0)),
            ..tests()
        };
        let values = [3.0, 2.0, 1.9, 5.1, 0.0, 10.0, -0.1, 10.1, 4.0];
        assert_eq!(flags(&tests, &values), [1, 1, 3, 3, 3, 3, 4, 4, 1]);
    }

    /// The manual's prose: so many equal readings in a row, the newest among them.
    #[test]
    fn a_flat_line_is_counted_with_the_newest_reading() {
        let tests = QualityTests {
            flat: Some(3),
            ..tests()
        };
        let values = [-1.0, -1.0, -1.0, -1.0, -2.0, -2.0, -1.0];
        assert_eq!(flags(&tests, &values), [1, 1, 3, 3, 1, 1, 1]);
    }

    #[test]
    fn a_jump_is_suspect_and_never_bad() {
        let tests = QualityTests {
            jump: Some(5.0),
            ..tests()
        };
        let mut values: Vec<f64> = (0..30).map(|i| f64::from(i % 3)).collect();
        values.extend([400.0, 1.0, 2.0]);
        let found = flags(&tests, &values);
        assert!(found[..30].iter().all(|f| *f == 1));
        assert_eq!(found[30], 3);
        assert!(!found.contains(&4));
        // Negative pressures are no spikes.
        let below: Vec<f64> = (0..30).map(|i| -1000.0 - f64::from(i % 3)).collect();
        assert!(flags(&tests, &below).iter().all(|f| *f == 1));
    }

    #[test]
    fn a_longer_pause_allows_a_larger_step() {
        let tests = QualityTests {
            jump: Some(3.0),
            window: Duration::from_secs(86_400),
            ..tests()
        };
        let mut history = History::default();
        let mut at = |minute: i64, value: f64| {
            let new = Candidate {
                sampled: Stamp(minute * 60 * Stamp::SECOND),
                epoch: ClockEpoch(1),
                value,
                raw: value,
            };
            judge(&tests, &mut history, new)
        };
        for minute in 0..60 {
            at(minute, (minute % 2) as f64);
        }
        assert_eq!(at(120, 20.0), Quality::Good, "an hour for one step");
        assert_eq!(at(121, 60.0), Quality::Suspect);
    }

    #[test]
    fn a_faint_signal_is_told_once_the_window_is_whole() {
        let tests = QualityTests {
            least: Some(0.5),
            ..tests()
        };
        let values: Vec<f64> = (0..120).map(|i| 0.1 * f64::from(i % 2)).collect();
        let found = flags(&tests, &values);
        assert!(found[..50].iter().all(|f| *f == 1));
        assert!(found[61..].iter().all(|f| *f == 3));
        let lively: Vec<f64> = (0..120).map(|i| f64::from(i % 2)).collect();
        assert!(flags(&tests, &lively).iter().all(|f| *f == 1));
    }

    #[test]
    fn late_readings_are_judged_by_their_value_alone_and_a_clock_step_begins_anew() {
        let tests = QualityTests {
            span: Some((0.0, 10.0)),
            flat: Some(2),
            ..tests()
        };
        let mut history = History::default();
        let mut at = |second: i64, epoch: u32, value: f64| {
            let new = Candidate {
                sampled: Stamp(second * Stamp::SECOND),
                epoch: ClockEpoch(epoch),
                value,
                raw: value,
            };
            judge(&tests, &mut history, new).flag()
        };
        assert_eq!(at(10, 1, 5.0), 1);
        assert_eq!(at(9, 1, 5.0), 1, "late: no part of the row");
        assert_eq!(at(8, 1, 11.0), 4);
        assert_eq!(at(11, 1, 5.0), 3);
        assert_eq!(at(3, 2, 5.0), 1, "another run of the clock");
    }

    proptest! {
        /// Memory stays flat and nothing upsets the tests, whatever comes.
        #[test]
        fn the_window_never_grows_beyond_its_points(
            steps in prop::collection::vec((1_i64..50_000, -1e9_f64..1e9), 1..2000),
        ) {
            let tests = QualityTests { jump: Some(4.0), least: Some(1.0), flat: Some(9), ..tests() };
            let mut history = History::default();
            let mut now = 0;
            for (milliseconds, value) in steps {
                now += milliseconds * 1000;
                let new = Candidate { sampled: Stamp(now), epoch: ClockEpoch(1), value, raw: value };
                prop_assert_ne!(judge(&tests, &mut history, new), Quality::Bad);
                prop_assert!(history.window.len() <= POINTS + 2);
            }
        }
    }
}
