//! Server-sent events: every transition of an alarm, once, in order; `?after=` (or `Last-Event-ID`) fills gaps.

use std::convert::Infallible;
use std::sync::Arc;
use std::time::Duration;

use axum::extract::{Query, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::sse::{Event, KeepAlive, Sse};
use axum::response::{IntoResponse, Response};
use serde::Deserialize;
use tokio::sync::broadcast;
use tokio::sync::mpsc;
use tokio::time::{sleep, timeout};

use super::asking::Asking;
use super::problem::Problem;
use crate::publish::events;

/// Most who listen at a time.
const LISTENERS: usize = 256;
/// How often the store is looked at while somebody listens.
const EVERY: Duration = Duration::from_millis(250);
/// Transitions read at a time.
const PIECE: i64 = 200;
/// How often a sign of life is sent.
const BEAT: Duration = Duration::from_secs(15);
/// Events waiting for one listener; one who is slower reads them from the store again.
const WAITING: usize = 64;
/// How long a listener may take no event before it is cut off: it comes again with the last number it had.
const SLOW: Duration = Duration::from_secs(60);

/// Where to go on.
#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct After {
    after: Option<i64>,
}

/// `/api/v1/events`: from the number asked for, or from now on.
pub(super) async fn events(
    State(asking): State<Arc<Asking>>,
    Query(asked): Query<After>,
    headers: HeaderMap,
) -> Result<Response, Problem> {
    if asking.told.receiver_count() >= LISTENERS {
        let detail = "too many listen already";
        return Err(Problem::later(StatusCode::SERVICE_UNAVAILABLE, detail, 30));
    }
    // Before the store is read: what comes meanwhile waits here.
    let told = asking.told.subscribe();
    let again = headers.get("last-event-id");
    let again = again.and_then(|v| v.to_str().ok()?.parse().ok());
    let after = match again.or(asked.after) {
        Some(after) => after,
        None => asking.reader.last_transition().await?,
    };
    let (send, receive) = mpsc::channel(WAITING);
    tokio::spawn(feed(asking, told, after, send));
    let events = tokio_stream::wrappers::ReceiverStream::new(receive);
    let alive = KeepAlive::new().interval(BEAT).text("listening");
    Ok(Sse::new(events).keep_alive(alive).into_response())
}

type Out = mpsc::Sender<Result<Event, Infallible>>;

/// Feeds one listener until it goes or is too slow.
async fn feed(
    asking: Arc<Asking>,
    mut told: broadcast::Receiver<(i64, Arc<str>)>,
    mut after: i64,
    out: Out,
) {
    loop {
        // What is stored, to its end; then what is told.
        loop {
            let Ok(page) = asking.reader.transitions_after(after, PIECE).await else {
                return;
            };
            if page.is_empty() {
                break;
            }
            for (number, transition) in page {
                let event = events::alarm(&transition, &asking.names, asking.replay);
                if !give(&out, number, &event).await {
                    return;
                }
                after = number;
            }
        }
        loop {
            let next = tokio::select! {
                () = out.closed() => return,
                next = told.recv() => next,
            };
            match next {
                Ok((number, _)) if number <= after => {}
                Ok((number, event)) => {
                    if !give(&out, number, &event).await {
                        return;
                    }
                    after = number;
                }
                Err(broadcast::error::RecvError::Lagged(_)) => break,
                Err(broadcast::error::RecvError::Closed) => return,
            }
        }
    }
}

async fn give(out: &Out, number: i64, event: &str) -> bool {
    let event = Event::default()
        .id(number.to_string())
        .event("alarm")
        .data(event);
    matches!(timeout(SLOW, out.send(Ok(event))).await, Ok(Ok(())))
}

/// Reads each new transition once for all who listen, for ever.
pub(super) async fn follow(asking: Arc<Asking>) {
    let mut after = None;
    loop {
        sleep(EVERY).await;
        if asking.told.receiver_count() == 0 {
            // Whoever comes reads from the store up to the end.
            after = None;
            continue;
        }
        if let Err(why) = look(&asking, &mut after).await {
            tracing::warn!(%why, "alarms cannot be read for those who listen");
        }
    }
}

async fn look(asking: &Asking, after: &mut Option<i64>) -> Result<(), crate::store::StoreError> {
    let from = match *after {
        Some(after) => after,
        // A listener may have read up to a little before this: the newest are told once more, and passed over.
        None => asking.reader.last_transition().await?.saturating_sub(PIECE),
    };
    *after = Some(from);
    for (number, transition) in asking.reader.transitions_after(from, PIECE).await? {
        let event = events::alarm(&transition, &asking.names, asking.replay);
        *after = Some(number);
        // An error is that nobody listens any more.
        let _ = asking.told.send((number, event.into()));
    }
    Ok(())
}
