//! What is on its way to the broker: a pure state machine over one outbox and one connection at a time.
//!
//! The promise: a row leaves the outbox only after the broker's PUBACK for it. The client library forgets what it was
//! handed when a connection ends, so nothing is entrusted to it: whatever is not acknowledged is read from the outbox
//! again after the next CONNACK. A consumer may see a message twice, never not at all.
//!
//! Packet ids. The library numbers packets in the order they are handed over and tells each number as it goes out;
//! numbers run in a ring of [`RING`]. A number must not come round while an older packet that bears it is
//! unacknowledged, so that not only how many packets are open is bounded ([`OPEN`]) but how far apart they are
//! ([`SPAN`]).
//!
//! Order. Within a connection rows go in their order. After a reconnect an old unacknowledged row may follow a newer
//! acknowledged one on the same topic, and the broker would keep the older state. Such rows are among the first
//! [`SPAN`] of the outbox; they are sent first, then the whole retained set as it stands, then the rest.

use std::collections::{BTreeMap, BTreeSet, VecDeque};

use thiserror::Error;

use crate::record::Outgoing;

/// Size of the ring of packet ids that the client library uses.
pub(super) const RING: u16 = 100;
/// Packets open at a time.
pub(super) const OPEN: usize = 50;
/// Furthest apart that open packets may be; the margin to the ring is for subscriptions, which take numbers too.
pub(super) const SPAN: u64 = 80;
/// Rows asked for at a time.
const ROWS: u32 = 80;
/// Topics whose latest value may wait at a time.
const LATEST: usize = 4096;

/// A message for the client library.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) struct Message {
    /// Topic below the root.
    pub(super) topic: String,
    pub(super) payload: String,
    pub(super) retain: bool,
}

/// What the outbox is asked; answers come back with the number of the connection that asked.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) enum Ask {
    /// Rows after a number, at most so many.
    Rows {
        connection: u64,
        after: i64,
        limit: u32,
    },
    /// The retained set as it stands.
    Retained { connection: u64 },
    /// Rows that the broker acknowledged: they may go.
    Sent(Vec<i64>),
}

/// The client library did what it must not: this connection cannot be trusted.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Error)]
pub(super) enum Confused {
    /// A packet went out that was never handed over.
    #[error("the client sent a packet ({0}) that it was not given")]
    NotHanded(u16),
    /// A packet id came round before its older packet was acknowledged.
    #[error("the client used packet id {0} twice")]
    Reused(u16),
}

/// A message on its way, with the row it stands for.
#[derive(Debug, Clone, PartialEq, Eq)]
struct Item {
    row: Option<i64>,
    message: Message,
}

/// An open packet.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Open {
    ticket: u64,
    row: Option<i64>,
}

/// Where a connection stands with the outbox.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Stage {
    /// Not connected: nothing is handed over.
    Away,
    /// The first rows are due.
    First,
    /// They are queued; the retained set is due.
    Retained,
    /// Rows follow as they come.
    Steady,
    /// Only the farewell goes out.
    Closing,
}

/// The state machine; see the module's page.
#[derive(Debug)]
pub(super) struct Window {
    stage: Stage,
    connection: u64,
    /// Whether rows or the retained set are asked for and not yet answered.
    asked: bool,
    /// Whether the outbox may hold rows beyond the last one seen.
    more: bool,
    last: i64,
    queue: VecDeque<Item>,
    beat: Option<Message>,
    latest: BTreeMap<String, String>,
    /// Handed to the library, not yet numbered; in order.
    handed: VecDeque<Open>,
    /// On the wire, by packet id.
    flying: BTreeMap<u16, Open>,
    next_ticket: u64,
    /// Topics the broker may keep: the retained set, and rows queued since.
    keep: BTreeSet<String>,
    /// Topics the broker was found to keep before the retained set was known.
    found: Vec<String>,
    /// Acknowledged rows the outbox was not yet told of.
    done: Vec<i64>,
    telling: bool,
    acknowledged: u64,
}

