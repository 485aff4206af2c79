//! The client library, and how it must be handled. No other file of this room names it.
//!
//! Of `rumqttc` 0.25: it does not subscribe again by itself, so that is done on every connection; its waiting calls may
//! deadlock in the task that polls, so only `try_*` are used; it does not wait after an error, so its user does; and after an
//! error it keeps packets that it has read and not yet given out, which would come out as packets of the next connection, so
//! they are dropped here (the broker sends them again).

use std::time::Duration;

use rumqttc::{
    AsyncClient, ConnectReturnCode, ConnectionError, EventLoop, MqttOptions, Packet, Publish, QoS,
    SubscribeFilter, SubscribeReasonCode,
};
use tokio::time::{Instant, timeout_at};

use crate::config::{MqttEndpoint, Secret};

/// A message may not be longer \[bytes\]: it is gathered in memory before it can be refused.
const LONGEST: usize = 16 * 1024 * 1024;

/// Between two signs of life.
const KEEP_ALIVE: Duration = Duration::from_secs(30);

/// What happened.
pub(super) enum Event {
    /// The broker let us in.
    Connected {
        /// Whether it still has our session.
        session_present: bool,
    },
    /// It refuses these subscriptions.
    Refused(Vec<String>),
    /// It sent a message.
    Message(Message),
    /// The connection is lost or did not come about.
    Lost(String),
    /// Nothing of interest.
    Other,
}

/// A message as it came.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Message {
    /// Its topic.
    pub topic: String,
    /// Its payload.
    pub payload: Vec<u8>,
    /// Whether the broker kept it from earlier and sends it because we subscribed.
    pub retained: bool,
    /// Its number on this connection, to be acknowledged; `None` where nothing is to be acknowledged.
    pub packet: Option<u16>,
}

/// Whether the broker keeps what we did not acknowledge.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Session {
    /// It does, for the next connection.
    Kept,
    /// It forgets us.
    Passing,
}

/// A connection to a broker, made again and again.
pub(super) struct Broker {
    client: AsyncClient,
    events: EventLoop,
    filters: Vec<String>,
}

/// Its event loop.
pub(super) struct Events<'b> {
    events: &'b mut EventLoop,
    filters: &'b [String],
}

/// Its way to acknowledge.
#[derive(Clone)]
pub(super) struct Acknowledger(AsyncClient);

impl Broker {
    /// Nothing is done before the first event is asked for. There is room for `waiting` acknowledgements.
    pub(super) fn new(
        endpoint: &MqttEndpoint,
        client_id: &str,
        password: Option<&Secret>,
        waiting: usize,
        session: Session,
    ) -> Self {
        let mut options = MqttOptions::new(client_id, &endpoint.host, endpoint.port);
        options
            .set_clean_session(session == Session::Passing)
            .set_manual_acks(true)
            .set_keep_alive(KEEP_ALIVE)
            .set_max_packet_size(LONGEST, 64 * 1024);
        if let Some(user) = &endpoint.user {
            options.set_credentials(user, password.map_or("", Secret::expose));
        }
        let (client, mut events) = AsyncClient::new(options, waiting + 16);
        events.network_options.set_connection_timeout(10);
        Self {
            client,
            events,
            filters: Vec::new(),
        }
    }

    /// Subscribes, with QoS 1; false where there was no room for it.
    pub(super) fn subscribe(&mut self, filters: &[String]) -> bool {
        self.filters = filters.to_vec();
        let one = |f: &String| SubscribeFilter::new(f.clone(), QoS::AtLeastOnce);
        self.client
            .try_subscribe_many(filters.iter().map(one))
            .is_ok()
    }

    /// The event loop and the way to acknowledge, at the same time.
    pub(super) fn split(&mut self) -> (Events<'_>, Acknowledger) {
        let events = Events {
            events: &mut self.events,
            filters: &self.filters,
        };
        (events, Acknowledger(self.client.clone()))
    }

    /// The way to acknowledge.
    pub(super) fn acknowledger(&self) -> Acknowledger {
        Acknowledger(self.client.clone())
    }

    /// Sends what waits to be sent, says goodbye and waits for the end of the connection.
    pub(super) async fn leave(&mut self, until: Instant) {
        if self.client.try_disconnect().is_ok() {
            while let Ok(Ok(_)) = timeout_at(until, self.events.poll()).await {}
        }
    }
}

impl Acknowledger {
    /// Acknowledges a message of the present connection; false where there was no room for it.
    pub(super) fn acknowledge(&self, packet: u16) -> bool {
        let mut message = Publish::new("", QoS::AtLeastOnce, Vec::new());
        message.pkid = packet;
        self.0.try_ack(&message).is_ok()
    }
}

impl Events<'_> {
    /// The next event. After [`Event::Lost`], wait before asking again.
    pub(super) async fn next(&mut self) -> Event {
        match self.events.poll().await {
            Ok(rumqttc::Event::Incoming(packet)) => self.incoming(packet),
            Ok(rumqttc::Event::Outgoing(_)) => Event::Other,
            Err(error) => {
                self.events.state.events.clear();
                Event::Lost(self.describe(&error))
            }
        }
    }

    fn incoming(&self, packet: Packet) -> Event {
        match packet {
            Packet::ConnAck(ack) => Event::Connected {
                session_present: ack.session_present,
            },
            Packet::SubAck(ack) => {
                let refused = |(code, filter): (&SubscribeReasonCode, &String)| {
                    (*code == SubscribeReasonCode::Failure).then(|| filter.clone())
                };
                let refused: Vec<String> = ack
                    .return_codes
                    .iter()
                    .zip(self.filters)
                    .filter_map(refused)
                    .collect();
                if refused.is_empty() {
                    Event::Other
                } else {
                    Event::Refused(refused)
                }
            }
            Packet::Publish(publish) => Event::Message(Message {
                topic: publish.topic,
                payload: publish.payload.to_vec(),
                retained: publish.retain,
                packet: (publish.qos == QoS::AtLeastOnce).then_some(publish.pkid),
            }),
            _ => Event::Other,
        }
    }

    fn describe(&self, error: &ConnectionError) -> String {
        let (host, port) = self.events.mqtt_options.broker_address();
        let why = match error {
            ConnectionError::ConnectionRefused(code) => match code {
                ConnectReturnCode::BadUserNamePassword => {
                    "it refuses the user name or password".to_owned()
                }
                ConnectReturnCode::NotAuthorized => "it does not let this user in".to_owned(),
                ConnectReturnCode::BadClientId => "it refuses the client id".to_owned(),
                other => format!("it refuses the connection ({other:?})"),
            },
            ConnectionError::NetworkTimeout => "no answer in 10 s".to_owned(),
            other => other.to_string(),
        };
        format!("broker {host}:{port}: {why}")
    }
}
