//! Publishing to a broker: a thin task round [`window`], which holds the rules.
//!
//! Two tasks a broker. The **session** owns the connection: it waits for the connection's next event, answers of the
//! feeder, new rows, heartbeats and latest values, and never waits for anything while it hands a message over. The
//! **feeder** owns the outbox and waits for the disk in the session's stead.

mod backoff;
mod client;
mod feeder;
mod session;
mod window;

use std::future::Future;
use std::sync::Arc;
use std::time::Duration;

use thiserror::Error;
use tokio::sync::{mpsc, watch};

use crate::record::{Outgoing, Snapshot};

use backoff::Backoff;
use session::{End, Session};

/// An error of an outbox, for the log.
pub type OutboxError = Box<dyn std::error::Error + Send + Sync>;

/// The outbox of one target, as the publisher needs it. Rows have numbers that grow and are never used again.
pub trait OutboxSource: Send + 'static {
    /// Rows with numbers above `after`, in order, at most `limit`.
    fn next(
        &mut self,
        after: i64,
        limit: u32,
    ) -> impl Future<Output = Result<Vec<(i64, Outgoing)>, OutboxError>> + Send;

    /// The broker has confirmed these rows: they go.
    fn sent(&mut self, numbers: &[i64]) -> impl Future<Output = Result<(), OutboxError>> + Send;

    /// What the broker must hold, one message a topic; with empty payload, a topic that must be cleared.
    fn retained(&mut self) -> impl Future<Output = Result<Vec<Outgoing>, OutboxError>> + Send;
}

/// Where and as whom to publish.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct MqttSettings {
    /// Name or address of the broker.
    pub host: String,
    /// Its port.
    pub port: u16,
    /// User name.
    pub user: Option<String>,
    /// Password; never printed.
    pub password: Option<String>,
    /// Client id; two clients of one id throw each other out.
    pub client_id: String,
    /// Root of all topics, such as `borewake/sorrel-flat`; no slash at its end.
    pub root: String,
    /// Time between heartbeats, above zero.
    pub heartbeat: Duration,
}

impl MqttSettings {
    /// A site's usual settings: root `<topic root>/<site>`, a client id of its own, a heartbeat every 30 s.
    #[must_use]
    pub fn new(host: &str, port: u16, topic_root: &str, site: &str) -> Self {
        Self {
            host: host.to_owned(),
            port,
            user: None,
            password: None,
            client_id: format!("borewake-{site}-publish"),
            root: format!("{topic_root}/{site}"),
            heartbeat: Duration::from_secs(30),
        }
    }
}

/// Settings with which no publisher can run.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Error)]
pub enum SettingsError {
    /// The root cannot be part of a topic.
    #[error("the topic root must not be empty, hold `+` or `#`, or end in a slash")]
    Root,
    /// The heartbeat has no period.
    #[error("the time between heartbeats must be above zero")]
    Heartbeat,
}

/// Messages of which only the latest matters: topic below the root, and payload.
pub type Latest = Arc<Vec<(String, String)>>;

/// What the publisher is fed with beside the outbox.
#[derive(Debug, Clone)]
pub struct Feeds {
    /// Changes whenever the outbox has new rows.
    pub rows: watch::Receiver<i64>,
    /// The snapshot that heartbeats are made of. A heartbeat's time is when the snapshot was taken, so that a daemon
    /// that hangs shows as old.
    pub snapshot: watch::Receiver<Arc<Snapshot>>,
    /// Latest expectations.
    pub latest: watch::Receiver<Latest>,
}

/// How publishing stands.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct PublishStatus {
    /// Whether the broker is connected.
    pub connected: bool,
    /// What went wrong last; empty where nothing did.
    pub trouble: String,
    /// Connections made.
    pub connections: u64,
    /// Messages the broker confirmed.
    pub confirmed: u64,
    /// Messages that can never be sent and were put aside.
    pub refused: u64,
}

/// Publishes until `stop` completes, then says goodbye; connects again for ever.
///
/// # Errors
/// The settings cannot be used; nothing was tried.
pub async fn publish<S: OutboxSource>(
    settings: MqttSettings,
    source: S,
    feeds: Feeds,
    status: watch::Sender<PublishStatus>,
    stop: impl Future<Output = ()> + Send,
) -> Result<(), SettingsError> {
    let root = &settings.root;
    if root.is_empty() || root.ends_with('/') || root.contains(['+', '#', '\0']) {
        return Err(SettingsError::Root);
    }
    if settings.heartbeat.is_zero() {
        return Err(SettingsError::Heartbeat);
    }
    let (asks, asked) = mpsc::channel(8);
    let (answers, answered) = mpsc::channel(8);
    let feeder = tokio::spawn(feeder::feed(source, asked, answers));
    let mut session = Session::new(settings, feeds, status, asks, answered);
    let mut backoff = Backoff::default();
    let mut stop = std::pin::pin!(stop);
    loop {
        match session.run(stop.as_mut(), &mut backoff).await {
            End::Stopped => break,
            End::Lost => {
                let wait = backoff.wait(fastrand::f64());
                tokio::select! {
                    () = tokio::time::sleep(wait) => {}
                    () = stop.as_mut() => break,
                }
            }
        }
    }
    // The feeder ends when the session, and with it the sender of its asks, is gone.
    drop(session);
    if let Err(why) = feeder.await {
        tracing::error!(%why, "the task that reads the outbox ended badly");
    }
    Ok(())
}
