//! One limit on one channel: delays on sample time, deadband on clearing only.

use serde::{Deserialize, Serialize};

use super::settings::LimitSettings;
use crate::record::Stamp;

/// What a limit remembers between readings.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub(super) struct LimitState {
    /// Newest sample judged; older ones change nothing.
    newest: Option<Stamp>,
    /// Samples in a row that speak against the present condition.
    run: Option<Run>,
    /// The value farthest beyond since the condition came \[SI\].
    peak: Option<f64>,
}

/// Samples in a row that speak for a change.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
struct Run {
    since: Stamp,
    samples: u32,
}

/// What a sample brought about.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Verdict {
    /// Nothing.
    Same,
    /// The value has been beyond for the whole on-delay, since the instant given.
    Beyond { since: Stamp },
    /// The value has been back for the whole off-delay; the farthest value meanwhile.
    Back { peak: f64 },
}

impl LimitState {
    /// Judges one usable sample. `present` is the condition as it stands.
    ///
    /// Samples not newer than the newest judged are passed over: a late one never toggles anything.
    pub(super) fn judge(
        &mut self,
        limit: &LimitSettings,
        present: bool,
        sampled: Stamp,
        value: f64,
    ) -> Verdict {
        if self.newest.is_some_and(|newest| sampled <= newest) {
            return Verdict::Same;
        }
        self.newest = Some(sampled);
        if present {
            let farther = match self.peak {
                Some(peak) => limit.beyond(value) && beyond_by(limit, value, peak),
                None => true,
            };
            if farther {
                self.peak = Some(value);
            }
        }
        let (speaks, delay, samples) = if present {
            (limit.back(value), limit.off_delay, limit.off_samples)
        } else {
            (limit.beyond(value), limit.on_delay, limit.on_samples)
        };
        if !speaks {
            self.run = None;
            return Verdict::Same;
        }
        let run = match self.run {
            Some(run) => Run {
                since: run.since,
                samples: run.samples.saturating_add(1),
            },
            None => Run {
                since: sampled,
                samples: 1,
            },
        };
        let lasted = sampled.seconds() - run.since.seconds() >= delay;
        if !(lasted && run.samples >= samples) {
            self.run = Some(run);
            return Verdict::Same;
        }
        self.run = None;
        if present {
            let peak = self.peak.take().unwrap_or(value);
            Verdict::Back { peak }
        } else {
            self.peak = Some(value);
            Verdict::Beyond { since: run.since }
        }
    }

    /// Forgets a half-made run, as when the limit itself was changed.
    pub(super) fn restart(&mut self) {
        self.run = None;
    }
}

