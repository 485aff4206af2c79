//! Loss of sight: delays, groups, silence.

use super::*;
use crate::alarm::Desk;
use crate::record::{ClockEpoch, ClockState, DeviceStatus, Names, Quality, Reading, UnitSystem};

const BLOCK: f64 = 1800.0;

fn at(second: i64) -> Stamp {
    Stamp(second * Stamp::SECOND)
}

fn settings() -> AlarmSettings {
    let names = Names {
        site: "sorrel-flat".into(),
        units: UnitSystem::Metric,
        gauges: vec!["O-1".into(), "O-2".into(), "O-3".into()],
        wells: vec!["I-1".into()],
        neighbours: vec![],
        layers: vec!["lower sand".into()],
    };
    let mut s = AlarmSettings::new(names, BLOCK);
    for (channel, source, gauge) in [
        ("o1", "skid", Some(0)),
        ("o2", "skid", Some(1)),
        ("o3", "radio", Some(2)),
        ("flow", "skid", None),
    ] {
        s.channels.push(ChannelWatch {
            channel: channel.into(),
            source: source.into(),
            gauge,
            silence: 600.0,
        });
    }
    s
}

fn judge(desk: &mut Desk, block: i64, blind: [Option<Blind>; 3]) -> Vec<String> {
    let step = Step {
        block,
        expectations: vec![None; 3],
        departures: vec![None; 3],
        blind: blind.to_vec(),
        log_mixture: 0.0,
        log_threshold: 10.0,
        finding: None,
    };
    told(desk.judged(&step, None, at((block + 1) * 1800 + 60)))
}

fn told(transitions: Vec<Transition>) -> Vec<String> {
    transitions
        .iter()
        .map(|t| format!("{} {}", t.alarm.id, t.alarm.state().name()))
        .collect()
}

fn hear(desk: &mut Desk, channels: &[&str], second: i64) -> Vec<String> {
    hear_late(desk, channels, second, second)
}

fn hear_late(desk: &mut Desk, channels: &[&str], second: i64, recorded: i64) -> Vec<String> {
    let readings: Vec<Reading> = channels
        .iter()
        .map(|c| Reading {
            channel: (*c).into(),
            sampled: at(second),
            received: at(recorded),
            epoch: ClockEpoch(0),
            value: Some(1.0),
            raw: None,
            quality: Quality::Good,
            device: DeviceStatus::Normal,
            clock: ClockState::Foreign,
        })
        .collect();
    told(desk.batch(&readings, at(recorded)))
}

const SEEN: [Option<Blind>; 3] = [None; 3];
const LOST: Option<Blind> = Some(Blind::NoData);

#[test]
fn one_gauge_is_told_after_the_delay_and_returns_after_it() {
    let mut desk = Desk::new(settings());
    for block in 0..3 {
        assert!(judge(&mut desk, block, [LOST, None, None]).is_empty());
    }
    // A seen block starts the delay again.
    assert!(judge(&mut desk, 3, SEEN).is_empty());
    for block in 4..7 {
        assert!(judge(&mut desk, block, [LOST, None, None]).is_empty());
    }
    assert_eq!(
        judge(&mut desk, 7, [LOST, None, None]),
        ["blind-O-1 unacknowledged"]
    );
    let alarm = desk.alarms().next().unwrap();
    assert_eq!(alarm.since, at(4 * 1800));
    assert_eq!(
        alarm.summary,
        "O-1 cannot be judged: nothing usable was read"
    );
    // Another reason is told without asking for another look.
    assert_eq!(
        judge(&mut desk, 8, [Some(Blind::StaleRate), None, None]),
        ["blind-O-1 unacknowledged"]
    );
    for block in 9..12 {
        assert!(judge(&mut desk, block, SEEN).is_empty());
    }
    assert_eq!(
        judge(&mut desk, 12, SEEN),
        ["blind-O-1 returned-unacknowledged"]
    );
    // Blocks judged again do not bring it back.
    assert!(judge(&mut desk, 5, [LOST, None, None]).is_empty());
}

