//! The book of alarms: every alarm that ever came, as it stands, and the one way to move one.

use std::collections::BTreeMap;

use serde::{Deserialize, Serialize};

use super::life::{Event, Life, Refusal, step};
use super::settings::Care;
use super::words;
use crate::record::{
    Acknowledgement, Alarm, AlarmId, AlarmKind, AlarmState, AlarmView, Condition, Finding,
    Priority, Stamp, Suppression, Transition, TransitionKind,
};

/// When something became so, and when it was written.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct When {
    pub(super) at: Stamp,
    pub(super) recorded: Stamp,
}

/// What an alarm is about, for raising it.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Matter {
    pub(super) id: AlarmId,
    pub(super) kind: AlarmKind,
    pub(super) latching: bool,
    pub(super) priority: Priority,
    pub(super) since: Stamp,
    pub(super) summary: String,
    pub(super) response: String,
    pub(super) finding: Option<Finding>,
}

/// An alarm and when it last moved.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
struct Page {
    alarm: Alarm,
    moved: Stamp,
    /// Wall-clock instant since which it stands as it does: acknowledged or not, held back or not.
    #[serde(default)]
    so_since: Option<Stamp>,
    /// Whether it was escalated since.
    #[serde(default)]
    escalated: bool,
}

/// All alarms by name.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
#[serde(transparent)]
pub(super) struct Book(BTreeMap<AlarmId, Page>);

impl Book {
    pub(super) fn get(&self, id: &AlarmId) -> Option<&Alarm> {
        self.0.get(id).map(|page| &page.alarm)
    }

    pub(super) fn get_mut(&mut self, id: &AlarmId) -> Option<&mut Alarm> {
        self.0.get_mut(id).map(|page| &mut page.alarm)
    }

    pub(super) fn present(&self, id: &AlarmId) -> bool {
        self.get(id)
            .is_some_and(|a| a.condition == Condition::Present)
    }

    pub(super) fn alarms(&self) -> impl Iterator<Item = &Alarm> {
        self.0.values().map(|page| &page.alarm)
    }

    /// Alarms that are not normal, and those that moved since the instant given.
    pub(super) fn views(&self, since: Stamp) -> Vec<AlarmView> {
        self.0
            .values()
            .map(|page| (page.alarm.state(), page))
            .filter(|(state, page)| *state != AlarmState::Normal || page.moved >= since)
            .map(|(state, page)| AlarmView {
                state,
                alarm: page.alarm.clone(),
            })
            .collect()
    }

    /// The condition came: a new occurrence.
    pub(super) fn raise(&mut self, matter: Matter, when: When, note: &str) -> Vec<Transition> {
        let id = matter.id.clone();
        let page = self.0.entry(id.clone()).or_insert_with(|| Page {
            alarm: blank(&matter),
            moved: when.recorded,
            so_since: None,
            escalated: false,
        });
        let alarm = &mut page.alarm;
        alarm.priority = matter.priority;
        alarm.since = matter.since;
        alarm.summary = matter.summary;
        alarm.response = matter.response;
        alarm.finding = matter.finding;
        self.moved(&id, &Event::Present, TransitionKind::Raised, when, note)
    }

    /// Moves an alarm by an event of the machine's own (never refused); nothing where there is no such alarm.
    pub(super) fn moved(
        &mut self,
        id: &AlarmId,
        event: &Event,
        kind: TransitionKind,
        when: When,
        note: &str,
    ) -> Vec<Transition> {
        self.act(id, Some(event), kind, when, None, note)
            .map(|t| vec![t])
            .unwrap_or_default()
    }

    /// Tells news of an alarm whose state stays as it is.
    pub(super) fn told(
        &mut self,
        id: &AlarmId,
        kind: TransitionKind,
        when: When,
        note: &str,
    ) -> Vec<Transition> {
        self.act(id, None, kind, when, None, note)
            .map(|t| vec![t])
            .unwrap_or_default()
    }