fn beyond_by(limit: &LimitSettings, value: f64, than: f64) -> bool {
    match limit.side {
        super::Side::Above => value > than,
        super::Side::Below => value < than,
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;
    use crate::alarm::Side;
    use crate::record::AlarmId;

    fn limit() -> LimitSettings {
        LimitSettings {
            on_delay: 30.0,
            on_samples: 3,
            off_delay: 60.0,
            off_samples: 2,
            deadband: Some(5.0),
            ..LimitSettings::new(
                AlarmId("limit-O-2-above".into()),
                "O-2",
                "o2.pressure".into(),
                Side::Above,
                100.0,
            )
        }
    }

    fn at(second: i64) -> Stamp {
        Stamp(second * Stamp::SECOND)
    }

    #[test]
    fn on_delay_asks_for_time_and_samples() {
        let (l, mut s) = (limit(), LimitState::default());
        assert_eq!(s.judge(&l, false, at(0), 101.0), Verdict::Same);
        // Equal is not beyond, and starts the count again.
        assert_eq!(s.judge(&l, false, at(10), 100.0), Verdict::Same);
        assert_eq!(s.judge(&l, false, at(20), 102.0), Verdict::Same);
        assert_eq!(s.judge(&l, false, at(25), 102.0), Verdict::Same);
        assert_eq!(
            s.judge(&l, false, at(30), 102.0),
            Verdict::Same,
            "samples, not time"
        );
        assert_eq!(
            s.judge(&l, false, at(50), 103.0),
            Verdict::Beyond { since: at(20) }
        );
        // Time, not samples: two samples a day apart are no three samples.
        let mut s = LimitState::default();
        assert_eq!(s.judge(&l, false, at(0), 101.0), Verdict::Same);
        assert_eq!(s.judge(&l, false, at(86_400), 101.0), Verdict::Same);
    }

    #[test]
    fn deadband_acts_on_clearing_only() {
        let l = LimitSettings {
            on_delay: 0.0,
            on_samples: 1,
            ..limit()
        };
        let mut s = LimitState::default();
        assert_eq!(
            s.judge(&l, false, at(0), 101.0),
            Verdict::Beyond { since: at(0) }
        );
        assert_eq!(s.judge(&l, true, at(10), 120.0), Verdict::Same);
        assert_eq!(
            s.judge(&l, true, at(20), 97.0),
            Verdict::Same,
            "inside the deadband"
        );
        assert_eq!(s.judge(&l, true, at(30), 95.0), Verdict::Same);
        assert_eq!(
            s.judge(&l, true, at(40), 96.0),
            Verdict::Same,
            "starts again"
        );
        assert_eq!(s.judge(&l, true, at(50), 95.0), Verdict::Same);
        assert_eq!(
            s.judge(&l, true, at(110), 90.0),
            Verdict::Back { peak: 120.0 }
        );
    }

    #[test]
    fn late_samples_toggle_nothing() {
        let l = LimitSettings {
            on_delay: 0.0,
            on_samples: 1,
            off_delay: 0.0,
            off_samples: 1,
            ..limit()
        };
        let mut s = LimitState::default();
        assert_eq!(s.judge(&l, false, at(100), 90.0), Verdict::Same);
        assert_eq!(s.judge(&l, false, at(50), 150.0), Verdict::Same);
        assert_eq!(s.judge(&l, false, at(100), 150.0), Verdict::Same);
        assert_eq!(
            s.judge(&l, false, at(101), 150.0),
            Verdict::Beyond { since: at(101) }
        );
        assert_eq!(s.judge(&l, true, at(60), 10.0), Verdict::Same);
    }

    #[test]
    fn deadband_comes_from_noise_and_resolution() {
        let mut l = limit();
        l.deadband = None;
        assert_eq!(l.deadband(), 0.0);
        l.noise = Some(40.0);
        l.resolution = Some(100.0);
        assert_eq!(l.deadband(), 200.0);
        l.resolution = Some(10.0);
        assert_eq!(l.deadband(), 160.0);
    }

    proptest! {
        /// A burst that arrives at once gives what the same samples give one by one, and mirrored values on the other
        /// side give the mirrored story.
        #[test]
        fn sides_are_mirrors(samples in prop::collection::vec((1_i64..200, 80.0_f64..120.0), 1..60)) {
            let above = limit();
            let below = LimitSettings { side: Side::Below, value: -100.0, ..limit() };
            let (mut a, mut b) = (LimitState::default(), LimitState::default());
            let (mut on_a, mut on_b) = (false, false);
            let mut now = 0;
            for (gap, value) in samples {
                now += gap;
                let va = a.judge(&above, on_a, at(now), value);
                let vb = b.judge(&below, on_b, at(now), -value);
                match (va, vb) {
                    (Verdict::Same, Verdict::Same) => {}
                    (Verdict::Beyond { since }, Verdict::Beyond { since: other }) => {
                        prop_assert_eq!(since, other);
                        prop_assert!(!on_a);
                        on_a = true;
                        on_b = true;
                    }
                    (Verdict::Back { peak }, Verdict::Back { peak: other }) => {
                        prop_assert_eq!(peak, -other);
                        prop_assert!(on_a);
                        on_a = false;
                        on_b = false;
                    }
                    other => prop_assert!(false, "{other:?}"),
                }
            }
        }
    }
}
