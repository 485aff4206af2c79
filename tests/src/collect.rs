//! A subscriber that keeps every message it is sent.

use std::sync::{Arc, Mutex};
use std::time::Duration;

use rumqttc::{AsyncClient, Event, MqttOptions, Packet, QoS};
use tokio::task::JoinHandle;

use crate::until;

/// A message as it arrived.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Message {
    /// Whole topic.
    pub topic: String,
    /// Payload as text.
    pub payload: String,
    /// Whether the broker had kept it for us.
    pub retained: bool,
}

impl Message {
    /// The payload as JSON; `Null` for one that is none (an emptied retained topic).
    #[must_use]
    pub fn json(&self) -> serde_json::Value {
        serde_json::from_str(&self.payload).unwrap_or_default()
    }
}

/// Subscribes to a filter at QoS 1 and collects, over broker restarts too.
pub struct Collector {
    seen: Arc<Mutex<Vec<Message>>>,
    task: JoinHandle<()>,
}

impl Collector {
    /// Starts collecting and returns once the broker has confirmed the subscription.
    pub async fn start(port: u16, id: &str, filter: &str) -> Self {
        let mut options = MqttOptions::new(id, "127.0.0.1", port);
        options.set_keep_alive(Duration::from_secs(5));
        options.set_clean_session(false);
        options.set_max_packet_size(1 << 20, 1 << 20);
        let (client, mut events) = AsyncClient::new(options, 16);
        let seen = Arc::new(Mutex::new(Vec::new()));
        let (kept, filter) = (Arc::clone(&seen), filter.to_owned());
        let (ready, subscribed) = tokio::sync::oneshot::channel();
        let mut ready = Some(ready);
        let task = tokio::spawn(async move {
            loop {
                match events.poll().await {
                    // Only try_*: this task is the one that would make room in the client's queue.
                    Ok(Event::Incoming(Packet::ConnAck(_))) => {
                        client
                            .try_subscribe(&filter, QoS::AtLeastOnce)
                            .expect("room in the queue");
                    }
                    Ok(Event::Incoming(Packet::SubAck(_))) => {
                        if let Some(ready) = ready.take() {
                            let _ = ready.send(());
                        }
                    }
                    Ok(Event::Incoming(Packet::Publish(p))) => {
                        kept.lock().expect("no test thread panicked").push(Message {
                            topic: p.topic,
                            payload: String::from_utf8_lossy(&p.payload).into_owned(),
                            retained: p.retain,
                        });
                    }
                    Ok(_) => {}
                    Err(_) => tokio::time::sleep(Duration::from_millis(100)).await,
                }
            }
        });
        subscribed.await.expect("the collector's task lives");
        Self { seen, task }
    }

    /// All messages so far, in the order of arrival.
    #[must_use]
    pub fn all(&self) -> Vec<Message> {
        self.seen.lock().expect("no test thread panicked").clone()
    }

    /// Waits for a message that `wanted` accepts and returns the first such.
    pub async fn wait_for(&self, what: &str, wanted: impl Fn(&Message) -> bool) -> Message {
        until(what, async || self.all().into_iter().find(&wanted)).await
    }
}

impl Drop for Collector {
    fn drop(&mut self) {
        self.task.abort();
    }
}

/// What the broker keeps under a filter, read by a client that connects anew.
///
/// A marker published behind the subscription tells when all retained messages have come.
pub async fn retained(port: u16, filter: &str) -> Vec<Message> {
    let id = format!("retained-{}", crate::free_port());
    let marker = format!("test/marker/{id}");
    let collector = Collector::start(port, &id, filter).await;
    let behind = Collector::start(port, &format!("{id}-marker"), &marker).await;
    let mut publisher = crate::Publisher::new(port, &format!("{id}-publisher"));
    publisher.publish(&marker, "here").await;
    behind.wait_for("the marker", |_| true).await;
    // The broker serves a subscription's retained messages before its SUBACK's client sees later traffic;
    // a second look after a pause costs little and covers a client that is slow to read.
    tokio::time::sleep(Duration::from_millis(200)).await;
    collector.all().into_iter().filter(|m| m.retained).collect()
}
