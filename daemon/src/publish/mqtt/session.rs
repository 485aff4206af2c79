//! One connection after the other: carries events into the window, and messages out of it.

use std::future::Future;
use std::pin::{Pin, pin};
use std::time::Duration;

use tokio::sync::{mpsc, watch};
use tokio::time::{Instant, MissedTickBehavior, interval_at, sleep_until, timeout};

use super::backoff::Backoff;
use super::client::{self, Handle, Happening};
use super::feeder::Answer;
use super::window::{Ask, Message, Window};
use super::{Feeds, MqttSettings, PublishStatus};
use crate::publish::events::{self, WATCHKEEPING};

/// With open messages and no PUBACK for this long, the connection is given up: the library resends nothing by itself.
const STALLED: Duration = Duration::from_secs(30);
/// How long the broker is asked what it keeps on alarm topics.
const LOOK: Duration = Duration::from_secs(10);
/// How long a stop waits for the broker to confirm what is open, and the farewell.
const FAREWELL: Duration = Duration::from_secs(2);
/// Alarm topics below the root.
const ALARMS: &str = "alarm/+";

/// How a connection ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum End {
    /// As asked.
    Stopped,
    /// Not as asked: try again.
    Lost,
}

/// What outlives a connection.
pub(super) struct Session {
    settings: MqttSettings,
    window: Window,
    feeds: Feeds,
    /// Feeds whose senders are gone; they are not waited for any more.
    rows_open: bool,
    latest_open: bool,
    status: watch::Sender<PublishStatus>,
    asks: mpsc::Sender<Ask>,
    answers: mpsc::Receiver<Answer>,
}

impl Session {
    pub(super) fn new(
        settings: MqttSettings,
        feeds: Feeds,
        status: watch::Sender<PublishStatus>,
        asks: mpsc::Sender<Ask>,
        answers: mpsc::Receiver<Answer>,
    ) -> Self {
        Self {
            settings,
            window: Window::new(),
            feeds,
            rows_open: true,
            latest_open: true,
            status,
            asks,
            answers,
        }
    }

