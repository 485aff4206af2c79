//! The book of alarms: every alarm that ever came, as it stands, and the one way to move one.

use std::collections::BTreeMap;

use serde::{Deserialize, Serialize};

use super::life::{Event, Life, Refusal, step};
use crate::record::{
    Alarm, AlarmId, AlarmKind, AlarmState, AlarmView, Condition, Finding, Priority, Stamp,
    Transition, TransitionKind,
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
            step(&Life::of(&page.alarm), event)?.apply(&mut page.alarm);
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