    /// Moves an alarm, counts the transition and gives it.
    ///
    /// # Errors
    /// The life cycle refuses the event, or there is no such alarm ([`Refusal::Normal`]).
    pub(super) fn act(
        &mut self,
        id: &AlarmId,
        event: Option<&Event>,
        kind: TransitionKind,
        when: When,
        by: Option<&str>,
        note: &str,
    ) -> Result<Transition, Refusal> {
        let page = self.0.get_mut(id).ok_or(Refusal::Normal)?;
        if let Some(event) = event {
            let before = Life::of(&page.alarm);
            let after = step(&before, event)?;
            let stands = |life: &Life| {
                let Life {
                    acknowledgement,
                    suppression,
                    occurrence,
                    ..
                } = life.clone();
                (acknowledgement, suppression, occurrence)
            };
            if stands(&before) != stands(&after) {
                page.so_since = Some(when.recorded);
                page.escalated = false;
            }
            after.apply(&mut page.alarm);
        }
        page.alarm.sequence = page.alarm.sequence.saturating_add(1);
        page.moved = when.recorded;
        Ok(Transition {
            alarm: page.alarm.clone(),
            kind,
            at: when.at,
            recorded: when.recorded,
            by: by.map(str::to_owned),
            note: note.to_owned(),
        })
    }
}

/// What the wall clock asks of one alarm.
enum Call {
    /// Its time on the shelf is over.
    Unshelve,
    /// It must be seen again.
    Realarm,
    /// Nobody has seen it in time.
    Escalate,
}

impl Book {
    /// The wall clock passed an instant.
    pub(super) fn tick(&mut self, care: &Care, wall: Stamp) -> Vec<Transition> {
        let due: Vec<(AlarmId, Call)> = self
            .0
            .iter_mut()
            .filter_map(|(id, page)| Some((id.clone(), page.due(care, wall)?)))
            .collect();
        let when = When {
            at: wall,
            recorded: wall,
        };
        due.into_iter()
            .flat_map(|(id, call)| match call {
                Call::Unshelve => {
                    let kind = TransitionKind::Unshelved;
                    self.moved(&id, &Event::Release, kind, when, "its time is over")
                }
                Call::Realarm => {
                    let after = words::duration(care.realarm.unwrap_or_default());
                    let note = format!("it stands {after} after it was acknowledged");
                    self.moved(&id, &Event::Realarm, TransitionKind::Realarmed, when, &note)
                }
                Call::Escalate => {
                    if let Some(page) = self.0.get_mut(&id) {
                        page.escalated = true;
                    }
                    let after = words::duration(care.escalate.unwrap_or_default());
                    let note = format!("nobody acknowledged it within {after}");
                    self.told(&id, TransitionKind::Escalated, when, &note)
                }
            })
            .collect()
    }
}

impl Page {
    fn due(&mut self, care: &Care, wall: Stamp) -> Option<Call> {
        let alarm = &self.alarm;
        // One saved by an older program counts from the first tick.
        let since = *self.so_since.get_or_insert(wall);
        let stood = wall.seconds() - since.seconds();
        match alarm.suppression {
            Suppression::Shelved { until } => return (wall >= until).then_some(Call::Unshelve),
            Suppression::Design { .. } | Suppression::OutOfService => return None,
            Suppression::None => {}
        }
        if alarm.condition == Condition::Absent {
            return None;
        }
        let over = |limit: Option<f64>| limit.is_some_and(|limit| stood >= limit);
        match alarm.acknowledgement {
            Acknowledgement::Acknowledged => over(care.realarm).then_some(Call::Realarm),
            Acknowledgement::Unacknowledged => {
                (!self.escalated && over(care.escalate)).then_some(Call::Escalate)
            }
        }
    }
}

/// An alarm that never came.
fn blank(matter: &Matter) -> Alarm {
    let life = Life::new(matter.latching);
    Alarm {
        id: matter.id.clone(),
        kind: matter.kind,
        occurrence: life.occurrence,
        sequence: 0,
        condition: life.condition,
        acknowledgement: life.acknowledgement,
        latch: life.latch,
        suppression: life.suppression,
        priority: matter.priority,
        since: matter.since,
        summary: String::new(),
        response: String::new(),
        finding: None,
    }
}

/// A name that is safe as a level of a topic, in a file name and on a command line.
pub(super) fn alarm_id(prefix: &str, name: &str) -> AlarmId {
    let safe: String = name
        .chars()
        .map(|c| {
            if c.is_ascii_alphanumeric() || matches!(c, '-' | '_' | '.') {
                c
            } else {
                '_'
            }
        })
        .collect();
    AlarmId(format!("{prefix}-{safe}"))
}
