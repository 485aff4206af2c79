//! The handle through which everybody else writes.

use std::path::{Path, PathBuf};

use tokio::sync::{mpsc, oneshot, watch};

use super::apply::Applied;
use super::checkpoint::Checkpoint;
use super::commit::Committed;
use super::error::{Refused, Result, StoreError};
use super::reader::Reader;
use super::retention::{Retained, Retention};
use super::writer::{Ask, SET_ASIDE, Writer};
use crate::record::{ClockEpoch, Delivery, EntryKind, Stamp};

/// Requests that may wait for the writer before callers do.
const QUEUE: usize = 64;

/// A handle on the store; cheap to clone. An answer means that the change is on disk.
///
/// Dropping a waiting call does not undo it: the writer finishes what it has taken.
#[derive(Debug, Clone)]
pub struct Store {
    asks: mpsc::Sender<Ask>,
    reader: Reader,
    outbox: watch::Receiver<i64>,
    folder: PathBuf,
}

impl Store {
    pub(super) fn start(folder: &Path, writer: Writer) -> Self {
        let (asks, taken) = mpsc::channel(QUEUE);
        let outbox = writer.outbox.subscribe();
        tokio::spawn(writer.run(taken));
        Self {
            asks,
            reader: Reader::over(folder),
            outbox,
            folder: folder.to_owned(),
        }
    }

    /// Reads what is stored; sees every change answered before.
    #[must_use]
    pub fn reader(&self) -> &Reader {
        &self.reader
    }

    /// The store's folder.
    #[must_use]
    pub fn folder(&self) -> &Path {
        &self.folder
    }

    /// Changes whenever messages are put into the outbox: the number of the last one.
    #[must_use]
    pub fn outbox_changes(&self) -> watch::Receiver<i64> {
        self.outbox.clone()
    }

    /// Commits what sources delivered: one transaction with one journal entry, none where nothing is new.
    /// Nothing but what [`Committed`] names may be acknowledged.
    ///
    /// # Errors
    /// Nothing was stored; the deliveries come back. [`StoreError::LowSpace`] passes by itself.
    pub async fn commit(
        &self,
        deliveries: Vec<Delivery>,
        wall: Stamp,
    ) -> Result<Committed, Refused> {
        let (reply, answer) = oneshot::channel();
        if let Err(unsent) = self.asks.send(Ask::Commit(deliveries, wall, reply)).await {
            let deliveries = match unsent.0 {
                Ask::Commit(deliveries, ..) => deliveries,
                _ => Vec::new(),
            };
            return Err(Refused {
                error: StoreError::Closed,
                deliveries,
            });
        }
        answer.await.unwrap_or_else(|_| {
            Err(Refused {
                error: StoreError::Closed,
                deliveries: Vec::new(),
            })
        })
    }

    /// Appends an entry to the journal; gives its number. A judged step is filed under its block as well.
    ///
    /// # Errors
    /// Nothing was stored. A batch is refused (only [`Store::commit`] journals batches), and so is what does not
    /// read back, such as a step with a number that is not finite.
    pub async fn append(&self, kind: EntryKind, wall: Stamp) -> Result<i64> {
        let seqs = self.append_all(vec![kind], wall).await?;
        seqs.last().copied().ok_or(StoreError::Closed)
    }

    /// Appends several entries in one transaction; gives their numbers.
    ///
    /// # Errors
    /// As [`Store::append`]; none of them was stored.
    pub async fn append_all(&self, kinds: Vec<EntryKind>, wall: Stamp) -> Result<Vec<i64>> {
        self.ask(|reply| Ask::Append(kinds, wall, reply)).await
    }

    /// Stores what the desk made of the entries up to a position, in one transaction.
    ///
    /// # Errors
    /// Nothing was stored. A position applied before, or not in the journal, is refused.
    pub async fn apply(&self, applied: Applied) -> Result<()> {
        self.ask(|reply| Ask::Apply(Box::new(applied), reply)).await
    }

    /// Removes messages a target has confirmed.
    ///
    /// # Errors
    /// None was removed.
    pub async fn sent(&self, target: &str, numbers: Vec<i64>) -> Result<()> {
        self.ask(|reply| Ask::Sent(target.to_owned(), numbers, reply))
            .await
    }

    /// Stores a checkpoint of the watch and thins the ladder.
    ///
    /// # Errors
    /// Nothing was stored.
    pub async fn save_checkpoint(&self, checkpoint: Checkpoint) -> Result<()> {
        self.ask(|reply| Ask::SaveCheckpoint(Box::new(checkpoint), reply))
            .await
    }

    /// Drops the checkpoints of `block` and later: what they were made from has changed.
    ///
    /// # Errors
    /// None was dropped.
    pub async fn forget_checkpoints_from(&self, block: i64) -> Result<()> {
        self.ask(|reply| Ask::ForgetCheckpoints(block, reply)).await
    }

    /// Marks the beginning of an attempt at a block; gives how often it has been begun since the last
    /// [`Store::clear_attempts`].
    ///
    /// # Errors
    /// Not marked.
    pub async fn mark_attempt(&self, block: i64) -> Result<u32> {
        self.ask(|reply| Ask::MarkAttempt(block, reply)).await
    }

    /// Forgets all marks: the blocks were finished.
    ///
    /// # Errors
    /// Not forgotten.
    pub async fn clear_attempts(&self) -> Result<()> {
        self.ask(Ask::ClearAttempts).await
    }

    /// Begins a new run of the clock, at a start of the daemon or a step of the clock; the first is 1.
    ///
    /// # Errors
    /// Not begun.
    pub async fn advance_clock(&self) -> Result<ClockEpoch> {
        self.ask(Ask::AdvanceClock).await
    }

    /// Keeps a small text under a name (`fingerprint`, `ground`), or forgets it.
    ///
    /// # Errors
    /// Not stored.
    pub async fn set_meta(&self, key: &str, value: Option<&str>) -> Result<()> {
        let value = value.map(ToOwned::to_owned);
        self.ask(|reply| Ask::SetMeta(key.to_owned(), value, reply))
            .await
    }

    /// Forgets that a damaged database was set aside; its file stays.
    ///
    /// # Errors
    /// Not forgotten.
    pub async fn forget_set_aside(&self) -> Result<()> {
        self.set_meta(SET_ASIDE, None).await
    }

    /// Deletes a bounded number of old raw readings and rejected deliveries.
    ///
    /// # Errors
    /// None was deleted.
    pub async fn retain(&self, retention: Retention) -> Result<Retained> {
        self.ask(|reply| Ask::Retain(retention, reply)).await
    }

    /// Empties the write-ahead log into the database; once a day is often enough.
    ///
    /// # Errors
    /// Not emptied; nothing is lost by that.
    pub async fn tidy(&self) -> Result<()> {
        self.ask(Ask::Tidy).await
    }

    /// Closes the store, for all its handles, and marks the stop as clean.
    ///
    /// # Errors
    /// The stop is not marked as clean; nothing is lost by that.
    pub async fn close(&self) -> Result<()> {
        self.reader.close().await;
        self.ask(Ask::Close).await
    }

    async fn ask<T>(&self, make: impl FnOnce(oneshot::Sender<Result<T>>) -> Ask) -> Result<T> {
        let (reply, answer) = oneshot::channel();
        self.asks
            .send(make(reply))
            .await
            .map_err(|_| StoreError::Closed)?;
        answer.await.map_err(|_| StoreError::Closed)?
    }
}
