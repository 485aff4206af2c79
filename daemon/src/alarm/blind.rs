//! Alarms for what cannot be judged: one gauge, one channel, a whole source, the whole site.
//!
//! What is blind together is told once: a source whose channels are all silent, a site whose gauges are all blind.
//! Such a group keeps single alarms from being raised; those that stand already stay until their own cause is gone.

use std::collections::{BTreeMap, BTreeSet};

use serde::{Deserialize, Serialize};

use super::book::{Book, Matter, When, alarm_id};
use super::life::Event;
use super::settings::{AlarmSettings, ChannelWatch};
use super::watch::block_end;
use super::words;
use crate::record::{
    AlarmId, AlarmKind, Blind, ChannelId, SourceName, Stamp, Step, Transition, TransitionKind,
};

/// What is remembered of sight.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub(super) struct BlindState {
    /// Gauges, by order in the ground.
    gauges: Vec<Sight>,
    /// Newest block whose sight was taken.
    latest: Option<i64>,
    /// Why the watch judges nothing at all.
    why: Option<String>,
    /// Newest usable sample of each channel watched.
    newest: BTreeMap<ChannelId, Stamp>,
    /// Channels silent for longer than they may be.
    silent: BTreeSet<ChannelId>,
    /// When this run of the daemon started: silence while it was down does not count.
    started: Option<Stamp>,
}

/// Whether the watch can judge a gauge.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
struct Sight {
    /// Why it has been blind for the whole delay.
    blind: Option<Blind>,
    /// Since when the blocks speak otherwise than `blind`.
    turning: Option<Stamp>,
    /// Since when it is blind.
    since: Stamp,
}

/// One thing that may be blind.
struct Target {
    id: AlarmId,
    /// Whether it is blind; without that its alarm returns.
    blind: bool,
    /// Whether a group speaks for it, so that it is not raised.
    covered: bool,
    since: Stamp,
    summary: String,
}

impl BlindState {
    /// Takes the sight of one judged block. Older blocks, judged again, change nothing.
    pub(super) fn judged(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        step: &Step,
        recorded: Stamp,
    ) -> Vec<Transition> {
        if self.latest.is_some_and(|latest| step.block < latest) {
            return Vec::new();
        }
        self.latest = Some(step.block);
        let end = block_end(step.block, settings.block);
        let start = block_end(step.block.saturating_sub(1), settings.block);
        let gauges = settings.names.gauges.len();
        self.gauges.resize_with(gauges, Sight::default);
        for (sight, now) in self.gauges.iter_mut().zip(&step.blind) {
            sight.look(*now, start, end, settings.blind.delay);
        }
        self.review(book, settings, When { at: end, recorded })
    }

    /// The watch gave up, with the reason; or sees again.
    pub(super) fn watch(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        why: Option<&str>,
        recorded: Stamp,
    ) -> Vec<Transition> {
        self.why = why.map(str::to_owned);
        let when = When {
            at: recorded,
            recorded,
        };
        self.review(book, settings, when)
    }

    /// Why the watch judges nothing at all.
    pub(super) fn why(&self) -> Option<&str> {
        self.why.as_deref()
    }

    /// A usable sample of a watched channel was committed.
    pub(super) fn sampled(&mut self, channel: &ChannelId, at: Stamp) {
        match self.newest.get_mut(channel) {
            Some(newest) => *newest = at.max(*newest),
            None => {
                self.newest.insert(channel.clone(), at);
            }
        }
    }

    /// Silent channels may have spoken in the batch just taken.
    pub(super) fn spoken(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        recorded: Stamp,
    ) -> Vec<Transition> {
        if self.silent.is_empty() {
            return Vec::new();
        }
        self.tick(book, settings, recorded)
    }

    /// The daemon started.
    pub(super) fn start(&mut self, wall: Stamp) {
        self.started = Some(wall);
    }

    /// The wall clock passed an instant.
    pub(super) fn tick(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        wall: Stamp,
    ) -> Vec<Transition> {
        let mut silent = BTreeSet::new();
        for watched in &settings.channels {
            // Before anything was heard, silence counts from the start of the daemon.
            let heard = self.newest.get(&watched.channel).copied();
            let Some(from) = heard.max(self.started) else {
                continue;
            };
            let since_heard = heard.map_or(f64::INFINITY, |h| wall.seconds() - h.seconds());
            let quiet = wall.seconds() - from.seconds() > watched.silence;
            let still = self.silent.contains(&watched.channel) && since_heard > watched.silence;
            if quiet || still {
                silent.insert(watched.channel.clone());
            }
        }
        if silent == self.silent {
            return Vec::new();
        }
        self.silent = silent;
        let when = When {
            at: wall,
            recorded: wall,
        };
        self.review(book, settings, when)
    }

    /// Raises and returns what the present sight asks for.
    fn review(&self, book: &mut Book, settings: &AlarmSettings, when: When) -> Vec<Transition> {
        let mut transitions = Vec::new();
        for target in self.targets(settings, when.at) {
            let present = book.present(&target.id);
            if target.blind && !present && !target.covered {
                let matter = Matter {
                    id: target.id,
                    kind: AlarmKind::Blind,
                    latching: false,
                    priority: settings.blind.priority,
                    since: target.since,
                    summary: target.summary,
                    response: settings.blind.response.clone(),
                    finding: None,
                };
                transitions.extend(book.raise(matter, when, ""));
            } else if !target.blind && present {
                transitions.extend(book.moved(
                    &target.id,
                    &Event::Absent,
                    TransitionKind::Returned,
                    when,
                    "",
                ));
            } else if target.blind && present {
                let stale = book
                    .get_mut(&target.id)
                    .filter(|alarm| alarm.summary != target.summary);
                if let Some(alarm) = stale {
                    alarm.summary = target.summary;
                    transitions.extend(book.told(&target.id, TransitionKind::Updated, when, ""));
                }
            }
        }
        transitions
    }

