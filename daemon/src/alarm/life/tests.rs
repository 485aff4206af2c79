//! The table of transitions, written out state by state and held against [`step`].

use proptest::prelude::*;

use super::*;
use crate::record::{AlarmId, AlarmKind, AlarmState, Priority};

use AlarmState as S;

const UNTIL: Stamp = Stamp(1_000_000);

fn state(life: &Life) -> AlarmState {
    let mut alarm = Alarm {
        id: AlarmId("a".into()),
        kind: AlarmKind::Limit,
        occurrence: 0,
        sequence: 0,
        condition: Condition::Absent,
        acknowledgement: Acknowledgement::Acknowledged,
        latch: Latch::None,
        suppression: Suppression::None,
        priority: Priority::Low,
        since: Stamp(0),
        summary: String::new(),
        response: String::new(),
        finding: None,
    };
    life.clone().apply(&mut alarm);
    alarm.state()
}

fn events() -> Vec<Event> {
    vec![
        Event::Present,
        Event::Absent,
        Event::Changed,
        Event::Realarm,
        Event::Acknowledge,
        Event::Reset,
        Event::Adopt,
        Event::Shelve { until: UNTIL },
        Event::Suppress { rule: "r".into() },
        Event::TakeOut,
        Event::Release,
    ]
}

/// Every life that events can lead to, latching or not.
fn reachable(latching: bool) -> Vec<Life> {
    let mut found = vec![Life::new(latching)];
    let mut next = 0;
    while next < found.len() {
        for event in events() {
            if let Ok(mut life) = step(&found[next].clone(), &event) {
                life.occurrence = 0;
                if !found.contains(&life) {
                    found.push(life);
                }
            }
        }
        next += 1;
    }
    found
}

/// The table for alarms in plain sight: state, event, state after (`None` where it is refused).
fn table(latching: bool) -> Vec<(S, Event, Option<S>)> {
    use Event::{Absent, Acknowledge, Adopt, Changed, Present, Realarm, Release, Reset};
    let gone_unseen = if latching {
        S::LatchedUnacknowledged
    } else {
        S::ReturnedUnacknowledged
    };
    let gone_seen = if latching {
        S::LatchedAcknowledged
    } else {
        S::Normal
    };
    let mut rows = vec![
        (S::Normal, Present, Some(S::Unacknowledged)),
        (S::Normal, Absent, Some(S::Normal)),
        (S::Normal, Changed, Some(S::Normal)),
        (S::Normal, Realarm, Some(S::Normal)),
        (S::Normal, Acknowledge, None),
        (S::Normal, Reset, None),
        (S::Normal, Adopt, None),
        (S::Unacknowledged, Present, Some(S::Unacknowledged)),
        (S::Unacknowledged, Absent, Some(gone_unseen)),
        (S::Unacknowledged, Changed, Some(S::Unacknowledged)),
        (S::Unacknowledged, Realarm, Some(S::Unacknowledged)),
        (S::Unacknowledged, Acknowledge, Some(S::Acknowledged)),
        (S::Unacknowledged, Reset, None),
        (S::Unacknowledged, Adopt, Some(S::Normal)),
        (S::Acknowledged, Present, Some(S::Acknowledged)),
        (S::Acknowledged, Absent, Some(gone_seen)),
        (S::Acknowledged, Changed, Some(S::Unacknowledged)),
        (S::Acknowledged, Realarm, Some(S::Unacknowledged)),
        (S::Acknowledged, Acknowledge, None),
        (S::Acknowledged, Reset, None),
        (S::Acknowledged, Adopt, Some(S::Normal)),
    ];
    if latching {
        rows.extend([
            (S::LatchedUnacknowledged, Present, Some(S::Unacknowledged)),
            (
                S::LatchedUnacknowledged,
                Absent,
                Some(S::LatchedUnacknowledged),
            ),
            (
                S::LatchedUnacknowledged,
                Changed,
                Some(S::LatchedUnacknowledged),
            ),
            (
                S::LatchedUnacknowledged,
                Realarm,
                Some(S::LatchedUnacknowledged),
            ),
            (
                S::LatchedUnacknowledged,
                Acknowledge,
                Some(S::LatchedAcknowledged),
            ),
            (S::LatchedUnacknowledged, Reset, None),
            (S::LatchedUnacknowledged, Adopt, None),
            (S::LatchedAcknowledged, Present, Some(S::Unacknowledged)),
            (S::LatchedAcknowledged, Absent, Some(S::LatchedAcknowledged)),
            (
                S::LatchedAcknowledged,
                Changed,
                Some(S::LatchedAcknowledged),
            ),
            (
                S::LatchedAcknowledged,
                Realarm,
                Some(S::LatchedAcknowledged),
            ),
            (S::LatchedAcknowledged, Acknowledge, None),
            (S::LatchedAcknowledged, Reset, Some(S::Normal)),
            (S::LatchedAcknowledged, Adopt, None),
        ]);
    } else {
        rows.extend([
            (S::ReturnedUnacknowledged, Present, Some(S::Unacknowledged)),
            (
                S::ReturnedUnacknowledged,
                Absent,
                Some(S::ReturnedUnacknowledged),
            ),
            (
                S::ReturnedUnacknowledged,
                Changed,
                Some(S::ReturnedUnacknowledged),
            ),
            (
                S::ReturnedUnacknowledged,
                Realarm,
                Some(S::ReturnedUnacknowledged),
            ),
            (S::ReturnedUnacknowledged, Acknowledge, Some(S::Normal)),
            (S::ReturnedUnacknowledged, Reset, None),
            (S::ReturnedUnacknowledged, Adopt, None),
        ]);
    }
    let plain: Vec<S> = if latching {
        vec![
            S::Normal,
            S::Unacknowledged,
            S::Acknowledged,
            S::LatchedUnacknowledged,
            S::LatchedAcknowledged,
        ]
    } else {
        vec![
            S::Normal,
            S::Unacknowledged,
            S::Acknowledged,
            S::ReturnedUnacknowledged,
        ]
    };
    for s in plain {
        rows.push((s, Event::Shelve { until: UNTIL }, Some(S::Shelved)));
        rows.push((s, Event::Suppress { rule: "r".into() }, Some(S::Suppressed)));
        rows.push((s, Event::TakeOut, Some(S::OutOfService)));
        rows.push((s, Release, Some(s)));
    }
    rows
}

