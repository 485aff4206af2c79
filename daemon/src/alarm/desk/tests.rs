//! The desk as a whole: what the journal brings in, what comes out.

use proptest::prelude::*;

use super::*;
use crate::alarm::ChannelWatch;
use crate::record::{
    AlarmState, Cause, ClockEpoch, ClockState, Command, CommandKind, DeviceStatus, Finding, Names,
    Quality, Subject, UnitSystem, Weighed,
};

const BLOCK: f64 = 1800.0;

fn at(second: i64) -> Stamp {
    Stamp(second * Stamp::SECOND)
}

fn names() -> Names {
    Names {
        site: "sorrel-flat".into(),
        units: UnitSystem::Metric,
        gauges: vec!["O-1".into(), "O-2".into()],
        wells: vec!["I-1".into()],
        neighbours: vec![],
        layers: vec!["lower sand".into()],
    }
}

fn settings() -> AlarmSettings {
    let mut s = AlarmSettings::new(names(), BLOCK);
    s.limits.push(LimitSettings {
        on_delay: 30.0,
        deadband: Some(1e4),
        author: "jm 2031-02-01".into(),
        practice: Some("injection-pressure".into()),
        response: "reduce rate at I-1".into(),
        ..LimitSettings::new(
            AlarmId("limit-O-2-above".into()),
            "O-2",
            "o2.pressure".into(),
            Side::Above,
            6.1e6,
        )
    });
    for (channel, gauge) in [
        ("o1.pressure", Some(0)),
        ("o2.pressure", Some(1)),
        ("i1.flow", None),
    ] {
        s.channels.push(ChannelWatch {
            channel: channel.into(),
            source: "skid".into(),
            gauge,
            silence: 600.0,
        });
    }
    s
}

fn reading(channel: &str, second: i64, value: f64) -> Reading {
    Reading {
        channel: channel.into(),
        sampled: at(second),
        received: at(second),
        epoch: ClockEpoch(0),
        value: Some(value),
        raw: Some(value),
        quality: Quality::Good,
        device: DeviceStatus::Normal,
        clock: ClockState::Foreign,
    }
}

fn finding(block: i64) -> Finding {
    Finding {
        block,
        causes: vec![Weighed {
            cause: Cause::GaugeStep,
            probability: 0.9,
            subject: Some(Subject::Gauge(1)),
            log_evidence: 20.0,
        }],
        named: true,
        onset: 1.0e6,
        onset_sd: 3600.0,
        size: None,
        place: None,
        gauges: vec![(1, -2000.0, 40.0)],
        log_mixture: 12.0,
        log_threshold: 10.0,
    }
}

fn judged(block: i64, finding: Option<Finding>) -> Step {
    Step {
        block,
        expectations: vec![None, None],
        departures: vec![None, None],
        blind: vec![None, None],
        log_mixture: 0.0,
        log_threshold: 10.0,
        finding,
    }
}

fn ask(kind: CommandKind) -> Command {
    Command {
        by: "jm".into(),
        note: "seen".into(),
        kind,
    }
}

fn acknowledge(alarm: &str, occurrence: u32) -> Command {
    ask(CommandKind::Acknowledge {
        alarm: AlarmId(alarm.into()),
        occurrence,
    })
}

fn states(transitions: &[Transition]) -> Vec<(&str, &'static str)> {
    transitions
        .iter()
        .map(|t| (t.alarm.id.0.as_str(), t.alarm.state().name()))
        .collect()
}

#[test]
fn a_limit_lives_through_its_whole_life() {
    let mut desk = Desk::new(settings());
    let id = "limit-O-2-above";
    assert!(
        desk.batch(&[reading("o2.pressure", 0, 6.2e6)], at(1))
            .is_empty()
    );
    let on = desk.batch(&[reading("o2.pressure", 40, 6.234e6)], at(41));
    assert_eq!(states(&on), [(id, "unacknowledged")]);
    assert_eq!((on[0].at, on[0].recorded), (at(40), at(41)));
    assert_eq!((on[0].alarm.occurrence, on[0].alarm.sequence), (1, 1));
    assert_eq!(
        on[0].alarm.summary,
        "O-2 is 6.234 MPa, above 6.100 MPa (injection-pressure, jm 2031-02-01), since 1970-01-01 00:00 UTC"
    );
    let (ack, reply) = desk.person(&acknowledge(id, 1), at(50));
    assert_eq!(states(&ack), [(id, "acknowledged")]);
    assert_eq!(ack[0].by.as_deref(), Some("jm"));
    assert!(matches!(reply, Reply::Done { .. }));
    let off = desk.batch(&[reading("o2.pressure", 60, 6.0e6)], at(61));
    assert_eq!(states(&off), [(id, "normal")]);
    assert!(off[0].note.contains("6.234 MPa"), "{}", off[0].note);

    // A second occurrence is not silenced by an acknowledgement of the first.
    desk.batch(
        &[
            reading("o2.pressure", 70, 6.2e6),
            reading("o2.pressure", 110, 6.2e6),
        ],
        at(111),
    );
    let (none, reply) = desk.person(&acknowledge(id, 1), at(120));
    assert!(none.is_empty());
    let Reply::Refused { why } = reply else {
        panic!("{reply:?}")
    };
    assert!(
        why.contains("occurrence 1") && why.contains("occurrence 2 now"),
        "{why}"
    );
    let (_, reply) = desk.person(&acknowledge("limit-O-9", 1), at(120));
    let Reply::Refused { why } = reply else {
        panic!("{reply:?}")
    };
    assert!(why.contains(id), "the refusal names what there is: {why}");
}

