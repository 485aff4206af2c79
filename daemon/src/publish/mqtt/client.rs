//! The one file of this room that names the client library (MQTT 3.1.1).
//!
//! One connection is one client: its queues, packet ids and buffered events die with it. The library would otherwise
//! carry them over a reconnect, among them acknowledgements of packets whose numbers are in use again by then, and
//! throw its own pending messages away when the broker has no session. Sessions are clean, QoS is 1, never 2.

use std::time::Duration;

use rumqttc::{
    AsyncClient, ConnectionError, Event, EventLoop, LastWill, MqttOptions, Outgoing, Packet, QoS,
};

use super::MqttSettings;
use super::window::{Message, RING};

/// Longest payload that is tried \[bytes\]; events are far below.
const LONGEST: usize = 1024 * 1024;
/// Longest packet either way \[bytes\]; the library's own default of 10 KiB is too small for an alarm.
const PACKET: usize = 2 * LONGEST;
/// Silence after which a ping is sent.
const KEEP_ALIVE: Duration = Duration::from_secs(30);

/// What happened on the connection.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) enum Happening {
    /// CONNACK.
    Connected,
    /// The oldest message handed over went out under this packet id.
    Assigned(u16),
    /// PUBACK.
    Acknowledged(u16),
    /// The broker holds a retained message on this topic.
    Kept(String),
    /// Nothing that matters here.
    Other,
}

/// The half that takes messages; never waits.
#[derive(Debug)]
pub(super) struct Handle {
    client: AsyncClient,
    root: String,
}

/// The half that runs the connection.
pub(super) struct Driver(EventLoop);

/// A client for one connection, not yet connected.
pub(super) fn open(settings: &MqttSettings, will: &Message) -> (Handle, Driver) {
    let mut options = MqttOptions::new(&settings.client_id, &settings.host, settings.port);
    options
        .set_clean_session(true)
        .set_keep_alive(KEEP_ALIVE)
        .set_inflight(RING)
        .set_max_packet_size(PACKET, PACKET)
        .set_last_will(LastWill::new(
            format!("{}/{}", settings.root, will.topic),
            will.payload.clone(),
            QoS::AtLeastOnce,
            will.retain,
        ));
    if let Some(user) = &settings.user {
        options.set_credentials(user, settings.password.as_deref().unwrap_or_default());
    }
    let (client, driver) = AsyncClient::new(options, usize::from(RING));
    let root = settings.root.clone();
    (Handle { client, root }, Driver(driver))
}

/// Why a message can never be sent; `None` where it can.
pub(super) fn unsendable(message: &Message) -> Option<&'static str> {
    if message.topic.is_empty() || message.topic.contains(['+', '#', '\0']) {
        return Some("its topic is empty or holds a wildcard");
    }
    if message.topic.len() > 1024 {
        return Some("its topic is longer than 1024 bytes");
    }
    (message.payload.len() > LONGEST).then_some("its payload is longer than 1 MiB")
}

impl Handle {
    /// Hands a message over; false where the library cannot take it now.
    pub(super) fn publish(&self, message: &Message) -> bool {
        let topic = format!("{}/{}", self.root, message.topic);
        self.client
            .try_publish(
                topic,
                QoS::AtLeastOnce,
                message.retain,
                message.payload.as_bytes(),
            )
            .is_ok()
    }

    /// Asks the broker for what it keeps below a topic.
    pub(super) fn look(&self, filter: &str) -> bool {
        let filter = format!("{}/{filter}", self.root);
        self.client.try_subscribe(filter, QoS::AtMostOnce).is_ok()
    }

    /// Ends [`Handle::look`].
    pub(super) fn look_away(&self, filter: &str) {
        let _ = self
            .client
            .try_unsubscribe(format!("{}/{filter}", self.root));
    }

    /// Says goodbye: the broker then keeps the last will to itself.
    pub(super) fn disconnect(&self) -> bool {
        self.client.try_disconnect().is_ok()
    }
}

impl Driver {
    /// Waits for the next thing to happen. Must be polled to its end: a dropped wait may lose what it had begun.
    ///
    /// # Errors
    /// The connection is gone or never came; this client is of no more use.
    pub(super) async fn next(&mut self, root: &str) -> Result<Happening, ConnectionError> {
        Ok(match self.0.poll().await? {
            Event::Incoming(Packet::ConnAck(_)) => Happening::Connected,
            Event::Incoming(Packet::PubAck(ack)) => Happening::Acknowledged(ack.pkid),
            Event::Outgoing(Outgoing::Publish(packet)) => Happening::Assigned(packet),
            // What comes live is our own; only what was kept from before is news.
            Event::Incoming(Packet::Publish(p)) if p.retain && !p.payload.is_empty() => p
                .topic
                .strip_prefix(root)
                .and_then(|t| t.strip_prefix('/'))
                .map_or(Happening::Other, |t| Happening::Kept(t.to_owned())),
            _ => Happening::Other,
        })
    }
}