impl Window {
    pub(super) fn new() -> Self {
        Self {
            stage: Stage::Away,
            connection: 0,
            asked: false,
            more: true,
            last: 0,
            queue: VecDeque::new(),
            beat: None,
            latest: BTreeMap::new(),
            handed: VecDeque::new(),
            flying: BTreeMap::new(),
            next_ticket: 0,
            keep: BTreeSet::new(),
            found: Vec::new(),
            done: Vec::new(),
            telling: false,
            acknowledged: 0,
        }
    }

    /// CONNACK came: everything unacknowledged is sent again from the outbox.
    pub(super) fn connected(&mut self) {
        self.disconnected();
        self.stage = Stage::First;
        self.connection = self.connection.wrapping_add(1);
        self.more = true;
    }

    /// The connection is gone, and with it all that the library holds.
    pub(super) fn disconnected(&mut self) {
        self.stage = Stage::Away;
        self.asked = false;
        self.last = 0;
        self.queue.clear();
        self.handed.clear();
        self.flying.clear();
        self.next_ticket = 0;
        self.keep.clear();
        self.found.clear();
    }

    /// The outbox has new rows.
    pub(super) fn changed(&mut self) {
        self.more = true;
    }

    /// The heartbeat to send next; one not yet sent is replaced.
    pub(super) fn beat(&mut self, beat: Message) {
        self.beat = Some(beat);
    }

    /// Nothing but the farewell goes out any more; what is open may still be acknowledged.
    pub(super) fn close(&mut self, farewell: Message) {
        if self.stage == Stage::Away {
            return;
        }
        self.stage = Stage::Closing;
        self.queue.clear();
        self.latest.clear();
        self.beat = Some(farewell);
    }

    /// Whether nothing is left to do before the end.
    pub(super) fn idle(&self) -> bool {
        let away = self.stage == Stage::Away;
        let owes = self.telling || !self.done.is_empty();
        !owes && (away || self.beat.is_none() && self.open() == 0)
    }

    /// The latest value of a topic; one not yet sent is replaced.
    pub(super) fn latest(&mut self, topic: String, payload: String) {
        if self.latest.len() < LATEST || self.latest.contains_key(&topic) {
            self.latest.insert(topic, payload);
        }
    }

    /// The next thing to ask of the outbox, if any; taken as asked.
    pub(super) fn ask(&mut self) -> Option<Ask> {
        if !self.telling && !self.done.is_empty() {
            self.telling = true;
            return Some(Ask::Sent(std::mem::take(&mut self.done)));
        }
        if self.asked {
            return None;
        }
        let connection = self.connection;
        let ask = match self.stage {
            Stage::Away | Stage::Closing => return None,
            Stage::Retained => Ask::Retained { connection },
            Stage::First => Ask::Rows {
                connection,
                after: 0,
                limit: ROWS,
            },
            Stage::Steady if self.more && self.queue.len() < OPEN => {
                self.more = false;
                Ask::Rows {
                    connection,
                    after: self.last,
                    limit: ROWS,
                }
            }
            Stage::Steady => return None,
        };
        self.asked = true;
        Some(ask)
    }

    /// Rows came, in order.
    pub(super) fn rows(&mut self, connection: u64, rows: Vec<(i64, Outgoing)>) {
        if connection != self.connection || !matches!(self.stage, Stage::First | Stage::Steady) {
            return;
        }
        self.asked = false;
        if self.stage == Stage::First {
            self.stage = Stage::Retained;
        }
        if rows.len() >= ROWS as usize {
            self.more = true;
        }
        for (number, outgoing) in rows {
            self.last = self.last.max(number);
            if outgoing.retain {
                self.keep.insert(outgoing.topic.clone());
            }
            self.queue.push_back(Item {
                row: Some(number),
                message: message(outgoing),
            });
        }
    }

