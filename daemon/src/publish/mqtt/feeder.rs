//! Reads and clears the outbox for the session, one ask after the other.

use std::time::Duration;

use tokio::sync::mpsc;

use super::OutboxSource;
use super::window::Ask;
use crate::record::Outgoing;

/// Wait after the outbox could not be read or cleared.
const AGAIN: Duration = Duration::from_secs(1);

/// Answer to an [`Ask`].
#[derive(Debug)]
pub(super) enum Answer {
    Rows(u64, Vec<(i64, Outgoing)>),
    Retained(u64, Vec<Outgoing>),
    Sent,
}

/// Answers asks in their order until the session is gone. An ask that fails is tried again until it succeeds: without
/// the outbox there is nothing else to do.
pub(super) async fn feed<S: OutboxSource>(
    mut source: S,
    mut asks: mpsc::Receiver<Ask>,
    answers: mpsc::Sender<Answer>,
) {
    while let Some(ask) = asks.recv().await {
        let mut complained = false;
        let answer = loop {
            let tried = match &ask {
                Ask::Rows {
                    connection,
                    after,
                    limit,
                } => source
                    .next(*after, *limit)
                    .await
                    .map(|rows| Answer::Rows(*connection, rows)),
                Ask::Retained { connection } => source
                    .retained()
                    .await
                    .map(|set| Answer::Retained(*connection, set)),
                Ask::Sent(numbers) => source.sent(numbers).await.map(|()| Answer::Sent),
            };
            match tried {
                Ok(answer) => break answer,
                Err(why) => {
                    if !complained {
                        tracing::error!(%why, "the outbox cannot be used; trying again every second");
                        complained = true;
                    }
                    if asks.is_closed() {
                        return;
                    }
                    tokio::time::sleep(AGAIN).await;
                }
            }
        };
        if answers.send(answer).await.is_err() && asks.is_empty() {
            return;
        }
    }
}