    /// Makes one connection and keeps it as long as it goes.
    pub(super) async fn run(
        &mut self,
        mut stop: Pin<&mut (impl Future<Output = ()> + Send)>,
        backoff: &mut Backoff,
    ) -> End {
        let (handle, mut driver) = client::open(&self.settings, &self.heartbeat(false));
        let root = self.settings.root.clone();
        let period = self.settings.heartbeat;
        let mut beats = interval_at(Instant::now() + period, period);
        beats.set_missed_tick_behavior(MissedTickBehavior::Delay);
        let mut stall = Stall::default();
        let mut looking: Option<Instant> = None;
        let mut stopping: Option<Instant> = None;
        let why = 'connection: loop {
            let mut next = pin!(driver.next(&root));
            // The connection's future is polled to its end; see `Driver::next`.
            let happened = loop {
                self.pump(&handle);
                if stopping.is_some() && self.window.idle() {
                    break 'connection None;
                }
                let stalled = stall.until(self.window.open(), self.window.progress());
                tokio::select! {
                    happened = &mut next => break happened,
                    () = stop.as_mut(), if stopping.is_none() => {
                        stopping = Some(Instant::now() + FAREWELL);
                        let farewell = self.heartbeat(false);
                        self.window.close(farewell);
                    }
                    () = at(stopping) => break 'connection None,
                    () = at(looking) => {
                        looking = None;
                        handle.look_away(ALARMS);
                    }
                    () = at(stalled) => {
                        let waited = STALLED.as_secs();
                        break 'connection Some(format!("nothing was confirmed for {waited} s"));
                    }
                    Some(answer) = self.answers.recv() => self.answer(answer),
                    changed = self.feeds.rows.changed(), if self.rows_open => {
                        self.rows_open = changed.is_ok();
                        self.window.changed();
                    }
                    changed = self.feeds.latest.changed(), if self.latest_open => {
                        self.latest_open = changed.is_ok();
                        self.take_latest();
                    }
                    _ = beats.tick(), if stopping.is_none() => self.beat(),
                }
            };
            match happened {
                Ok(Happening::Connected) => {
                    self.window.connected();
                    // Before any message, so that only what was kept before this connection comes back.
                    if handle.look(ALARMS) {
                        looking = Some(Instant::now() + LOOK);
                    }
                    self.beat();
                    self.connected();
                }
                Ok(Happening::Assigned(packet)) => {
                    if let Err(confused) = self.window.assigned(packet) {
                        break Some(confused.to_string());
                    }
                }
                Ok(Happening::Acknowledged(packet)) => {
                    backoff.settled();
                    self.window.acknowledged(packet);
                    self.status.send_modify(|s| s.confirmed += 1);
                }
                Ok(Happening::Kept(topic)) => self.window.found(topic),
                Ok(Happening::Other) => {}
                Err(error) => break Some(error.to_string()),
            }
        };
        match why {
            Some(why) if stopping.is_none() => {
                self.lost(&why);
                End::Lost
            }
            _ => {
                // With a DISCONNECT the broker keeps the last will to itself; it closes when it has read it.
                if handle.disconnect() {
                    let goodbye = async { while driver.next(&root).await.is_ok() {} };
                    let _ = timeout(FAREWELL, goodbye).await;
                }
                self.status.send_modify(|s| s.connected = false);
                End::Stopped
            }
        }
    }

    /// Hands over all that the window lets out, and asks what it wants to know. Never waits.
    fn pump(&mut self, handle: &Handle) {
        while let Some(message) = self.window.next() {
            if let Some(why) = client::unsendable(&message) {
                tracing::error!(topic = message.topic, "a message can never be sent: {why}");
                self.window.refuse();
                self.status.send_modify(|s| s.refused += 1);
                continue;
            }
            if !handle.publish(&message) {
                break;
            }
            self.window.hand();
        }
        while self.asks.capacity() > 0 {
            let Some(ask) = self.window.ask() else { break };
            if self.asks.try_send(ask).is_err() {
                break;
            }
        }
    }

    fn answer(&mut self, answer: Answer) {
        match answer {
            Answer::Rows(connection, rows) => self.window.rows(connection, rows),
            Answer::Retained(connection, set) => self.window.retained(connection, set),
            Answer::Sent => self.window.told(),
        }
    }

    fn heartbeat(&self, online: bool) -> Message {
        let snapshot = self.feeds.snapshot.borrow().clone();
        Message {
            topic: WATCHKEEPING.to_owned(),
            payload: events::health(&snapshot, online),
            retain: true,
        }
    }

    fn beat(&mut self) {
        let beat = self.heartbeat(true);
        self.window.beat(beat);
    }

    fn take_latest(&mut self) {
        let latest = self.feeds.latest.borrow_and_update().clone();
        for (topic, payload) in latest.iter() {
            self.window.latest(topic.clone(), payload.clone());
        }
    }

    fn connected(&self) {
        let at = format!("{}:{}", self.settings.host, self.settings.port);
        tracing::info!(broker = at, "connected");
        self.status.send_modify(|s| {
            s.connected = true;
            s.trouble.clear();
            s.connections += 1;
        });
    }

    fn lost(&mut self, why: &str) {
        self.window.disconnected();
        let at = format!("{}:{}", self.settings.host, self.settings.port);
        // Once for each new reason: a broker that stays away is no news.
        if self.status.borrow().trouble != why {
            tracing::warn!(broker = at, "not connected, trying again: {why}");
        }
        self.status.send_modify(|s| {
            s.connected = false;
            why.clone_into(&mut s.trouble);
        });
    }
}

/// Waits until an instant; for ever where there is none.
async fn at(instant: Option<Instant>) {
    match instant {
        Some(instant) => sleep_until(instant).await,
        None => std::future::pending().await,
    }
}

/// Tells when open messages have waited too long without any confirmation.
#[derive(Debug, Default)]
struct Stall {
    seen: u64,
    since: Option<Instant>,
}

impl Stall {
    fn until(&mut self, open: usize, progress: u64) -> Option<Instant> {
        if open == 0 {
            self.since = None;
        } else if self.since.is_none() || progress != self.seen {
            self.since = Some(Instant::now());
        }
        self.seen = progress;
        self.since.map(|since| since + STALLED)
    }
}
