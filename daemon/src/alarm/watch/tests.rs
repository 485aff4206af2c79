//! The alarm of the watch, block by block.

use super::*;
use crate::alarm::Desk;
use crate::record::{
    AlarmState, Cause, Names, Place, Priority, SizeUnit, Subject, UnitSystem, Weighed,
};

/// Two hours, so that a day of quiet is twelve blocks.
const BLOCK: f64 = 7200.0;

fn settings() -> AlarmSettings {
    let names = Names {
        site: "sorrel-flat".into(),
        units: UnitSystem::Metric,
        gauges: vec!["O-1".into()],
        wells: vec!["I-1".into()],
        neighbours: vec![],
        layers: vec!["lower sand".into()],
    };
    AlarmSettings::new(names, BLOCK)
}

fn leak(block: i64) -> Finding {
    Finding {
        block,
        causes: vec![Weighed {
            cause: Cause::Leak,
            probability: 0.9,
            subject: Some(Subject::Place),
            log_evidence: 20.0,
        }],
        named: true,
        onset: 100.0 * BLOCK,
        onset_sd: BLOCK,
        size: Some(Size {
            value: 1e-4,
            sd: 1e-5,
            unit: SizeUnit::CubicMetrePerSecond,
        }),
        place: Some(Place {
            x: 300.0,
            y: -400.0,
            layer: 0,
            radius_90: 100.0,
        }),
        gauges: vec![(0, -2000.0, 40.0)],
        log_mixture: 12.0,
        log_threshold: 10.0,
    }
}

fn with_size(block: i64, value: f64) -> Finding {
    let mut f = leak(block);
    f.size = f.size.map(|s| Size { value, ..s });
    f
}

fn judge(
    desk: &mut Desk,
    block: i64,
    finding: Option<Finding>,
    rerun: Option<&str>,
) -> Vec<Transition> {
    let step = Step {
        block,
        expectations: vec![None],
        departures: vec![None],
        blind: vec![None],
        log_mixture: 0.0,
        log_threshold: 10.0,
        finding,
    };
    let recorded = Stamp::from_seconds(1e9);
    desk.judged(&step, rerun, recorded)
}

fn kinds(transitions: &[Transition]) -> Vec<(TransitionKind, AlarmState)> {
    transitions
        .iter()
        .map(|t| (t.kind, t.alarm.state()))
        .collect()
}

use AlarmState as S;
use TransitionKind as K;

fn acknowledge(desk: &mut Desk) {
    use crate::record::{Command, CommandKind};
    let occurrence = desk.alarms().next().unwrap().occurrence;
    let (t, _) = desk.person(
        &Command {
            by: "jm".into(),
            note: String::new(),
            kind: CommandKind::Acknowledge {
                alarm: watch_id(),
                occurrence,
            },
        },
        Stamp(0),
    );
    assert_eq!(t.len(), 1);
}

#[test]
fn small_changes_are_kept_and_large_ones_told() {
    let mut desk = Desk::new(settings());
    let up = judge(&mut desk, 110, Some(leak(110)), None);
    assert_eq!(kinds(&up), [(K::Raised, S::Unacknowledged)]);
    assert_eq!(up[0].alarm.priority, Priority::High);
    assert_eq!(up[0].at, Stamp::from_seconds(111.0 * BLOCK));
    acknowledge(&mut desk);
    // Half a deviation: stored, not told.
    assert!(judge(&mut desk, 111, Some(with_size(111, 1.05e-4)), None).is_empty());
    let stored = desk.alarms().next().unwrap().finding.clone().unwrap();
    assert_eq!((stored.block, stored.size.unwrap().value), (111, 1.05e-4));
    // Far beyond, but too soon after the last message; then told once, and seen no more.
    assert!(judge(&mut desk, 112, Some(with_size(112, 1.5e-4)), None).is_empty());
    let t = judge(&mut desk, 116, Some(with_size(116, 1.5e-4)), None);
    assert_eq!(kinds(&t), [(K::Changed, S::Unacknowledged)]);
    acknowledge(&mut desk);
    // More than one deviation but within the interval: news, but still acknowledged.
    let t = judge(&mut desk, 122, Some(with_size(122, 1.62e-4)), None);
    assert_eq!(kinds(&t), [(K::Updated, S::Acknowledged)]);
    // Nothing new for a day: told all the same, so that what was said last is current.
    for block in 123..134 {
        assert!(judge(&mut desk, block, Some(with_size(block, 1.62e-4)), None).is_empty());
    }
    let t = judge(&mut desk, 134, Some(with_size(134, 1.62e-4)), None);
    assert_eq!(kinds(&t), [(K::Updated, S::Acknowledged)]);
}

#[test]
fn another_cause_must_be_seen_again_and_a_name_is_told_at_once() {
    let mut desk = Desk::new(settings());
    let mut unnamed = leak(110);
    unnamed.named = false;
    judge(&mut desk, 110, Some(unnamed), None);
    acknowledge(&mut desk);
    let t = judge(&mut desk, 111, Some(leak(111)), None);
    assert_eq!(kinds(&t), [(K::Updated, S::Acknowledged)], "named now");
    let mut other = leak(117);
    other.causes[0].cause = Cause::Interference;
    let t = judge(&mut desk, 117, Some(other), None);
    assert_eq!(kinds(&t), [(K::Changed, S::Unacknowledged)]);
    assert_eq!(t[0].alarm.priority, Priority::Medium);
    assert_eq!(t[0].alarm.occurrence, 1);
}

