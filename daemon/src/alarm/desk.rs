//! The desk: journal entries in, transitions and replies out.

mod person;

use std::collections::{BTreeMap, BTreeSet, HashMap};

use serde::{Deserialize, Serialize};
use thiserror::Error;

use super::blind::BlindState;
use super::book::{Book, Matter, When};
use super::life::Event;
use super::limit::{LimitState, Verdict};
use super::settings::{AlarmSettings, LimitSettings, Side};
use super::watch::{WatchState, watch_id};
use super::words;
use crate::record::{
    Alarm, AlarmId, AlarmKind, AlarmView, ChannelId, Condition, Entry, EntryKind, Reading, Reply,
    Stamp, Step, Transition, TransitionKind,
};

/// Version of [`Desk::save`]'s form.
const FORM: u32 = 1;

/// Why a saved desk cannot be used.
#[derive(Debug, Error)]
pub enum DeskError {
    /// The bytes are no saved desk.
    #[error("the saved state of the alarms cannot be read: {0}")]
    Unreadable(#[from] serde_json::Error),
    /// Another version of the program saved it.
    #[error("the saved state of the alarms has form {found}; this program reads form {FORM}")]
    Form {
        /// The form found.
        found: u32,
    },
}

/// What an entry of the journal brought about.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Outcome {
    /// Transitions, in order.
    pub transitions: Vec<Transition>,
    /// The answer, where a person asked.
    pub reply: Option<Reply>,
}

/// The alarm table as a pure function of the journal.
#[derive(Debug)]
pub struct Desk {
    settings: AlarmSettings,
    state: State,
    /// What each channel is judged by; only looked up, never walked.
    uses: HashMap<ChannelId, Use>,
}

/// What a channel is used for.
#[derive(Debug, Default)]
struct Use {
    limits: Vec<usize>,
    watched: bool,
}

/// All that is remembered.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
struct State {
    form: u32,
    book: Book,
    limits: BTreeMap<AlarmId, Held>,
    watch: WatchState,
    blind: BlindState,
}

/// A limit's timers, and the limit they belong to.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
struct Held {
    above: bool,
    value: f64,
    state: LimitState,
}

impl Held {
    fn new(limit: &LimitSettings) -> Self {
        Self {
            above: limit.side == Side::Above,
            value: limit.value,
            state: LimitState::default(),
        }
    }
}

impl Desk {
    /// A desk to which nothing has happened yet.
    #[must_use]
    pub fn new(settings: AlarmSettings) -> Self {
        let state = State {
            form: FORM,
            book: Book::default(),
            limits: BTreeMap::new(),
            watch: WatchState::default(),
            blind: BlindState::default(),
        };
        Self::with(settings, state)
    }

    /// A desk as it was saved. Settings may have changed since: limits keep their timers by name, those whose number
    /// or side changed start counting anew, and [`Desk::start`] returns alarms the settings no longer know.
    ///
    /// # Errors
    /// The bytes are no saved desk of this form.
    pub fn restore(settings: AlarmSettings, saved: &[u8]) -> Result<Self, DeskError> {
        #[derive(Deserialize)]
        struct Form {
            form: u32,
        }
        let Form { form } = serde_json::from_slice(saved)?;
        if form != FORM {
            return Err(DeskError::Form { found: form });
        }
        Ok(Self::with(settings, serde_json::from_slice(saved)?))
    }

    fn with(settings: AlarmSettings, mut state: State) -> Self {
        let mut uses: HashMap<ChannelId, Use> = HashMap::new();
        for (i, limit) in settings.limits.iter().enumerate() {
            uses.entry(limit.channel.clone())
                .or_default()
                .limits
                .push(i);
            let held = state
                .limits
                .entry(limit.id.clone())
                .or_insert_with(|| Held::new(limit));
            let fresh = Held::new(limit);
            if held.above != fresh.above || held.value.to_bits() != fresh.value.to_bits() {
                held.above = fresh.above;
                held.value = fresh.value;
                held.state.restart();
            }
        }
        for watched in &settings.channels {
            uses.entry(watched.channel.clone()).or_default().watched = true;
        }
        let known: BTreeSet<&AlarmId> = settings.limits.iter().map(|l| &l.id).collect();
        state.limits.retain(|id, _| known.contains(id));
        Self {
            settings,
            state,
            uses,
        }
    }