    /// The retained set came: what the broker must hold, and with empty payload what it must not.
    pub(super) fn retained(&mut self, connection: u64, set: Vec<Outgoing>) {
        if connection != self.connection || self.stage != Stage::Retained {
            return;
        }
        self.asked = false;
        self.stage = Stage::Steady;
        for outgoing in set {
            self.keep.insert(outgoing.topic.clone());
            let mut message = message(outgoing);
            message.retain = true;
            self.queue.push_back(Item { row: None, message });
        }
        for topic in std::mem::take(&mut self.found) {
            self.clear(topic);
        }
    }

    /// The broker was found to keep a message on one of our topics.
    pub(super) fn found(&mut self, topic: String) {
        match self.stage {
            Stage::Steady => self.clear(topic),
            Stage::First | Stage::Retained => self.found.push(topic),
            Stage::Away | Stage::Closing => {}
        }
    }

    fn clear(&mut self, topic: String) {
        if self.keep.contains(&topic) {
            return;
        }
        let message = Message {
            topic,
            payload: String::new(),
            retain: true,
        };
        self.queue.push_back(Item { row: None, message });
    }

    /// The outbox took note of acknowledged rows.
    pub(super) fn told(&mut self) {
        self.telling = false;
    }

    /// The next message the library may be handed; it stays until [`Window::hand`].
    pub(super) fn next(&self) -> Option<Message> {
        if !self.room() {
            return None;
        }
        self.beat
            .clone()
            .or_else(|| self.queue.front().map(|item| item.message.clone()))
            .or_else(|| {
                self.latest
                    .first_key_value()
                    .map(|(topic, payload)| Message {
                        topic: topic.clone(),
                        payload: payload.clone(),
                        retain: false,
                    })
            })
    }

    /// The library took the message that [`Window::next`] gave.
    pub(super) fn hand(&mut self) {
        if let Some(row) = self.pop() {
            let ticket = self.next_ticket;
            self.next_ticket = ticket.wrapping_add(1);
            self.handed.push_back(Open { ticket, row });
        }
    }

    /// The message that [`Window::next`] gave can never be sent: it is put aside, so that the rest goes on.
    pub(super) fn refuse(&mut self) {
        if let Some(row) = self.pop() {
            self.done.extend(row);
        }
    }

    /// Takes the message that [`Window::next`] gave: the row it stands for, if any.
    fn pop(&mut self) -> Option<Option<i64>> {
        if self.beat.take().is_some() {
            return Some(None);
        }
        if let Some(item) = self.queue.pop_front() {
            return Some(item.row);
        }
        self.latest.pop_first().map(|_| None)
    }

    fn room(&self) -> bool {
        if self.stage == Stage::Away || self.open() >= OPEN {
            return false;
        }
        let oldest = self
            .flying
            .values()
            .chain(self.handed.front())
            .map(|open| open.ticket)
            .min();
        oldest.is_none_or(|oldest| self.next_ticket.wrapping_sub(oldest) < SPAN)
    }

    /// The library put the oldest message it holds on the wire, under this packet id.
    pub(super) fn assigned(&mut self, packet: u16) -> Result<(), Confused> {
        let open = self.handed.pop_front().ok_or(Confused::NotHanded(packet))?;
        match self.flying.insert(packet, open) {
            None => Ok(()),
            Some(_) => Err(Confused::Reused(packet)),
        }
    }

    /// PUBACK came.
    pub(super) fn acknowledged(&mut self, packet: u16) {
        if let Some(open) = self.flying.remove(&packet) {
            self.acknowledged = self.acknowledged.wrapping_add(1);
            self.done.extend(open.row);
        }
    }

    /// Messages handed over and not acknowledged.
    pub(super) fn open(&self) -> usize {
        self.handed.len() + self.flying.len()
    }

    /// PUBACKs so far: a measure of progress.
    pub(super) fn progress(&self) -> u64 {
        self.acknowledged
    }
}

fn message(outgoing: Outgoing) -> Message {
    Message {
        topic: outgoing.topic,
        payload: outgoing.payload,
        retain: outgoing.retain,
    }
}

#[cfg(test)]
mod tests;
