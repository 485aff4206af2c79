//! A publisher that repeats a message until the broker has confirmed it.

use std::time::Duration;

use rumqttc::{AsyncClient, Event, EventLoop, MqttOptions, Packet, QoS};

/// Publishes at QoS 1, one message at a time, over broker restarts.
pub struct Publisher {
    id: String,
    port: u16,
    connection: Option<(AsyncClient, EventLoop)>,
}

impl Publisher {
    /// A publisher to a broker on loopback; it connects with the first message.
    #[must_use]
    pub fn new(port: u16, id: &str) -> Self {
        Self {
            id: id.to_owned(),
            port,
            connection: None,
        }
    }

    /// Returns once the broker has confirmed the message. It may have been sent more than once.
    pub async fn publish(&mut self, topic: &str, payload: &str) {
        loop {
            if self.attempt(topic, payload).await.is_ok() {
                return;
            }
            // A client library's own list of unconfirmed messages is not trusted over a restart: begin anew.
            self.connection = None;
            tokio::time::sleep(Duration::from_millis(50)).await;
        }
    }

    async fn attempt(
        &mut self,
        topic: &str,
        payload: &str,
    ) -> Result<(), rumqttc::ConnectionError> {
        let (client, events) = self.connection.get_or_insert_with(|| {
            let mut options = MqttOptions::new(&self.id, "127.0.0.1", self.port);
            options.set_keep_alive(Duration::from_secs(5));
            AsyncClient::new(options, 4)
        });
        client
            .try_publish(topic, QoS::AtLeastOnce, false, payload)
            .expect("at most one message waits");
        loop {
            if let Event::Incoming(Packet::PubAck(_)) = events.poll().await? {
                return Ok(());
            }
        }
    }
}