    /// The whole state as JSON text; [`Desk::restore`] reads it. Equal states give equal bytes.
    #[must_use]
    pub fn save(&self) -> Vec<u8> {
        // Only text keys and finite numbers are held, so that writing cannot fail.
        serde_json::to_vec(&self.state).unwrap_or_default()
    }

    /// The settings in force.
    #[must_use]
    pub fn settings(&self) -> &AlarmSettings {
        &self.settings
    }

    /// All alarms that ever came, by name.
    pub fn alarms(&self) -> impl Iterator<Item = &Alarm> {
        self.state.book.alarms()
    }

    /// Alarms for a snapshot: those that are not normal, and those that moved since the instant given.
    #[must_use]
    pub fn views(&self, since: Stamp) -> Vec<AlarmView> {
        self.state.book.views(since)
    }

    /// Why the watch judges nothing at all, where the journal says so.
    #[must_use]
    pub fn watch_blind_because(&self) -> Option<&str> {
        self.state.blind.why()
    }

    /// Takes one entry of the journal; `readings` are those committed under a `Batch` entry's number.
    pub fn entry(&mut self, entry: &Entry, readings: &[Reading]) -> Outcome {
        let mut outcome = Outcome::default();
        outcome.transitions = match &entry.kind {
            EntryKind::Start { .. } => self.start(entry.wall),
            EntryKind::Batch { .. } => self.batch(readings, entry.wall),
            EntryKind::BlockClosed { .. } => Vec::new(),
            EntryKind::Judged { step, rerun } => self.judged(step, rerun.as_deref(), entry.wall),
            EntryKind::WatchBlind { why, .. } => self.watch_blind(Some(why), entry.wall),
            EntryKind::WatchSees => self.watch_blind(None, entry.wall),
            EntryKind::Tick => self.tick(entry.wall),
            EntryKind::Person { command } => {
                let (transitions, reply) = self.person(command, entry.wall);
                outcome.reply = Some(reply);
                transitions
            }
        };
        outcome
    }

    /// The daemon started: silence while it was down does not count, and alarms that the settings no longer know
    /// return.
    pub fn start(&mut self, wall: Stamp) -> Vec<Transition> {
        self.state.blind.start(wall);
        let mut known = BlindState::known(&self.settings);
        known.insert(watch_id());
        known.extend(self.settings.limits.iter().map(|l| l.id.clone()));
        let gone: Vec<AlarmId> = self
            .alarms()
            .filter(|a| a.condition == Condition::Present && !known.contains(&a.id))
            .map(|a| a.id.clone())
            .collect();
        let when = When {
            at: wall,
            recorded: wall,
        };
        gone.iter()
            .flat_map(|id| {
                self.state.book.moved(
                    id,
                    &Event::Absent,
                    TransitionKind::Returned,
                    when,
                    "the site file no longer asks for it",
                )
            })
            .collect()
    }

