//! Meters that count up: their rate over the time between two counts.

use crate::config::Totaliser;
use crate::record::{ClockEpoch, Quality, Stamp};

use super::Outcome;

/// The last count of a meter.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Last {
    count: f64,
    sampled: Stamp,
    epoch: ClockEpoch,
    /// What came of it: a count delivered twice is one reading.
    outcome: Outcome,
}

/// Mean rate \[m3/s\] since the count before. There is none for the first count, after a reset, for a count that comes late,
/// and across a step of the clock, which leaves no time to divide by.
pub(crate) fn convert(
    settings: &Totaliser,
    last: &mut Option<Last>,
    count: f64,
    sampled: Stamp,
    epoch: ClockEpoch,
) -> Outcome {
    let again = |l: &Last| (l.sampled, l.epoch) == (sampled, epoch) && l.count == count;
    if let Some(known) = (*last).filter(again) {
        return known.outcome;
    }
    let outcome = since(settings, *last, count, sampled, epoch);
    let late = last.is_some_and(|l| l.epoch == epoch && sampled <= l.sampled);
    if !late && is_count(settings, count) {
        *last = Some(Last {
            count,
            sampled,
            epoch,
            outcome,
        });
    }
    outcome
}

fn is_count(settings: &Totaliser, count: f64) -> bool {
    count >= 0.0 && settings.wrap.is_none_or(|wrap| count < wrap)
}

/// What a count says together with the one before.
fn since(
    settings: &Totaliser,
    last: Option<Last>,
    count: f64,
    sampled: Stamp,
    epoch: ClockEpoch,
) -> Outcome {
    let none = Outcome::of(None, Quality::NotEvaluated);
    if !is_count(settings, count) {
        return Outcome::of(None, Quality::Bad);
    }
    let Some(before) = last.filter(|l| l.epoch == epoch && l.sampled < sampled) else {
        return none;
    };
    let seconds = (sampled.0 - before.sampled.0) as f64 / Stamp::SECOND as f64;
    let rate = |counts: f64| counts * settings.count / seconds;
    let counted = count - before.count;
    let wrapped = settings.wrap.map(|wrap| counted + wrap);
    if counted >= 0.0 {
        let rate = rate(counted);
        // More than can be: a count that jumped. The next one counts from here.
        return if rate <= settings.most {
            Outcome::of(Some(rate), Quality::Good)
        } else {
            Outcome::of(None, Quality::Bad)
        };
    }
    match wrapped.map(rate) {
        Some(rate) if rate <= settings.most => Outcome::of(Some(rate), Quality::Good),
        _ => none,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A meter of 16 bits and 0.1 m3 a count, at most 1 m3/s.
    const METER: Totaliser = Totaliser {
        count: 0.1,
        wrap: Some(65_536.0),
        most: 1.0,
    };

    fn play(settings: &Totaliser, counts: &[(i64, u32, f64)]) -> Vec<(Option<f64>, u8)> {
        let mut last = None;
        let mut one = |&(seconds, epoch, count): &(i64, u32, f64)| {
            let sampled = Stamp(seconds * Stamp::SECOND);
            let o = convert(settings, &mut last, count, sampled, ClockEpoch(epoch));
            (o.value, o.quality.flag())
        };
        counts.iter().map(&mut one).collect()
    }

    #[test]
    fn counts_become_mean_rates_over_what_time_passed() {
        let found = play(
            &METER,
            &[
                (0, 1, 100.0),
                (10, 1, 150.0),
                (70, 1, 150.0),
                (80, 1, 151.0),
            ],
        );
        assert_eq!(
            found,
            [(None, 2), (Some(0.5), 1), (Some(0.0), 1), (Some(0.01), 1)]
        );
    }

    #[test]
    fn a_wrap_goes_on_and_a_reset_does_not() {
        let wrap = play(&METER, &[(0, 1, 65_516.0), (10, 1, 10.0)]);
        assert_eq!(wrap[1], (Some(0.3), 1));
        let reset = play(&METER, &[(0, 1, 5000.0), (10, 1, 3.0), (20, 1, 13.0)]);
        assert_eq!(reset[1..], [(None, 2), (Some(0.1), 1)]);
        let without = Totaliser {
            wrap: None,
            ..METER
        };
        assert_eq!(
            play(&without, &[(0, 1, 65_516.0), (10, 1, 10.0)])[1],
            (None, 2)
        );
    }

    #[test]
    fn a_jump_is_bad_and_a_clock_step_or_late_count_gives_nothing() {
        let found = play(
            &METER,
            &[
                (0, 1, 0.0),
                (10, 1, 30_000.0),
                (20, 1, 30_010.0),
                (15, 1, 30_020.0),
                (30, 2, 30_020.0),
                (40, 2, 30_030.0),
                (50, 2, 70_000.0),
            ],
        );
        assert_eq!(found[1], (None, 4));
        assert_eq!(found[2], (Some(0.1), 1), "the next counts from the jump");
        assert_eq!(found[3], (None, 2), "late");
        assert_eq!(found[4], (None, 2), "another run of the clock");
        assert_eq!(found[5], (Some(0.1), 1));
        assert_eq!(found[6], (None, 4), "beyond its digits");
    }
}