#[test]
fn unusable_future_and_late_readings_toggle_nothing() {
    let mut desk = Desk::new(settings());
    let high = |second, quality, value: Option<f64>| Reading {
        quality,
        value,
        ..reading("o2.pressure", second, 9e6)
    };
    let bad = [
        high(0, Quality::Bad, Some(9e6)),
        high(40, Quality::Bad, Some(9e6)),
        high(41, Quality::Missing, None),
        high(42, Quality::Good, Some(f64::NAN)),
        high(4000, Quality::Good, Some(9e6)),
    ];
    assert!(desk.batch(&bad, at(60)).is_empty());
    // The sample from the future did not become the newest: true ones are still judged.
    let suspect = [
        high(50, Quality::Suspect, Some(9e6)),
        high(90, Quality::Suspect, Some(9e6)),
    ];
    assert_eq!(
        desk.batch(&suspect, at(91)).len(),
        1,
        "suspect is never hidden"
    );
}

#[test]
fn an_adoption_is_taken_from_the_journalled_command() {
    let mut desk = Desk::new(settings());
    let up = desk.judged(&judged(600, Some(finding(600))), None, at(1_081_900));
    assert_eq!(states(&up), [("watch", "unacknowledged")]);
    assert_eq!(up[0].at, at(601 * 1800));
    let id = AlarmId("watch".into());
    let adoption = desk.adoption(&id, 1).unwrap();
    assert_eq!((adoption.block, adoption.cause), (601, Cause::GaugeStep));
    let kind = |adoption| CommandKind::Adopt {
        alarm: id.clone(),
        occurrence: 1,
        adoption,
    };
    let (none, reply) = desk.person(&ask(kind(None)), at(1_082_000));
    assert!(none.is_empty() && matches!(reply, Reply::Refused { .. }));
    let (t, reply) = desk.person(&ask(kind(Some(adoption))), at(1_082_000));
    assert_eq!(states(&t), [("watch", "normal")]);
    assert_eq!(t[0].kind, TransitionKind::Adopted);
    assert!(matches!(reply, Reply::Done { .. }));
    assert!(desk.adoption(&id, 1).is_err(), "nothing is left to adopt");
    // A finding beyond the adoption is a new occurrence.
    let again = desk.judged(
        &judged(601, Some(finding(601))),
        Some("adoption"),
        at(1_083_700),
    );
    assert_eq!(again[0].alarm.occurrence, 2);
}

#[test]
fn alarms_the_site_file_no_longer_asks_for_return_at_the_start() {
    let mut desk = Desk::new(settings());
    desk.batch(
        &[
            reading("o2.pressure", 0, 7e6),
            reading("o2.pressure", 40, 7e6),
        ],
        at(41),
    );
    let mut fewer = settings();
    fewer.limits.clear();
    let mut desk = Desk::restore(fewer, &desk.save()).unwrap();
    let t = desk.start(at(100));
    assert_eq!(states(&t), [("limit-O-2-above", "returned-unacknowledged")]);
    assert!(desk.start(at(101)).is_empty());
}