#[test]
fn a_serious_rival_keeps_an_unnamed_finding_urgent() {
    let mut f = leak(1);
    f.named = false;
    f.causes.insert(
        0,
        Weighed {
            cause: Cause::GaugeStep,
            probability: 0.6,
            subject: Some(Subject::Gauge(0)),
            log_evidence: 21.0,
        },
    );
    let p = settings().watch.priorities;
    f.causes[1].probability = 0.3;
    assert_eq!(p.of_finding(&f), Priority::High);
    f.causes[1].probability = 0.1;
    assert_eq!(p.of_finding(&f), Priority::Low);
    f.causes[1].probability = 0.3;
    f.named = true;
    assert_eq!(p.of_finding(&f), Priority::Low);
}

#[test]
fn it_returns_only_after_a_day_of_quiet_blocks() {
    let mut desk = Desk::new(settings());
    judge(&mut desk, 110, Some(leak(110)), None);
    for block in 111..115 {
        assert!(judge(&mut desk, block, None, None).is_empty());
    }
    judge(&mut desk, 115, Some(leak(115)), None);
    for block in 116..120 {
        assert!(judge(&mut desk, block, None, None).is_empty());
    }
    // Blocks never judged do not count as quiet.
    for block in 150..157 {
        assert!(judge(&mut desk, block, None, None).is_empty(), "{block}");
    }
    let t = judge(&mut desk, 157, None, None);
    assert_eq!(kinds(&t), [(K::Returned, S::ReturnedUnacknowledged)]);
    let t = judge(&mut desk, 158, Some(leak(158)), None);
    assert_eq!(kinds(&t), [(K::Raised, S::Unacknowledged)]);
    assert_eq!(t[0].alarm.occurrence, 2);
}

#[test]
fn a_rerun_that_takes_all_support_away_revises_and_never_erases() {
    let mut desk = Desk::new(settings());
    for block in 110..114 {
        judge(&mut desk, block, Some(leak(block)), None);
    }
    for block in 110..113 {
        assert!(judge(&mut desk, block, None, Some("late rates of I-1")).is_empty());
    }
    let t = judge(&mut desk, 113, None, Some("late rates of I-1"));
    assert_eq!(kinds(&t), [(K::Revised, S::ReturnedUnacknowledged)]);
    assert!(t[0].note.contains("late rates of I-1"), "{}", t[0].note);
    assert!(t[0].alarm.finding.is_some(), "what was said stays readable");
}

#[test]
fn a_rerun_of_an_ended_alarm_is_told_too() {
    let mut desk = Desk::new(settings());
    judge(&mut desk, 110, Some(leak(110)), None);
    for block in 111..123 {
        judge(&mut desk, block, None, None);
    }
    acknowledge(&mut desk);
    let t = judge(&mut desk, 110, None, Some("late data"));
    assert_eq!(kinds(&t), [(K::Revised, S::Normal)]);
}

#[test]
fn a_rerun_that_finds_more_in_the_past_tells_it_once() {
    let mut desk = Desk::new(settings());
    for block in 110..150 {
        judge(&mut desk, block, None, None);
    }
    let t = judge(&mut desk, 111, Some(leak(111)), Some("late data"));
    assert_eq!(
        kinds(&t),
        [
            (K::Raised, S::Unacknowledged),
            (K::Returned, S::ReturnedUnacknowledged)
        ]
    );
    for block in 112..130 {
        assert!(judge(&mut desk, block, Some(leak(block)), Some("late data")).is_empty());
    }
    // It reaches into the last day: present after all.
    let mut told = Vec::new();
    for block in 130..150 {
        told.extend(judge(
            &mut desk,
            block,
            Some(leak(block)),
            Some("late data"),
        ));
    }
    assert_eq!(kinds(&told), [(K::Raised, S::Unacknowledged)]);
    assert!(told[0].note.contains("late data"));
}

#[test]
fn a_rerun_that_changes_the_newest_finding_revises_it() {
    let mut desk = Desk::new(settings());
    judge(&mut desk, 110, Some(leak(110)), None);
    judge(&mut desk, 111, Some(leak(111)), None);
    acknowledge(&mut desk);
    // An older block is history: nothing is said of it.
    assert!(
        judge(
            &mut desk,
            110,
            Some(with_size(110, 5e-4)),
            Some("late data")
        )
        .is_empty()
    );
    let t = judge(
        &mut desk,
        111,
        Some(with_size(111, 5e-4)),
        Some("late data"),
    );
    assert_eq!(kinds(&t), [(K::Revised, S::Unacknowledged)]);
    assert_eq!(t[0].note, "late data");
}

#[test]
fn numbers_that_are_no_numbers_are_left_out() {
    let mut f = leak(110);
    f.size = f.size.map(|s| Size {
        sd: f64::INFINITY,
        ..s
    });
    f.place = f.place.map(|p| Place {
        radius_90: f64::NAN,
        ..p
    });
    f.onset_sd = f64::NAN;
    let mut desk = Desk::new(settings());
    let t = judge(&mut desk, 110, Some(f), None);
    let kept = t[0].alarm.finding.clone().unwrap();
    assert_eq!((kept.size, kept.place, kept.onset_sd), (None, None, BLOCK));
    assert!(Desk::restore(settings(), &desk.save()).is_ok());
}
