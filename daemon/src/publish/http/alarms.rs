//! Alarms, their history, and what people may do to them.

use std::sync::Arc;

use axum::body::Bytes;
use axum::extract::{Path, Query, State};
use axum::{Extension, Json};
use serde::{Deserialize, Serialize};
use serde_json::{Value, json};

use super::asking::Asking;
use super::guard::Who;
use super::problem::Problem;
use crate::control::tokens::Scope;
use crate::publish::events::AlarmData;
use crate::record::{
    Acknowledgement, Alarm, AlarmId, AlarmState, Command, CommandKind, Condition, Latch, Names,
    Stamp, Suppression, Transition,
};

/// Steps of history given where no number is asked for, and the most.
const STEPS: i64 = 100;
const MOST_STEPS: i64 = 1000;
/// Longest note of a person \[characters\].
const LONGEST_NOTE: usize = 2000;

/// An alarm as it stands.
#[derive(Debug, Serialize)]
struct Standing<'a> {
    #[serde(flatten)]
    data: AlarmData<'a>,
    condition: Condition,
    acknowledgement: Acknowledgement,
    latch: Latch,
    suppression: &'a Suppression,
}

/// One step in the life of an alarm.
#[derive(Debug, Serialize)]
struct Moved<'a> {
    number: i64,
    at: Stamp,
    recorded: Stamp,
    #[serde(flatten)]
    data: AlarmData<'a>,
}

fn standing<'a>(alarm: &'a Alarm, names: &Names) -> Standing<'a> {
    Standing {
        data: AlarmData::standing(alarm, names),
        condition: alarm.condition,
        acknowledgement: alarm.acknowledgement,
        latch: alarm.latch,
        suppression: &alarm.suppression,
    }
}

fn moved<'a>(steps: &'a [(i64, Transition)], names: &Names) -> Vec<Moved<'a>> {
    let moved = |(number, t): &'a (i64, Transition)| Moved {
        number: *number,
        at: t.at,
        recorded: t.recorded,
        data: AlarmData::moved(t, names),
    };
    steps.iter().map(moved).collect()
}

/// Alarms to be shown: all, or those that are not normal and those that lately were.
pub(super) async fn list(State(asking): State<Arc<Asking>>) -> Result<Json<Value>, Problem> {
    let snapshot = asking.look().await;
    let alarms: Vec<_> = snapshot
        .alarms
        .iter()
        .map(|view| standing(&view.alarm, &asking.names))
        .collect();
    let standing = snapshot
        .alarms
        .iter()
        .filter(|view| view.state != AlarmState::Normal)
        .count();
    let last = asking.reader.last_transition().await?;
    Ok(Json(json!({
        "taken": snapshot.taken,
        "last_event": last,
        "standing": standing,
        "alarms": alarms,
    })))
}

/// How much history.
#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Steps {
    limit: Option<i64>,
}

impl Steps {
    fn limit(&self) -> Result<i64, Problem> {
        let limit = self.limit.unwrap_or(STEPS);
        if (1..=MOST_STEPS).contains(&limit) {
            Ok(limit)
        } else {
            Err(Problem::wrong(format!("limit: 1 to {MOST_STEPS}")))
        }
    }
}

/// One alarm as it stands, with its latest steps.
pub(super) async fn one(
    State(asking): State<Arc<Asking>>,
    Path(id): Path<String>,
    Query(steps): Query<Steps>,
) -> Result<Json<Value>, Problem> {
    let id = AlarmId(id);
    let steps = asking
        .reader
        .latest_transitions(Some(&id), steps.limit()?)
        .await?;
    let Some((_, newest)) = steps.first() else {
        return Err(Problem::missing(format!(
            "there is no alarm {id}, or it has never come"
        )));
    };
    Ok(Json(json!({
        "alarm": standing(&newest.alarm, &asking.names),
        "history": moved(&steps, &asking.names),
    })))
}