    /// Judges committed readings against the limits, in order of sample time whatever order they came in.
    ///
    /// Only usable, finite values count. A sample that lies in the future of its recording is passed over: it would
    /// make all true ones look late.
    pub fn batch(&mut self, readings: &[Reading], recorded: Stamp) -> Vec<Transition> {
        let horizon = recorded.seconds() + self.settings.future;
        let mut usable: Vec<(&Reading, f64, &Use)> = readings
            .iter()
            .filter(|r| r.quality.usable() && r.sampled.seconds() <= horizon)
            .filter_map(|r| {
                let value = r.value.filter(|v| v.is_finite())?;
                Some((r, value, self.uses.get(&r.channel)?))
            })
            .collect();
        usable.sort_by(|(a, ..), (b, ..)| {
            (a.sampled, &a.channel, a.epoch).cmp(&(b.sampled, &b.channel, b.epoch))
        });
        let mut transitions = Vec::new();
        let mut spoke = false;
        for (reading, value, used) in usable {
            if used.watched {
                self.state.blind.sampled(&reading.channel, reading.sampled);
                spoke = true;
            }
            for limit in used
                .limits
                .iter()
                .filter_map(|&i| self.settings.limits.get(i))
            {
                let when = When {
                    at: reading.sampled,
                    recorded,
                };
                transitions.extend(self.state.limit(&self.settings, limit, value, when));
            }
        }
        if spoke {
            transitions.extend(self.state.blind.spoken(
                &mut self.state.book,
                &self.settings,
                recorded,
            ));
        }
        transitions
    }

    /// Takes what the watch said of a block; `rerun` is why the block was judged again, where it was.
    pub fn judged(&mut self, step: &Step, rerun: Option<&str>, recorded: Stamp) -> Vec<Transition> {
        let State {
            book, watch, blind, ..
        } = &mut self.state;
        let mut transitions = watch.judged(book, &self.settings, step, rerun, recorded);
        transitions.extend(blind.judged(book, &self.settings, step, recorded));
        transitions
    }

    /// The watch judges nothing, for the reason given; or can judge again.
    pub fn watch_blind(&mut self, why: Option<&str>, recorded: Stamp) -> Vec<Transition> {
        let State { book, blind, .. } = &mut self.state;
        blind.watch(book, &self.settings, why, recorded)
    }

    /// The wall clock passed an instant: channels that gave nothing for too long are told, shelved alarms come back, and
    /// those that nobody has seen for too long are told again.
    pub fn tick(&mut self, wall: Stamp) -> Vec<Transition> {
        let State { book, blind, .. } = &mut self.state;
        let mut transitions = blind.tick(book, &self.settings, wall);
        transitions.extend(book.tick(&self.settings.care, wall));
        transitions
    }
}

impl State {
    /// Holds one value against one limit.
    fn limit(
        &mut self,
        settings: &AlarmSettings,
        limit: &LimitSettings,
        value: f64,
        when: When,
    ) -> Vec<Transition> {
        let Some(held) = self.limits.get_mut(&limit.id) else {
            return Vec::new();
        };
        let present = self.book.present(&limit.id);
        let units = settings.names.units;
        let show = |v| words::value(limit.kind, v, units);
        let side = match limit.side {
            Side::Above => "above",
            Side::Below => "below",
        };
        match held.state.judge(limit, present, when.at, value) {
            Verdict::Same => Vec::new(),
            Verdict::Beyond { since } => {
                let set_by: Vec<&str> = limit
                    .practice
                    .as_deref()
                    .into_iter()
                    .chain(Some(limit.author.as_str()).filter(|a| !a.is_empty()))
                    .collect();
                let set_by = if set_by.is_empty() {
                    String::new()
                } else {
                    format!(" ({})", set_by.join(", "))
                };
                let matter = Matter {
                    id: limit.id.clone(),
                    kind: AlarmKind::Limit,
                    latching: limit.latching,
                    priority: limit.priority,
                    since,
                    summary: format!(
                        "{} is {}, {side} {}{set_by}, since {}",
                        limit.of,
                        show(value),
                        show(limit.value),
                        words::minute(since)
                    ),
                    response: limit.response.clone(),
                    finding: None,
                };
                self.book.raise(matter, when, "")
            }
            Verdict::Back { peak } => {
                let note = format!("back at {}; it was {} at worst", show(value), show(peak));
                self.book.moved(
                    &limit.id,
                    &Event::Absent,
                    TransitionKind::Returned,
                    when,
                    &note,
                )
            }
        }
    }
}

#[cfg(test)]
mod tests;

#[cfg(test)]
mod care_tests;