#[test]
fn all_gauges_together_are_one_alarm() {
    let mut desk = Desk::new(settings());
    for block in 0..3 {
        assert!(judge(&mut desk, block, [LOST; 3]).is_empty());
    }
    assert_eq!(
        judge(&mut desk, 3, [LOST; 3]),
        ["blind-site unacknowledged"]
    );
    // One gauge sees again: the site does too, and the others are told by name.
    for block in 4..7 {
        assert!(judge(&mut desk, block, [None, LOST, LOST]).is_empty());
    }
    assert_eq!(
        judge(&mut desk, 7, [None, LOST, LOST]),
        [
            "blind-site returned-unacknowledged",
            "blind-O-2 unacknowledged",
            "blind-O-3 unacknowledged"
        ]
    );
}

#[test]
fn a_watch_that_judges_nothing_says_why_at_once() {
    let mut desk = Desk::new(settings());
    let why = "no ground file; run `borewake commission site.toml`";
    let t = desk.watch_blind(Some(why), at(10));
    assert_eq!(t.len(), 1);
    assert!(t[0].alarm.summary.contains(why));
    assert!(desk.watch_blind(Some(why), at(20)).is_empty());
    // Recording goes on meanwhile, and a silent gauge is told all the same.
    hear(&mut desk, &["o1", "o2", "o3", "flow"], 100);
    hear(&mut desk, &["o2", "o3", "flow"], 600);
    assert_eq!(told(desk.tick(at(710))), ["blind-O-1 unacknowledged"]);
    assert_eq!(
        told(desk.watch_blind(None, at(720))),
        ["blind-site returned-unacknowledged"]
    );
}

#[test]
fn silence_is_told_by_source_where_a_source_is_silent() {
    let mut desk = Desk::new(settings());
    // Nothing was heard yet and the daemon did not say it started: nothing is known.
    assert!(desk.tick(at(0)).is_empty());
    hear(&mut desk, &["o1", "o2", "o3", "flow"], 0);
    assert!(desk.tick(at(600)).is_empty());
    hear(&mut desk, &["o3"], 601);
    assert_eq!(
        told(desk.tick(at(602))),
        ["silent-source-skid unacknowledged"]
    );
    // One of its channels speaks: the source is back, the rest is told one by one.
    assert_eq!(
        hear(&mut desk, &["o1"], 700),
        [
            "silent-source-skid returned-unacknowledged",
            "blind-O-2 unacknowledged",
            "silent-channel-flow unacknowledged"
        ]
    );
    assert_eq!(
        hear(&mut desk, &["o2", "flow"], 710),
        [
            "blind-O-2 returned-unacknowledged",
            "silent-channel-flow returned-unacknowledged"
        ]
    );
    // Old samples are no sign of life.
    assert_eq!(told(desk.tick(at(1400))).len(), 2);
    assert!(hear_late(&mut desk, &["o1", "o2", "o3", "flow"], 300, 1401).is_empty());
}

#[test]
fn time_while_the_daemon_was_down_is_no_silence() {
    let mut desk = Desk::new(settings());
    hear(&mut desk, &["o1", "o2", "o3", "flow"], 0);
    assert!(desk.start(at(100_000)).is_empty());
    assert!(desk.tick(at(100_500)).is_empty());
    assert_eq!(
        told(desk.tick(at(100_700))),
        [
            "blind-site unacknowledged",
            "silent-source-skid unacknowledged"
        ]
    );
    // Silence told before a stop is still silence after it.
    assert!(desk.start(at(200_000)).is_empty());
    assert!(desk.tick(at(200_100)).is_empty());
}

#[test]
fn names_are_safe_in_topics() {
    assert_eq!(gauge_id("O/2 +#é").0, "blind-O_2____");
    assert_eq!(gauge_id("site").0, "blind-gauge-site");
}
