//! What the server stands before: site, store, keeper.

use std::sync::Arc;
use std::time::Duration;

use axum::http::StatusCode;
use tokio::sync::{Mutex, broadcast, mpsc, oneshot, watch};
use tokio::time::{Instant, timeout};

use super::history::History;
use super::problem::Problem;
use crate::config::Site;
use crate::control::Ask;
use crate::record::{Command, CommandKind, Names, Reply, Snapshot, Stamp};
use crate::store::Reader;

/// How long the keeper may take to answer a person.
const ANSWER: Duration = Duration::from_secs(50);
/// How long a look at the keeper's state serves for others who ask.
const FRESH: Duration = Duration::from_secs(1);
/// How long a look may take before the last one shown must do.
const LOOK: Duration = Duration::from_secs(2);

/// What the server stands before.
pub struct Behind {
    /// The site.
    pub site: Arc<Site>,
    /// What is stored.
    pub reader: Reader,
    /// Where people's commands go.
    pub commands: mpsc::Sender<Ask>,
    /// What the keeper shows.
    pub snapshots: watch::Receiver<Arc<Snapshot>>,
    /// Whether all this is a replay.
    pub replay: bool,
}

/// [`Behind`], with what the server itself remembers.
pub(super) struct Asking {
    pub(super) site: Arc<Site>,
    pub(super) names: Names,
    pub(super) reader: Reader,
    pub(super) history: History,
    pub(super) replay: bool,
    /// Transitions as they are stored: number and event.
    pub(super) told: broadcast::Sender<(i64, Arc<str>)>,
    commands: mpsc::Sender<Ask>,
    snapshots: watch::Receiver<Arc<Snapshot>>,
    last: Mutex<Option<(Instant, Arc<Snapshot>)>>,
}

impl Asking {
    pub(super) fn new(behind: Behind) -> Self {
        let names = behind.site.names();
        Self {
            history: History::new(names.gauges.len()),
            names,
            site: behind.site,
            reader: behind.reader,
            replay: behind.replay,
            told: broadcast::Sender::new(512),
            commands: behind.commands,
            snapshots: behind.snapshots,
            last: Mutex::new(None),
        }
    }

    /// The state of the daemon, at most a second old; older where the keeper is busy.
    pub(super) async fn look(&self) -> Arc<Snapshot> {
        // Held while the keeper is asked: whoever comes meanwhile is served by the same look.
        let mut last = self.last.lock().await;
        if let Some((at, snapshot)) = last.as_ref()
            && at.elapsed() < FRESH
        {
            return Arc::clone(snapshot);
        }
        let show = Command {
            by: "page".to_owned(),
            note: String::new(),
            kind: CommandKind::Show,
        };
        let snapshot = match timeout(LOOK, self.send(show)).await {
            Ok(Some(Reply::State { snapshot })) => Arc::new(*snapshot),
            _ => Arc::clone(&self.snapshots.borrow()),
        };
        *last = Some((Instant::now(), Arc::clone(&snapshot)));
        snapshot
    }

    /// When the keeper last showed its state by itself.
    pub(super) fn shown(&self) -> Stamp {
        self.snapshots.borrow().taken
    }

    /// Asks the keeper for a change. It is on disk when this comes back.
    pub(super) async fn change(&self, command: Command) -> Result<String, Problem> {
        let reply = timeout(ANSWER, self.send(command)).await;
        *self.last.lock().await = None;
        match reply {
            Ok(Some(Reply::Done { text })) => Ok(text),
            Ok(Some(Reply::Refused { why })) => Err(Problem::new(StatusCode::CONFLICT, why)),
            Ok(Some(Reply::State { .. }) | None) => Err(Problem::new(
                StatusCode::SERVICE_UNAVAILABLE,
                "the daemon is stopping",
            )),
            Err(_) => Err(Problem::new(
                StatusCode::GATEWAY_TIMEOUT,
                "the daemon did not answer in time; look again to see whether it was done",
            )),
        }
    }

    async fn send(&self, command: Command) -> Option<Reply> {
        let (back, answer) = oneshot::channel();
        self.commands.send((command, back)).await.ok()?;
        answer.await.ok()
    }
}