/// The latest steps of all alarms.
pub(super) async fn history(
    State(asking): State<Arc<Asking>>,
    Query(steps): Query<Steps>,
) -> Result<Json<Value>, Problem> {
    let steps = asking
        .reader
        .latest_transitions(None, steps.limit()?)
        .await?;
    Ok(Json(json!({ "history": moved(&steps, &asking.names) })))
}

/// What a person says beside an act.
#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
struct Said {
    occurrence: u32,
    #[serde(default)]
    note: String,
    /// When a shelved alarm comes back.
    until: Option<Stamp>,
}

/// What can be done to an alarm.
#[derive(Debug, Clone, Copy)]
enum Act {
    Acknowledge,
    Shelve,
    Unshelve,
    Reset,
    TakeOut,
    PutBack,
    Adopt,
}

impl Act {
    const ALL: [(&'static str, Self); 7] = [
        ("acknowledge", Self::Acknowledge),
        ("shelve", Self::Shelve),
        ("unshelve", Self::Unshelve),
        ("reset", Self::Reset),
        ("take-out", Self::TakeOut),
        ("put-back", Self::PutBack),
        ("adopt", Self::Adopt),
    ];

    fn of(name: &str) -> Result<Self, Problem> {
        let known = Self::ALL.iter().find(|(n, _)| *n == name);
        known.map(|(_, act)| *act).ok_or_else(|| {
            let names = Self::ALL.map(|(name, _)| name).join(", ");
            Problem::missing(format!("an alarm knows no act {name}; there is {names}"))
        })
    }

    fn scope(self) -> Scope {
        match self {
            Self::Acknowledge | Self::Shelve | Self::Unshelve | Self::Reset => Scope::Operate,
            Self::TakeOut | Self::PutBack | Self::Adopt => Scope::Admin,
        }
    }

    fn command(self, alarm: AlarmId, said: &Said) -> Result<CommandKind, Problem> {
        let occurrence = said.occurrence;
        Ok(match self {
            Self::Acknowledge => CommandKind::Acknowledge { alarm, occurrence },
            Self::Shelve => {
                let due = "until: an instant is due, such as 2031-05-02T18:00:00Z";
                let until = said.until.ok_or_else(|| Problem::wrong(due))?;
                CommandKind::Shelve {
                    alarm,
                    occurrence,
                    until,
                }
            }
            Self::Unshelve => CommandKind::Unshelve { alarm, occurrence },
            Self::Reset => CommandKind::Reset { alarm, occurrence },
            Self::TakeOut => CommandKind::TakeOut { alarm, occurrence },
            Self::PutBack => CommandKind::PutBack { alarm, occurrence },
            Self::Adopt => CommandKind::Adopt {
                alarm,
                occurrence,
                adoption: None,
            },
        })
    }
}

/// An act on one occurrence of an alarm.
pub(super) async fn act(
    State(asking): State<Arc<Asking>>,
    Extension(who): Extension<Who>,
    Path((id, act)): Path<(String, String)>,
    body: Bytes,
) -> Result<Json<Value>, Problem> {
    let act = Act::of(&act)?;
    let by = who.may(act.scope())?.to_owned();
    let said: Said = serde_json::from_slice(&body).map_err(|why| {
        Problem::wrong(format!(
            "{why}; such as {{\"occurrence\": 1, \"note\": \"crew is on its way\"}}"
        ))
    })?;
    if said.note.chars().count() > LONGEST_NOTE {
        return Err(Problem::wrong(format!(
            "note: at most {LONGEST_NOTE} characters"
        )));
    }
    let kind = act.command(AlarmId(id), &said)?;
    let note = said.note;
    let text = asking.change(Command { by, note, kind }).await?;
    Ok(Json(json!({ "done": text })))
}

/// What whoever asks may do.
pub(super) async fn who(Extension(who): Extension<Who>) -> Json<Value> {
    Json(match &who {
        Who::Bearer(bearer) => json!({ "name": bearer.name, "scope": bearer.scope, "reads": true }),
        Who::Local => json!({ "name": null, "scope": null, "reads": true }),
        Who::Stranger => json!({ "name": null, "scope": null, "reads": false }),
    })
}
