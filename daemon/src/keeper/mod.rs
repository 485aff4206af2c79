//! Processes the journal in its order: readings to limits and blocks, findings to alarms, people to both.
//!
//! Every entry goes the same way whether it was just written, is read again after a crash, or is replayed:
//! the desk turns it into transitions, and transitions, outgoing messages, the desk's state and the position
//! are committed together. So the alarm table is a function of the journal.

pub mod judge;
mod judging;
pub mod opening;
pub mod play;
pub mod saved;
pub mod settings;
mod view;

use std::sync::Arc;

use thiserror::Error;
use tokio::sync::{mpsc, watch};

use self::judge::{Gone, Judge};
use self::saved::{Due, Saved};
use crate::alarm::{AlarmSettings, Desk};
use crate::publish::events::{self, GaugeNews};
use crate::publish::mqtt::Latest;
use crate::record::{
    AckToken, Adoption, Command, CommandKind, Delivery, Entry, EntryKind, Reading, Reply, Snapshot,
    SourceName, SourceView, Stamp, Step, Transition, TransitionKind,
};
use crate::store::{Applied, Committed, Refused, Store, StoreError};
use crate::watch::blocks::BlockPlan;
use crate::watch::lane::Answer;

/// Entries after which the position is saved even when nothing changed.
const SAVE_EVERY: u32 = 64;
/// Wall-clock time without further late readings after which a re-run starts \[µs\].
const GATHER: i64 = 5 * 60 * Stamp::SECOND;
/// Wall-clock time after which a re-run starts even so: readings that always come late must not put it off for ever \[µs\].
const GATHER_AT_MOST: i64 = 3600 * Stamp::SECOND;
/// Failures at one block after which the watch starts blind beyond it.
const ATTEMPTS: u32 = 3;

/// How the keeper moves through sample time.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Pace {
    /// As it comes: limits never wait for the model.
    Live,
    /// The model is waited for after every batch, so that two runs over one log write one journal.
    Lockstep,
}

/// What the keeper is told about its site.
#[derive(Debug, Clone)]
pub struct KeeperSettings {
    /// How blocks are built.
    pub plan: BlockPlan,
    /// How long a block waits for late readings \[µs\].
    pub lateness: i64,
    /// Limits, names, texts.
    pub alarms: AlarmSettings,
    /// Whether events are marked as replayed.
    pub replay: bool,
    /// Live or lockstep.
    pub pace: Pace,
    /// Command that makes the ground file, for the reason of blindness.
    pub renew: String,
}

/// A transition that is on disk, with its event.
#[derive(Debug, Clone)]
pub struct Happening {
    /// The transition.
    pub transition: Transition,
    /// Its event, one JSON document.
    pub event: String,
}

