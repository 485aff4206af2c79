//! Topics of an MQTT broker.
//!
//! [`payload`] reads a message, `client` is the only file that names the client library, and this file is the task.
//!
//! A message is acknowledged to the broker only after its readings are on disk. The session is persistent, so what was not
//! acknowledged comes again after any break; the store drops what it has already. A message without an instant of its own is
//! stamped on arrival, so its repetition after a break cannot be told from a new one: give `time` where every reading counts.

mod client;
pub mod payload;

use std::time::Duration;

use tokio::sync::mpsc;
use tokio::time::{Instant, MissedTickBehavior};
use tracing::{debug, info};

use super::backoff::Backoff;
use super::burst::Burst;
use super::outlet::{Closed, Outlet};
use super::{IntakeError, Surroundings, stopped};
use crate::config::MqttSource;
use crate::record::{AckToken, Reading, Rejected, SourceName};
use client::{Acknowledger, Broker, Event, Message, Session};

/// Messages that brokers send before they wait for an acknowledgement: the usual default of 20, which a client of MQTT 3.1.1
/// cannot ask about. With so many waiting, the store commits at once.
pub const WINDOW: usize = 20;

/// No more messages than this wait for an acknowledgement, whatever the broker would send: nothing more is read from it.
const MOST_WAITING: usize = 1000;

/// A connection that has held this long was a good one: the next break is followed by a short wait again.
const GOOD: Duration = Duration::from_secs(30);

/// How long acknowledgements are still passed on after shutdown.
const FAREWELL: Duration = Duration::from_secs(5);

/// How to enter a broker.
#[derive(Clone)]
pub struct Entry {
    client_id: String,
    password: Option<crate::config::Secret>,
}

impl Entry {
    /// Reads the password, and makes the client id where none is given: it names the persistent session, so it must be the
    /// same after every restart and no other client's.
    ///
    /// # Errors
    /// TLS is asked for, or the password cannot be read.
    pub fn new(
        settings: &MqttSource,
        source: &SourceName,
        site: &str,
    ) -> Result<Self, IntakeError> {
        let endpoint = &settings.endpoint;
        if endpoint.tls {
            return Err(IntakeError::Tls(source.clone()));
        }
        let secret = |e: crate::config::SecretError| IntakeError::Secret {
            source_name: source.clone(),
            why: e.to_string(),
        };
        let made = || format!("borewake-{site}-{source}");
        Ok(Self {
            client_id: endpoint.client_id.clone().unwrap_or_else(made),
            password: endpoint
                .password
                .as_ref()
                .map(|f| f.read())
                .transpose()
                .map_err(secret)?,
        })
    }

    /// The same entry under a name of its own: whoever only looks must neither push the daemon out of its session nor take
    /// its messages.
    #[must_use]
    pub(crate) fn into_look(self) -> Self {
        Self {
            client_id: format!("{}-look-{:08x}", self.client_id, fastrand::u32(..)),
            ..self
        }
    }
}

/// Listens to topics until `until`, or until `enough` of what they say.
///
/// # Errors
/// The broker cannot be entered, or refuses a subscription.
pub(crate) async fn look(
    settings: &MqttSource,
    entry: &Entry,
    source: &SourceName,
    around: &Surroundings,
    until: Instant,
    mut enough: impl FnMut(Vec<Reading>, Vec<Rejected>) -> bool,
) -> Result<(), String> {
    let password = entry.password.as_ref();
    let mut broker = Broker::new(
        &settings.endpoint,
        &entry.client_id,
        password,
        MOST_WAITING,
        Session::Passing,
    );
    let decoder = payload::Decoder::new(&settings.channels);
    loop {
        let (mut events, _) = broker.split();
        let Ok(event) = tokio::time::timeout_at(until, events.next()).await else {
            return Ok(());
        };
        match event {
            Event::Connected { .. } => {
                broker.subscribe(decoder.filters());
            }
            Event::Refused(topics) => {
                let topics = topics.join(", ");
                return Err(format!("the broker refuses the subscription to {topics}"));
            }
            Event::Message(message) => {
                let now = around.clock.read();
                let (readings, rejected) = decoder.read(&message, &around.conversions, source, now);
                if enough(readings, rejected) {
                    broker.leave(until).await;
                    return Ok(());
                }
            }
            Event::Lost(why) => return Err(why),
            Event::Other => {}
        }
    }
}