#[test]
fn plain_states_follow_the_table() {
    for latching in [false, true] {
        let table = table(latching);
        let mut used = vec![false; table.len()];
        for life in reachable(latching) {
            let from = state(&life);
            if matches!(from, S::Shelved | S::Suppressed | S::OutOfService) {
                continue;
            }
            for event in events() {
                let row = table
                    .iter()
                    .position(|(s, e, _)| *s == from && *e == event)
                    .unwrap_or_else(|| panic!("no row for {from:?} {event:?}"));
                used[row] = true;
                let after = step(&life, &event).ok().map(|l| state(&l));
                assert_eq!(after, table[row].2, "{from:?} {event:?}");
            }
        }
        assert!(used.iter().all(|u| *u), "rows that no life reaches");
    }
}

#[test]
fn held_back_states_follow_the_table() {
    let held = [S::Shelved, S::Suppressed, S::OutOfService];
    let mut checked = 0;
    for latching in [false, true] {
        for life in reachable(latching) {
            let from = state(&life);
            if !held.contains(&from) {
                continue;
            }
            for event in events() {
                let after = step(&life, &event).map(|l| state(&l));
                let due = match event {
                    Event::Acknowledge | Event::Reset | Event::Adopt => Err(Refusal::HeldBack),
                    Event::Shelve { .. } => Ok(S::Shelved),
                    Event::Suppress { .. } => Ok(S::Suppressed),
                    Event::TakeOut => Ok(S::OutOfService),
                    Event::Release if life.condition == Condition::Present => Ok(S::Unacknowledged),
                    Event::Release => Ok(S::Normal),
                    _ => Ok(from),
                };
                assert_eq!(after, due, "{life:?} {event:?}");
                checked += 1;
            }
        }
    }
    assert!(checked > 100);
}

#[test]
fn refusals_say_why() {
    let new = Life::new(true);
    assert_eq!(step(&new, &Event::Acknowledge), Err(Refusal::Normal));
    assert_eq!(step(&new, &Event::Reset), Err(Refusal::Normal));
    let on = step(&new, &Event::Present).unwrap();
    assert_eq!(step(&on, &Event::Reset), Err(Refusal::StillPresent));
    let off = step(&on, &Event::Absent).unwrap();
    assert_eq!(step(&off, &Event::Reset), Err(Refusal::NotAcknowledged));
    let seen = step(&off, &Event::Acknowledge).unwrap();
    assert_eq!(
        step(&seen, &Event::Acknowledge),
        Err(Refusal::AlreadyAcknowledged)
    );
    assert_eq!(
        step(&Life::new(false), &Event::Reset),
        Err(Refusal::NotLatched)
    );
}

fn any_event() -> impl Strategy<Value = Event> {
    prop::sample::select(events())
}

proptest! {
    #[test]
    fn whatever_happens_the_promises_hold(latching: bool, story in prop::collection::vec(any_event(), 0..60)) {
        let mut life = Life::new(latching);
        for event in story {
            let from = state(&life);
            let Ok(next) = step(&life, &event) else { continue };
            let to = state(&next);
            prop_assert!(next.occurrence >= life.occurrence);
            prop_assert!(next.occurrence - life.occurrence <= 1);
            // A new occurrence exactly when the condition comes.
            prop_assert_eq!(
                next.occurrence > life.occurrence,
                life.condition == Condition::Absent && next.condition == Condition::Present
            );
            // Only a person's acknowledgement makes an alarm acknowledged, and only from plain sight.
            if to == S::Acknowledged && from != S::Acknowledged {
                prop_assert_eq!(event.clone(), Event::Acknowledge);
                prop_assert_eq!(from, S::Unacknowledged);
            }
            if matches!(from, S::Shelved | S::Suppressed | S::OutOfService) {
                prop_assert!(to != S::Acknowledged && to != S::LatchedAcknowledged);
            }
            // A condition that is present is never called normal or returned.
            if next.condition == Condition::Present {
                prop_assert!(!matches!(
                    to,
                    S::Normal | S::ReturnedUnacknowledged | S::LatchedUnacknowledged | S::LatchedAcknowledged
                ));
            }
            life = next;
        }
    }
}