/// What stops the keeper.
#[derive(Debug, Error)]
pub enum KeeperError {
    /// The store cannot be used.
    #[error(transparent)]
    Store(#[from] StoreError),
    /// The model's thread has ended.
    #[error(transparent)]
    Gone(#[from] Gone),
    /// State saved by another version.
    #[error("saved state cannot be read: {0}")]
    State(String),
    /// The system refuses a thread.
    #[error("the model's thread cannot be started: {0}")]
    Thread(std::io::Error),
}

/// What may be acknowledged to its source.
pub type Acknowledgements = Vec<(SourceName, AckToken)>;

/// Why deliveries were not taken.
#[derive(Debug, Error)]
pub enum Undelivered {
    /// The store refused them; nothing was kept of them.
    #[error(transparent)]
    Refused(#[from] Refused),
    /// They are on disk, and the keeper cannot go on.
    #[error(transparent)]
    Keeper(#[from] KeeperError),
}

/// Processes the journal. One per daemon.
pub struct Keeper {
    settings: KeeperSettings,
    store: Store,
    desk: Desk,
    saved: Saved,
    judge: Option<Judge>,
    answers: mpsc::UnboundedReceiver<Answer>,
    ground_last: i64,
    fingerprint: String,
    position: i64,
    unsaved: u32,
    snapshot: Snapshot,
    shown: watch::Sender<Arc<Snapshot>>,
    latest: watch::Sender<Latest>,
    events: Option<mpsc::UnboundedSender<Happening>>,
}

impl Keeper {
    /// Where the snapshot is shown.
    #[must_use]
    pub fn snapshots(&self) -> watch::Receiver<Arc<Snapshot>> {
        self.shown.subscribe()
    }

    /// Where the latest expectation of every gauge is shown, as topic and payload.
    #[must_use]
    pub fn latest(&self) -> watch::Receiver<Latest> {
        self.latest.subscribe()
    }

    /// Takes in how sources stand.
    pub fn sources(&mut self, views: impl IntoIterator<Item = (String, SourceView)>) {
        self.snapshot.sources.extend(views);
    }

    /// The store, for readers beside the keeper.
    #[must_use]
    pub fn store(&self) -> &Store {
        &self.store
    }

    /// Alarms as they stand.
    #[must_use]
    pub fn desk(&self) -> &Desk {
        &self.desk
    }

    /// Commits deliveries and processes them. What this returns may be acknowledged to the sources.
    ///
    /// # Errors
    /// The store refused; the deliveries come back and none of them may be acknowledged.
    pub async fn deliver(
        &mut self,
        deliveries: Vec<Delivery>,
        wall: Stamp,
    ) -> Result<Acknowledgements, Undelivered> {
        let committed = self.store.commit(deliveries, wall).await?;
        self.count(&committed);
        let acks = committed.acks.clone();
        self.committed(committed, wall).await?;
        Ok(acks)
    }

    async fn committed(&mut self, committed: Committed, wall: Stamp) -> Result<(), KeeperError> {
        let Some(seq) = committed.seq else {
            return Ok(());
        };
        let readings = u32::try_from(committed.readings.len()).unwrap_or(u32::MAX);
        let entry = Entry {
            seq,
            wall,
            kind: EntryKind::Batch { readings },
        };
        self.process(&entry, Some(committed.readings)).await?;
        self.close_blocks(wall).await?;
        if self.settings.pace == Pace::Lockstep {
            self.settle(wall).await?;
        }
        Ok(())
    }

    /// Lets the wall clock pass.
    ///
    /// # Errors
    /// The store cannot be used.
    pub async fn tick(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        self.happen(EntryKind::Tick, wall).await?;
        self.close_blocks(wall).await?;
        self.start_due(wall).await?;
        if self.settings.pace == Pace::Lockstep {
            self.settle(wall).await?;
        } else {
            self.snapshot.health.outbox = self.store.reader().outbox_len().await?;
        }
        self.show(wall);
        Ok(())
    }

    /// Does what a person asks.
    ///
    /// # Errors
    /// The store cannot be used.
    pub async fn person(
        &mut self,
        mut command: Command,
        wall: Stamp,
    ) -> Result<Reply, KeeperError> {
        if command.kind == CommandKind::Show {
            self.snapshot.health.outbox = self.store.reader().outbox_len().await?;
            self.show(wall);
            return Ok(Reply::State {
                snapshot: Box::new(self.snapshot.clone()),
            });
        }
        if let CommandKind::Adopt {
            alarm,
            occurrence,
            adoption,
        } = &mut command.kind
        {
            match self.desk.adoption(alarm, *occurrence) {
                Ok(worked_out) => *adoption = Some(worked_out),
                Err(why) => return Ok(Reply::Refused { why }),
            }
        }
        let adopts = matches!(command.kind, CommandKind::Adopt { .. });
        let seq = self
            .store
            .append(
                EntryKind::Person {
                    command: command.clone(),
                },
                wall,
            )
            .await?;
        let entry = Entry {
            seq,
            wall,
            kind: EntryKind::Person { command },
        };
        let reply = self.process(&entry, None).await?;
        if adopts {
            self.start_due(wall).await?;
            if self.settings.pace == Pace::Lockstep {
                self.settle(wall).await?;
            }
        }
        self.show(wall);
        Ok(reply.unwrap_or_else(|| Reply::Refused {
            why: "nothing was asked".into(),
        }))
    }

    /// Ends in good order: what the model has said is taken in, the position and a checkpoint are saved. The store
    /// stays open for those who still publish from it; who opened it closes it.
    ///
    /// # Errors
    /// The store cannot be used.
    pub async fn stop(mut self, wall: Stamp) -> Result<(), KeeperError> {
        self.drain(wall).await?;
        self.save_at_stop(wall).await?;
        if self.unsaved > 0 {
            self.save(Vec::new()).await?;
        }
        Ok(())
    }

    /// Writes an entry and processes it.
    async fn happen(&mut self, kind: EntryKind, wall: Stamp) -> Result<(), KeeperError> {
        let seq = self.store.append(kind.clone(), wall).await?;
        self.process(&Entry { seq, wall, kind }, None).await?;
        Ok(())
    }

    /// Processes one entry. For a person's request the answer is given back.
    async fn process(
        &mut self,
        entry: &Entry,
        readings: Option<Vec<Reading>>,
    ) -> Result<Option<Reply>, KeeperError> {
        let readings = match (&entry.kind, readings) {
            (EntryKind::Batch { .. }, None) => self.store.reader().readings_of(entry.seq).await?,
            (_, readings) => readings.unwrap_or_default(),
        };
        match &entry.kind {
            EntryKind::Batch { .. } => self.take(&readings, entry.wall),
            EntryKind::BlockClosed { block } => {
                self.saved.closer.next = self.saved.closer.next.max(Some(block + 1));
            }
            EntryKind::Judged { step, .. } => {
                view::see(&mut self.snapshot, step, &self.settings.alarms.names.gauges);
                self.tell(step, entry.wall);
            }
            EntryKind::WatchBlind { why, .. } => self.snapshot.health.watch = Some(why.clone()),
            EntryKind::WatchSees => self.snapshot.health.watch = None,
            EntryKind::Tick => self.saved.closer.tick(entry.wall, self.settings.lateness),
            EntryKind::Person { .. } => {}
            EntryKind::Start { ground, .. } => self.started(ground.as_deref(), entry.wall),
        }
        let outcome = self.desk.entry(entry, &readings);
        if let EntryKind::Person { command } = &entry.kind
            && let CommandKind::Adopt {
                adoption: Some(adoption),
                ..
            } = &command.kind
            && outcome
                .transitions
                .iter()
                .any(|t| t.kind == TransitionKind::Adopted)
        {
            self.adopt(adoption, entry.wall);
        }
        self.position = entry.seq;
        self.unsaved += 1;
        if !outcome.transitions.is_empty() || self.unsaved >= SAVE_EVERY {
            self.save(outcome.transitions).await?;
        }
        Ok(outcome.reply)
    }

    fn take(&mut self, readings: &[Reading], wall: Stamp) {
        let plan = &self.settings.plan;
        let first = readings
            .iter()
            .filter_map(|r| plan.first_block_of(r))
            .filter(|&block| block > self.ground_last && self.saved.closer.is_closed(block))
            .min();
        if let Some(from) = first {
            self.saved.want_rerun(Due {
                from,
                compare_from: from,
                reason: "late readings".into(),
                first: wall,
                since: wall,
                replaces_live: false,
            });
        }
        self.saved.closer.take(readings);
        for reading in readings {
            view::take(&mut self.snapshot, reading);
        }
    }

    /// What was said under another ground file is said again under this one.
    fn started(&mut self, ground: Option<&str>, wall: Stamp) {
        let Some(ground) = ground else { return };
        if self.saved.ground.as_ref().is_some_and(|old| old != ground) {
            self.saved.want_rerun(Due {
                from: i64::MIN,
                compare_from: i64::MIN,
                reason: "the ground was calibrated anew".into(),
                first: wall,
                since: wall,
                replaces_live: true,
            });
        }
        self.saved.ground = Some(ground.to_owned());
    }

    fn adopt(&mut self, adoption: &Adoption, wall: Stamp) {
        let from = self.before_adoption(adoption);
        self.saved.adoptions.push(adoption.clone());
        self.saved.want_rerun(Due {
            from,
            compare_from: adoption.block,
            reason: "a finding was taken into the model".into(),
            first: wall,
            since: wall,
            replaces_live: true,
        });
    }

    /// Commits transitions, messages, state and position together.
    async fn save(&mut self, transitions: Vec<Transition>) -> Result<(), KeeperError> {
        self.saved.desk = self.desk.save();
        let state =
            postcard::to_stdvec(&self.saved).map_err(|e| KeeperError::State(e.to_string()))?;
        let (names, replay) = (&self.settings.alarms.names, self.settings.replay);
        let outgoing = transitions
            .iter()
            .flat_map(|t| events::alarm_outgoing(t, names, replay))
            .collect();
        let stale_from = self.saved.due.as_ref().map(|due| due.from);
        let applied = Applied {
            position: self.position,
            desk: state,
            transitions,
            outgoing,
            stale_from,
        };
        self.store.apply(applied.clone()).await?;
        self.unsaved = 0;
        if let Some(told) = &self.events {
            for transition in applied.transitions {
                let event = events::alarm(&transition, names, replay);
                if told.send(Happening { transition, event }).is_err() {
                    self.events = None;
                    break;
                }
            }
        }
        Ok(())
    }

    /// Shows what the newest block said of every gauge.
    fn tell(&self, step: &Step, recorded: Stamp) {
        let names = &self.settings.alarms.names;
        let end = self.settings.plan.start_of(step.block + 1);
        let news = (0..names.gauges.len()).map(|gauge| GaugeNews {
            gauge,
            block: step.block,
            end,
            expectation: step.expectations.get(gauge).copied().flatten(),
            departure: step.departures.get(gauge).copied().flatten(),
            blind: step.blind.get(gauge).copied().flatten(),
        });
        let replay = self.settings.replay;
        let all = news
            .map(|n| events::expectation(&n, names, recorded, replay))
            .collect();
        self.latest.send_replace(Arc::new(all));
    }

    fn count(&mut self, committed: &Committed) {
        let health = &mut self.snapshot.health;
        health.committed += u64::try_from(committed.readings.len()).unwrap_or(0);
        health.duplicates += committed.duplicates;
        health.conflicts += committed.conflicts;
        health.late += committed.late;
    }

    fn show(&mut self, wall: Stamp) {
        view::finish(&mut self.snapshot, &self.desk, self.position, wall);
        self.shown.send_replace(Arc::new(self.snapshot.clone()));
    }
}

#[cfg(test)]
mod tests;
