//! Random histories of two limits, one of which latches, against the table of transitions of IEC 62682 / ISA-18.2.
//!
//! The table is written from the standard's state diagram as it is commonly published (states by name; the shelved,
//! suppressed and out-of-service rows from memory). `BOREWAKE_HISTORIES` asks for more histories than the default.

use super::*;
use crate::alarm::Care;
use crate::record::{
    AlarmState, ClockEpoch, ClockState, Command, CommandKind, DeviceStatus, Names, Quality,
};

use AlarmState as S;
use TransitionKind as T;

const PLAIN: &str = "limit-a";
const LATCHING: &str = "limit-b";
const SHELF: f64 = 86_400.0;
const REALARM: f64 = 7200.0;
const ESCALATE: f64 = 1800.0;

fn settings() -> AlarmSettings {
    let mut settings = AlarmSettings::new(Names::default(), 3600.0);
    for (id, channel, latching) in [(PLAIN, "a", false), (LATCHING, "b", true)] {
        settings.limits.push(LimitSettings {
            latching,
            deadband: Some(1.0),
            ..LimitSettings::new(
                AlarmId(id.into()),
                channel,
                channel.into(),
                Side::Above,
                10.0,
            )
        });
    }
    settings.care = Care {
        shelve_at_most: SHELF,
        realarm: Some(REALARM),
        escalate: Some(ESCALATE),
    };
    settings
}

/// Whether the standard has this step. The condition is that just after it.
fn allowed(from: S, kind: T, to: S, present: bool) -> bool {
    let held = |s| matches!(s, S::Shelved | S::OutOfService);
    match kind {
        // A new occurrence is unacknowledged; what is held back stays so, and is written down.
        T::Raised => present && (to == S::Unacknowledged || (held(from) && to == from)),
        T::Returned => {
            !present
                && (matches!(
                    (from, to),
                    (
                        S::Unacknowledged,
                        S::ReturnedUnacknowledged | S::LatchedUnacknowledged
                    ) | (S::Acknowledged, S::Normal | S::LatchedAcknowledged)
                ) || (held(from) && to == from))
        }
        T::Acknowledged => matches!(
            (from, to),
            (S::Unacknowledged, S::Acknowledged)
                | (S::ReturnedUnacknowledged, S::Normal)
                | (S::LatchedUnacknowledged, S::LatchedAcknowledged)
        ),
        T::Reset => (from, to, present) == (S::LatchedAcknowledged, S::Normal, false),
        T::Realarmed => (from, to) == (S::Acknowledged, S::Unacknowledged),
        T::Escalated => (from, to) == (S::Unacknowledged, S::Unacknowledged),
        T::Shelved => to == S::Shelved && from != S::OutOfService,
        T::TakenOut => to == S::OutOfService && from != S::OutOfService,
        // Never straight to acknowledged.
        T::Unshelved => from == S::Shelved && to == back(present),
        T::PutBack => from == S::OutOfService && to == back(present),
        T::Changed | T::Updated | T::Revised | T::Adopted => false,
    }
}

fn back(present: bool) -> S {
    if present {
        S::Unacknowledged
    } else {
        S::Normal
    }
}