#[test]
fn a_strange_state_is_refused_with_words() {
    let form = Desk::restore(settings(), br#"{"form":7}"#).unwrap_err();
    assert!(form.to_string().contains("form 7"));
    assert!(Desk::restore(settings(), b"not json").is_err());
}

#[test]
fn a_snapshot_shows_what_is_not_normal_and_what_lately_was() {
    let mut desk = Desk::new(settings());
    desk.judged(&judged(600, Some(finding(600))), None, at(1_081_900));
    assert_eq!(
        desk.views(at(2_000_000))[0].state,
        AlarmState::Unacknowledged
    );
    let adoption = desk.adoption(&watch_id(), 1).ok();
    desk.person(
        &ask(CommandKind::Adopt {
            alarm: watch_id(),
            occurrence: 1,
            adoption,
        }),
        at(1_900_000),
    );
    assert_eq!(desk.views(at(1_800_000)).len(), 1);
    assert!(desk.views(at(2_000_000)).is_empty());
}

#[derive(Debug, Clone)]
enum Act {
    Batch(Vec<(u8, i64, f64)>),
    Judged(bool, bool, Option<u8>),
    Rerun(i64, bool),
    Acknowledge(u8),
    Adopt,
    Tick(i64),
    Blind(bool),
    Start,
}

fn act() -> impl Strategy<Value = Act> {
    prop_oneof![
        4 => prop::collection::vec((0_u8..3, 0_i64..900, 5.9e6_f64..6.3e6), 0..12).prop_map(Act::Batch),
        4 => (any::<bool>(), any::<bool>(), prop::option::of(0_u8..3)).prop_map(|(f, b, c)| Act::Judged(f, b, c)),
        1 => (1_i64..20, any::<bool>()).prop_map(|(b, f)| Act::Rerun(b, f)),
        1 => (0_u8..3).prop_map(Act::Acknowledge),
        1 => Just(Act::Adopt),
        1 => (0_i64..2000).prop_map(Act::Tick),
        1 => any::<bool>().prop_map(Act::Blind),
        1 => Just(Act::Start),
    ]
}

/// Plays a story; where `stops` says so the desk is saved and restored between two acts.
fn play(story: &[Act], stops: &[bool], reverse: bool) -> (Vec<Transition>, Vec<u8>) {
    let mut desk = Desk::new(settings());
    let mut all = Vec::new();
    let (mut now, mut block) = (0_i64, 0_i64);
    for (act, stop) in story
        .iter()
        .zip(stops.iter().chain(std::iter::repeat(&false)))
    {
        if *stop {
            desk = Desk::restore(settings(), &desk.save()).unwrap();
        }
        let transitions = match act {
            Act::Batch(samples) => {
                let mut readings: Vec<Reading> = samples
                    .iter()
                    .enumerate()
                    .map(|(i, (c, lag, v))| {
                        let channel = ["o1.pressure", "o2.pressure", "i1.flow"][usize::from(*c)];
                        // No two samples of a channel share an instant, as in the store.
                        let mut r = reading(channel, now - lag, *v);
                        r.sampled.0 += i64::try_from(i).unwrap();
                        r
                    })
                    .collect();
                if reverse {
                    readings.reverse();
                }
                desk.batch(&readings, at(now))
            }
            Act::Judged(found, blind, cause) => {
                block += 1;
                now += 1800;
                let mut step = judged(block, found.then(|| finding(block)));
                step.blind[0] = blind.then_some(crate::record::Blind::NoData);
                if let (Some(f), Some(c)) = (&mut step.finding, cause) {
                    f.causes[0].cause =
                        [Cause::Leak, Cause::GaugeStep, Cause::Barrier][usize::from(*c)];
                }
                desk.judged(&step, None, at(now))
            }
            Act::Rerun(back, found) => {
                let b = (block - back).max(0);
                desk.judged(
                    &judged(b, found.then(|| finding(b))),
                    Some("late data"),
                    at(now),
                )
            }
            Act::Acknowledge(which) => {
                let id = ["watch", "limit-O-2-above", "blind-O-1"][usize::from(*which)];
                let occurrence = desk
                    .alarms()
                    .find(|a| a.id.0 == id)
                    .map_or(1, |a| a.occurrence);
                desk.person(&acknowledge(id, occurrence), at(now)).0
            }
            Act::Adopt => {
                let occurrence = desk
                    .alarms()
                    .find(|a| a.id == watch_id())
                    .map_or(1, |a| a.occurrence);
                let adoption = desk.adoption(&watch_id(), occurrence).ok();
                desk.person(
                    &ask(CommandKind::Adopt {
                        alarm: watch_id(),
                        occurrence,
                        adoption,
                    }),
                    at(now),
                )
                .0
            }
            Act::Tick(gap) => {
                now += gap;
                desk.tick(at(now))
            }
            Act::Blind(on) => desk.watch_blind(on.then_some("no ground file"), at(now)),
            Act::Start => desk.start(at(now)),
        };
        all.extend(transitions);
    }
    (all, desk.save())
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(128))]
    /// Saving and restoring anywhere, and any order within a batch, change nothing.
    #[test]
    fn the_table_is_a_function_of_the_journal(
        story in prop::collection::vec(act(), 0..60),
        stops in prop::collection::vec(any::<bool>(), 60),
    ) {
        let plain = play(&story, &[], false);
        let stopped = play(&story, &stops, true);
        prop_assert_eq!(&plain.0, &stopped.0);
        prop_assert_eq!(&plain.1, &stopped.1);
        // Every transition has an identity of its own, and occurrences only grow.
        let mut seen = std::collections::BTreeSet::new();
        let mut last: BTreeMap<AlarmId, (u32, u32)> = BTreeMap::new();
        for t in &plain.0 {
            let now = (t.alarm.occurrence, t.alarm.sequence);
            prop_assert!(seen.insert((t.alarm.id.clone(), now)));
            let before = last.insert(t.alarm.id.clone(), now).unwrap_or((0, 0));
            prop_assert!(now == (before.0, before.1 + 1) || now == (before.0 + 1, 1), "{before:?} {now:?}");
        }
    }
}