/// Which connection a message came over, and its number there. Numbers begin again with every connection, so a token of an
/// earlier one must never be acknowledged over a later one: it would acknowledge another message.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Ticket {
    connection: u32,
    packet: u16,
}

impl Ticket {
    fn token(self) -> AckToken {
        AckToken(u64::from(self.connection) << 16 | u64::from(self.packet))
    }

    fn of(token: AckToken) -> Option<Self> {
        Some(Self {
            connection: u32::try_from(token.0 >> 16).ok()?,
            packet: u16::try_from(token.0 & 0xFFFF).ok()?,
        })
    }
}

/// Reads topics until shutdown.
pub(super) async fn run(
    settings: MqttSource,
    entry: Entry,
    outlet: Outlet,
    around: Surroundings,
    acks: mpsc::UnboundedReceiver<AckToken>,
) {
    let broker = Broker::new(
        &settings.endpoint,
        &entry.client_id,
        entry.password.as_ref(),
        MOST_WAITING,
        Session::Kept,
    );
    let mut task = Task {
        decoder: payload::Decoder::new(&settings.channels),
        outlet,
        around,
        acks,
        connection: 0,
        waiting: 0,
    };
    task.run(broker).await;
}

struct Task {
    decoder: payload::Decoder,
    outlet: Outlet,
    around: Surroundings,
    /// Tokens of deliveries that are on disk.
    acks: mpsc::UnboundedReceiver<AckToken>,
    /// Number of the connection.
    connection: u32,
    /// Messages of this connection that wait to be acknowledged.
    waiting: usize,
}

/// Why the task goes on without an event.
enum Pause {
    Shutdown,
    Closed,
}

impl Task {
    async fn run(&mut self, mut broker: Broker) {
        let mut backoff = Backoff::default();
        let mut since = None;
        self.outlet.say("connecting");
        loop {
            let event = match self.next_event(&mut broker).await {
                Ok(event) => event,
                Err(Pause::Closed) => break,
                Err(Pause::Shutdown) => {
                    self.farewell(&mut broker).await;
                    break;
                }
            };
            match event {
                Event::Connected { session_present } => {
                    since = Some(Instant::now());
                    self.outlet.connected();
                    info!(session_present, "session");
                    if !broker.subscribe(self.decoder.filters()) {
                        self.outlet.trouble(&"the subscription found no room; it is made again with the next connection");
                    }
                }
                Event::Refused(topics) => {
                    let topics = topics.join(", ");
                    let why = format!(
                        "the broker refuses the subscription to {topics}; see its access rules"
                    );
                    self.outlet.say(&why);
                    self.outlet.trouble(&why);
                }
                Event::Message(message) => match self.take(message, &broker.acknowledger()).await {
                    Ok(()) => {}
                    Err(Pause::Closed) => break,
                    Err(Pause::Shutdown) => {
                        self.farewell(&mut broker).await;
                        break;
                    }
                },
                Event::Lost(why) => {
                    self.connection = self.connection.wrapping_add(1);
                    self.count(0);
                    if since.take().is_some_and(|s| s.elapsed() >= GOOD) {
                        backoff.reset();
                    }
                    self.outlet.waiting(&why);
                    if self.sleep(backoff.wait()).await.is_err() {
                        break;
                    }
                }
                Event::Other => {}
            }
        }
        self.outlet.say("stopped");
    }

    /// The next event; acknowledgements go out meanwhile. The event loop's own future is never dropped half done, except
    /// at shutdown.
    async fn next_event(&mut self, broker: &mut Broker) -> Result<Event, Pause> {
        let mut settle = tokio::time::interval(Burst::QUIET / 2);
        settle.set_missed_tick_behavior(MissedTickBehavior::Delay);
        let (mut events, acknowledger) = broker.split();
        let next = events.next();
        tokio::pin!(next);
        loop {
            tokio::select! {
                biased;
                () = stopped(&mut self.around.shutdown) => return Err(Pause::Shutdown),
                token = self.acks.recv() => match token {
                    Some(token) => self.acknowledge(token, &acknowledger),
                    None => return Err(Pause::Closed),
                },
                event = &mut next => return Ok(event),
                _ = settle.tick() => self.outlet.settle(),
            }
        }
    }