    /// Everything that may be blind, groups first.
    fn targets(&self, settings: &AlarmSettings, now: Stamp) -> Vec<Target> {
        let mut targets = Vec::new();
        let names = &settings.names;
        let unseen = |i: usize| self.gauges.get(i).and_then(|s| s.blind);
        let silent = |i: usize| {
            settings
                .channels
                .iter()
                .find(|c| c.gauge == Some(i) && self.silent.contains(&c.channel))
        };
        let count = names.gauges.len();
        let all = count > 1 && (0..count).all(|i| unseen(i).is_some() || silent(i).is_some());
        let site = self.why.is_some() || all;
        targets.push(Target {
            id: site_id(),
            blind: site,
            covered: false,
            since: now,
            summary: self.site_summary(),
        });

        let mut lost: BTreeSet<&SourceName> = BTreeSet::new();
        for (source, channels) in by_source(settings) {
            let quiet =
                channels.len() > 1 && channels.iter().all(|c| self.silent.contains(&c.channel));
            if quiet {
                lost.insert(source);
            }
            let newest = channels
                .iter()
                .filter_map(|c| self.newest.get(&c.channel))
                .max();
            targets.push(Target {
                id: source_id(source),
                blind: quiet,
                covered: false,
                since: newest.copied().unwrap_or(now),
                summary: format!(
                    "source {source} is silent: none of its {} channels gave anything usable{}",
                    channels.len(),
                    since(newest)
                ),
            });
        }

        for (i, name) in names.gauges.iter().enumerate() {
            let mute = silent(i);
            let sight = self.gauges.get(i);
            let covered = match mute {
                Some(channel) => all || lost.contains(&channel.source),
                None => site,
            };
            let (from, reason) = match (unseen(i), mute) {
                (Some(blind), _) => (sight.map_or(now, |s| s.since), reason(blind).to_owned()),
                (None, Some(channel)) => {
                    let newest = self.newest.get(&channel.channel);
                    (
                        newest.copied().unwrap_or(now),
                        format!("nothing usable came{}", since(newest)),
                    )
                }
                (None, None) => (now, String::new()),
            };
            targets.push(Target {
                id: gauge_id(name),
                blind: unseen(i).is_some() || mute.is_some(),
                covered,
                since: from,
                summary: format!("{name} cannot be judged: {reason}"),
            });
        }

        for watched in settings.channels.iter().filter(|c| c.gauge.is_none()) {
            let newest = self.newest.get(&watched.channel);
            targets.push(Target {
                id: channel_id(&watched.channel),
                blind: self.silent.contains(&watched.channel),
                covered: lost.contains(&watched.source),
                since: newest.copied().unwrap_or(now),
                summary: format!(
                    "channel {} is silent: nothing usable came{}",
                    watched.channel,
                    since(newest)
                ),
            });
        }
        targets
    }

    fn site_summary(&self) -> String {
        match &self.why {
            Some(why) => format!("no gauge can be judged: {why}"),
            None => "no gauge can be judged: all are blind".to_owned(),
        }
    }

    /// Names of the alarms that can still be raised under the settings.
    pub(super) fn known(settings: &AlarmSettings) -> BTreeSet<AlarmId> {
        let mut known = BTreeSet::from([site_id()]);
        known.extend(by_source(settings).keys().map(|s| source_id(s)));
        known.extend(settings.names.gauges.iter().map(|g| gauge_id(g)));
        known.extend(settings.channels.iter().map(|c| channel_id(&c.channel)));
        known
    }
}

impl Sight {
    /// Takes one block: blind or not must hold for the whole delay before it counts.
    fn look(&mut self, now: Option<Blind>, start: Stamp, end: Stamp, delay: f64) {
        if now.is_some() == self.blind.is_some() {
            self.turning = None;
            self.blind = now;
            return;
        }
        let turning = *self.turning.get_or_insert(start);
        if end.seconds() - turning.seconds() >= delay {
            self.blind = now;
            self.since = turning;
            self.turning = None;
        }
    }
}

fn site_id() -> AlarmId {
    AlarmId("blind-site".to_owned())
}

fn source_id(source: &SourceName) -> AlarmId {
    alarm_id("silent-source", &source.0)
}

/// `blind-O-2`; a gauge called `site` must not take the whole site's name.
fn gauge_id(gauge: &str) -> AlarmId {
    if gauge == "site" {
        alarm_id("blind-gauge", gauge)
    } else {
        alarm_id("blind", gauge)
    }
}

fn channel_id(channel: &ChannelId) -> AlarmId {
    alarm_id("silent-channel", &channel.0)
}

fn by_source(settings: &AlarmSettings) -> BTreeMap<&SourceName, Vec<&ChannelWatch>> {
    let mut sources: BTreeMap<&SourceName, Vec<&ChannelWatch>> = BTreeMap::new();
    for watched in &settings.channels {
        sources.entry(&watched.source).or_default().push(watched);
    }
    sources
}

fn since(newest: Option<&Stamp>) -> String {
    newest.map_or_else(
        || " since the daemon started".to_owned(),
        |at| format!(" since {}", words::minute(*at)),
    )
}

fn reason(blind: Blind) -> &'static str {
    match blind {
        Blind::NoData => "nothing usable was read",
        Blind::StaleRate => "the rate or the level it answers to is too old",
        Blind::NoGround => "there is no usable ground file; run `borewake commission`",
        Blind::Model => "it is beyond what commissioning has seen",
    }
}

#[cfg(test)]
mod tests;