/// One thing that happens.
#[derive(Debug, Clone)]
enum Act {
    Value(&'static str, f64),
    Tick,
    Person(CommandKind, bool),
}

fn act(rng: &mut fastrand::Rng, desk: &Desk, wall: Stamp) -> Act {
    let (id, channel) = if rng.bool() {
        (PLAIN, "a")
    } else {
        (LATCHING, "b")
    };
    let alarm = AlarmId(id.into());
    let present = desk
        .alarms()
        .find(|a| a.id == alarm)
        .map_or(0, |a| a.occurrence);
    // Mostly the occurrence that is there, now and then one that is over.
    let occurrence = if rng.u8(..8) == 0 {
        present.saturating_sub(1)
    } else {
        present
    };
    let until = wall.plus(rng.i64(-3600..2 * 86_400) * Stamp::SECOND);
    let kind = match rng.u8(..16) {
        0..=3 => return Act::Value(channel, if rng.bool() { 20.0 } else { 0.0 }),
        4..=6 => return Act::Tick,
        7..=9 => CommandKind::Acknowledge { alarm, occurrence },
        10 => CommandKind::Shelve {
            alarm,
            occurrence,
            until,
        },
        11 => CommandKind::Unshelve { alarm, occurrence },
        12 => CommandKind::TakeOut { alarm, occurrence },
        13 => CommandKind::PutBack { alarm, occurrence },
        _ => CommandKind::Reset { alarm, occurrence },
    };
    Act::Person(kind, rng.u8(..6) > 0)
}

fn happen(desk: &mut Desk, act: &Act, seq: i64, wall: Stamp) -> Outcome {
    let (kind, readings) = match act {
        Act::Value(channel, value) => {
            let reading = Reading {
                channel: (*channel).into(),
                sampled: wall,
                received: wall,
                epoch: ClockEpoch(0),
                value: Some(*value),
                raw: Some(*value),
                quality: Quality::Good,
                device: DeviceStatus::Normal,
                clock: ClockState::Foreign,
            };
            (EntryKind::Batch { readings: 1 }, vec![reading])
        }
        Act::Tick => (EntryKind::Tick, Vec::new()),
        Act::Person(kind, says) => {
            let command = Command {
                by: "jm".into(),
                note: if *says {
                    "because".into()
                } else {
                    String::new()
                },
                kind: kind.clone(),
            };
            (EntryKind::Person { command }, Vec::new())
        }
    };
    desk.entry(&Entry { seq, wall, kind }, &readings)
}

fn state_of(desk: &Desk, id: &AlarmId) -> S {
    desk.alarms()
        .find(|a| a.id == *id)
        .map_or(S::Normal, Alarm::state)
}

#[test]
fn no_history_leaves_the_standards_table_and_a_restart_changes_nothing() {
    let histories: u64 = std::env::var("BOREWAKE_HISTORIES")
        .ok()
        .and_then(|n| n.parse().ok())
        .unwrap_or(1500);
    let mut seen = std::collections::BTreeSet::new();
    for seed in 0..histories {
        let mut rng = fastrand::Rng::with_seed(seed);
        let mut desk = Desk::new(settings());
        let restart = rng.i64(..40);
        let mut wall = Stamp(1_900_000_000_000_000);
        for seq in 0..40 {
            wall = wall.plus(rng.i64(1..4000) * Stamp::SECOND);
            let act = act(&mut rng, &desk, wall);
            let before: BTreeMap<AlarmId, (S, u32)> = desk
                .alarms()
                .map(|a| (a.id.clone(), (a.state(), a.occurrence)))
                .collect();
            let outcome = if seq == restart {
                let mut again = Desk::restore(settings(), &desk.save()).unwrap();
                let outcome = happen(&mut desk, &act, seq, wall);
                assert_eq!(happen(&mut again, &act, seq, wall), outcome, "seed {seed}");
                assert_eq!(again.save(), desk.save(), "seed {seed}");
                outcome
            } else {
                happen(&mut desk, &act, seq, wall)
            };
            for t in &outcome.transitions {
                let old = before.get(&t.alarm.id).copied();
                let (from, occurrence) = old.unwrap_or((S::Normal, 0));
                let (to, present) = (t.alarm.state(), t.alarm.condition == Condition::Present);
                assert!(
                    allowed(from, t.kind, to, present),
                    "seed {seed}: {act:?} led from {from:?} by {:?} to {to:?}",
                    t.kind
                );
                let came = u32::from(t.kind == T::Raised);
                assert_eq!(t.alarm.occurrence, occurrence + came, "seed {seed}");
                seen.insert((from.name(), format!("{:?}", t.kind), to.name()));
            }
            // Refused is unchanged; a late answer moves nothing.
            if let (Act::Person(..), Some(Reply::Refused { .. })) = (&act, &outcome.reply) {
                assert!(outcome.transitions.is_empty());
                for (id, (state, _)) in &before {
                    assert_eq!(state_of(&desk, id), *state, "seed {seed}");
                }
            }
            // Nothing stays on the shelf beyond its time.
            if matches!(act, Act::Tick) {
                for alarm in desk.alarms() {
                    if let crate::record::Suppression::Shelved { until } = alarm.suppression {
                        assert!(until > wall, "seed {seed}: {}", alarm.id);
                    }
                }
            }
        }
    }
    // The histories went through the whole table, not round a corner of it.
    assert!(seen.len() >= 30, "{} kinds of step: {seen:#?}", seen.len());
}

#[test]
fn what_stands_is_told_again_by_the_wall_clock() {
    let mut desk = Desk::new(settings());
    let start = Stamp(1_900_000_000_000_000);
    let after = |s: f64| Stamp::from_seconds(start.seconds() + s);
    happen(&mut desk, &Act::Value("a", 20.0), 1, start);
    let kinds = |o: Outcome| o.transitions.iter().map(|t| t.kind).collect::<Vec<_>>();
    assert_eq!(
        kinds(happen(&mut desk, &Act::Tick, 2, after(ESCALATE - 1.0))),
        []
    );
    assert_eq!(
        kinds(happen(&mut desk, &Act::Tick, 3, after(ESCALATE))),
        [T::Escalated]
    );
    // Once.
    assert_eq!(
        kinds(happen(&mut desk, &Act::Tick, 4, after(ESCALATE + 60.0))),
        []
    );
    let alarm = AlarmId(PLAIN.into());
    let seen = Act::Person(
        CommandKind::Acknowledge {
            alarm: alarm.clone(),
            occurrence: 1,
        },
        true,
    );
    assert_eq!(
        kinds(happen(&mut desk, &seen, 5, after(2000.0))),
        [T::Acknowledged]
    );
    assert_eq!(
        kinds(happen(
            &mut desk,
            &Act::Tick,
            6,
            after(2000.0 + REALARM - 1.0)
        )),
        []
    );
    assert_eq!(
        kinds(happen(&mut desk, &Act::Tick, 7, after(2000.0 + REALARM))),
        [T::Realarmed]
    );
    assert_eq!(state_of(&desk, &alarm), S::Unacknowledged);
}

#[test]
fn shelving_is_bounded_and_needs_a_reason() {
    let mut desk = Desk::new(settings());
    let start = Stamp(1_900_000_000_000_000);
    happen(&mut desk, &Act::Value("a", 20.0), 1, start);
    let shelve = |seconds: f64| CommandKind::Shelve {
        alarm: AlarmId(PLAIN.into()),
        occurrence: 1,
        until: Stamp::from_seconds(start.seconds() + seconds),
    };
    let mut told =
        |kind: CommandKind, says: bool| match happen(&mut desk, &Act::Person(kind, says), 2, start)
            .reply
        {
            Some(Reply::Refused { why }) => why,
            Some(Reply::Done { text }) => text,
            other => panic!("{other:?}"),
        };
    assert!(told(shelve(600.0), false).contains("a note is due"));
    assert!(told(shelve(-1.0), true).contains("is over"));
    assert!(told(shelve(SHELF + 1.0), true).contains("at most 24 h"));
    assert!(told(shelve(SHELF), true).contains("is shelved until"));
}