    /// Decodes a message and hands it on. While there is no room, or too much waits, nothing more is read from the broker.
    async fn take(&mut self, message: Message, acknowledger: &Acknowledger) -> Result<(), Pause> {
        let now = self.around.clock.read();
        let source = self.outlet.source().clone();
        let (readings, rejected) =
            self.decoder
                .read(&message, &self.around.conversions, &source, now);
        let ticket = message.packet.map(|packet| Ticket {
            connection: self.connection,
            packet,
        });
        let delivery = self
            .outlet
            .delivery(readings, rejected, ticket.map(Ticket::token));
        if ticket.is_some() {
            self.count(self.waiting + 1);
        }
        let queue = self.outlet.queue().ok_or(Pause::Closed)?;
        let mut delivery = Some(delivery);
        while delivery.is_some() || self.waiting >= MOST_WAITING {
            tokio::select! {
                biased;
                () = stopped(&mut self.around.shutdown) => return Err(Pause::Shutdown),
                token = self.acks.recv() => match token {
                    Some(token) => self.acknowledge(token, acknowledger),
                    None => return Err(Pause::Closed),
                },
                room = queue.reserve(), if delivery.is_some() => match (room, delivery.take()) {
                    (Ok(room), Some(delivery)) => room.send(delivery),
                    _ => return Err(Pause::Closed),
                },
            }
        }
        Ok(())
    }

    /// Passes an acknowledgement to the broker, unless it belongs to an earlier connection: that message comes again.
    fn acknowledge(&mut self, token: AckToken, acknowledger: &Acknowledger) {
        match Ticket::of(token) {
            Some(ticket) if ticket.connection == self.connection => {
                self.count(self.waiting.saturating_sub(1));
                if !acknowledger.acknowledge(ticket.packet) {
                    self.outlet
                        .trouble(&"an acknowledgement found no room; the message comes again");
                }
            }
            _ => debug!(?token, "acknowledgement of an earlier connection dropped"),
        }
    }

    /// Waits before the next connection; tokens that come meanwhile are of the last one, and are dropped.
    async fn sleep(&mut self, wait: Duration) -> Result<(), Closed> {
        let until = Instant::now() + wait;
        loop {
            tokio::select! {
                () = stopped(&mut self.around.shutdown) => return Err(Closed),
                token = self.acks.recv() => if token.is_none() {
                    return Err(Closed);
                },
                () = tokio::time::sleep_until(until) => return Ok(()),
            }
        }
    }

    /// Stops delivering and passes on the acknowledgements that still come, so that little is delivered twice after a restart.
    async fn farewell(&mut self, broker: &mut Broker) {
        self.outlet.close();
        let until = Instant::now() + FAREWELL;
        let (mut events, acknowledger) = broker.split();
        let mut open = true;
        while open && self.waiting > 0 {
            let next = events.next();
            tokio::pin!(next);
            loop {
                tokio::select! {
                    biased;
                    token = self.acks.recv(), if open => match token {
                        Some(token) => self.acknowledge(token, &acknowledger),
                        None => open = false,
                    },
                    event = &mut next => match event {
                        Event::Lost(_) => return,
                        _ => break,
                    },
                    () = tokio::time::sleep_until(until) => return,
                }
                if self.waiting == 0 || !open {
                    break;
                }
            }
        }
        broker.leave(until).await;
    }

    fn count(&mut self, waiting: usize) {
        self.waiting = waiting;
        self.outlet.window().set(waiting);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_token_says_which_connection_it_is_of() {
        for (connection, packet) in [(0, 1), (7, u16::MAX), (u32::MAX, 20)] {
            let ticket = Ticket { connection, packet };
            assert_eq!(Ticket::of(ticket.token()), Some(ticket));
        }
        assert_eq!(Ticket::of(AckToken(u64::MAX)), None);
    }
}
