//! The task that owns the one writing connection, and the messages it takes.
//!
//! Callers wait on a reply, never on the database: a caller that is dropped half-way cannot leave a
//! transaction open.

use std::collections::HashMap;
use std::path::PathBuf;

use sqlx::{Connection, SqliteConnection};
use tokio::sync::{mpsc, oneshot, watch};

use super::apply::Applied;
use super::checkpoint::Checkpoint;
use super::commit::Committed;
use super::error::{Refused, Result};
use super::lock::FolderLock;
use super::many_rows::ManyRows;
use super::open;
use super::options::StoreOptions;
use super::retention::{Retained, Retention};
use super::space::Space;
use super::sql;
use crate::record::{ChannelId, ClockEpoch, Delivery, EntryKind, Stamp};

/// One request, with where the answer goes.
pub(super) enum Ask {
    Commit(
        Vec<Delivery>,
        Stamp,
        oneshot::Sender<Result<Committed, Refused>>,
    ),
    Append(Vec<EntryKind>, Stamp, oneshot::Sender<Result<Vec<i64>>>),
    Apply(Box<Applied>, oneshot::Sender<Result<()>>),
    Sent(String, Vec<i64>, oneshot::Sender<Result<()>>),
    SaveCheckpoint(Box<Checkpoint>, oneshot::Sender<Result<()>>),
    ForgetCheckpoints(i64, oneshot::Sender<Result<()>>),
    MarkAttempt(i64, oneshot::Sender<Result<u32>>),
    ClearAttempts(oneshot::Sender<Result<()>>),
    AdvanceClock(oneshot::Sender<Result<ClockEpoch>>),
    SetMeta(String, Option<String>, oneshot::Sender<Result<()>>),
    Retain(Retention, oneshot::Sender<Result<Retained>>),
    Tidy(oneshot::Sender<Result<()>>),
    Close(oneshot::Sender<Result<()>>),
}

/// The writing connection and what must be known between transactions.
pub(super) struct Writer {
    pub(super) conn: SqliteConnection,
    pub(super) path: PathBuf,
    pub(super) options: StoreOptions,
    pub(super) space: Space,
    pub(super) statements: Statements,
    /// What memory holds of the tables; read again after any error, when it may be wrong.
    pub(super) known: Option<Known>,
    /// Number of the last message put into the outbox.
    pub(super) outbox: watch::Sender<i64>,
    /// Held until the task ends.
    pub(super) _lock: FolderLock,
}

/// Statements over many rows.
pub(super) struct Statements {
    pub(super) insert_readings: ManyRows,
    pub(super) insert_rejected: ManyRows,
    pub(super) held: ManyRows,
}

impl Statements {
    pub(super) fn new() -> Self {
        Self {
            insert_readings: ManyRows::new(sql::INSERT_READINGS, 10, ""),
            insert_rejected: ManyRows::new(sql::INSERT_REJECTED, 7, ""),
            held: ManyRows::new(sql::HELD_HEAD, 3, sql::HELD_TAIL),
        }
    }
}

/// What the writer remembers of the tables.
#[derive(Debug, Default)]
pub(super) struct Known {
    pub(super) channels: HashMap<ChannelId, i64>,
    /// Largest sampled instant, by channel number.
    pub(super) newest: HashMap<i64, Stamp>,
    pub(super) last_seq: i64,
    pub(super) position: i64,
    /// Highest number of a clock's run that is kept.
    pub(super) clock: u32,
}

impl Known {
    async fn read(conn: &mut SqliteConnection) -> Result<Self> {
        let names: Vec<(i64, String)> = sqlx::query_as(sql::CHANNELS).fetch_all(&mut *conn).await?;
        let newest: Vec<(i64, Option<i64>)> = sqlx::query_as(sql::NEWEST_OF_CHANNELS)
            .fetch_all(&mut *conn)
            .await?;
        Ok(Self {
            channels: names
                .into_iter()
                .map(|(number, name)| (ChannelId::from(name.as_str()), number))
                .collect(),
            newest: newest
                .into_iter()
                .filter_map(|(number, sampled)| Some((number, Stamp(sampled?))))
                .collect(),
            last_seq: sqlx::query_scalar(sql::LAST_SEQ)
                .fetch_one(&mut *conn)
                .await?,
            position: sqlx::query_scalar(sql::DESK_POSITION)
                .fetch_one(&mut *conn)
                .await?,
            clock: clock(conn).await?,
        })
    }
}

impl Writer {
    /// Takes requests one by one until it is told to close or nobody is left to ask.
    pub(super) async fn run(mut self, mut asks: mpsc::Receiver<Ask>) {
        while let Some(ask) = asks.recv().await {
            if self.known.is_none()
                && let Err(error) = self.mend().await
            {
                // The request will fail in its turn and say so to its caller.
                tracing::error!(%error, "the store's connection cannot be renewed");
            }
            match ask {
                Ask::Commit(deliveries, wall, reply) => {
                    let result = match self.commit(&deliveries, wall).await {
                        Ok(committed) => Ok(committed),
                        Err(error) => Err(Refused { error, deliveries }),
                    };
                    self.distrust(result.is_err());
                    let _ = reply.send(result);
                }
                Ask::Append(kinds, wall, reply) => {
                    let result = self.append(&kinds, wall).await;
                    self.answer(result, reply);
                }
                Ask::Apply(applied, reply) => {
                    let result = self.apply(&applied).await;
                    self.answer(result, reply);
                }
                Ask::Sent(target, numbers, reply) => {
                    let result = self.sent(&target, &numbers).await;
                    self.answer(result, reply);
                }
                Ask::SaveCheckpoint(checkpoint, reply) => {
                    let result = self.save_checkpoint(*checkpoint).await;
                    self.answer(result, reply);
                }
                Ask::ForgetCheckpoints(block, reply) => {
                    let result = self.forget_checkpoints(block).await;
                    self.answer(result, reply);
                }
                Ask::MarkAttempt(block, reply) => {
                    let result = self.mark_attempt(block).await;
                    self.answer(result, reply);
                }
                Ask::ClearAttempts(reply) => {
                    let result = self.clear_attempts().await;
                    self.answer(result, reply);
                }
                Ask::AdvanceClock(reply) => {
                    let result = self.advance_clock().await;
                    self.answer(result, reply);
                }
                Ask::SetMeta(key, value, reply) => {
                    let result = self.set_meta(&key, value.as_deref()).await;
                    self.answer(result, reply);
                }
                Ask::Retain(retention, reply) => {
                    let result = self.retain(retention).await;
                    self.answer(result, reply);
                }
                Ask::Tidy(reply) => {
                    let result = self.tidy().await;
                    self.answer(result, reply);
                }
                Ask::Close(reply) => {
                    let _ = reply.send(self.close().await);
                    return;
                }
            }
        }
        tracing::debug!("store left without a clean stop");
    }

    fn answer<T>(&mut self, result: Result<T>, reply: oneshot::Sender<Result<T>>) {
        self.distrust(result.is_err());
        // A caller that has gone away does not need the answer.
        let _ = reply.send(result);
    }

    fn distrust(&mut self, failed: bool) {
        if failed {
            self.known = None;
        }
    }

    /// After an error: forgets what may be wrong, and takes a new connection where the old one is of no use.
    ///
    /// The library rolls back a dropped transaction later than it lets the next one begin, so it is waited for
    /// here. A full disk or a failing one may make SQLite roll back by itself: then that rollback finds no
    /// transaction, and the library would refuse to begin another one on this connection for ever.
    pub(super) async fn mend(&mut self) -> Result<()> {
        self.known = None;
        let answers = self.conn.ping().await.is_ok();
        if !answers || self.conn.is_in_transaction() {
            tracing::warn!("the store takes a new connection after an error");
            self.conn = open::connect(&self.path, self.options.durability).await?;
        }
        Ok(())
    }

    /// What is remembered of the tables, read where need be.
    pub(super) async fn known(&mut self) -> Result<&mut Known> {
        let known = match self.known.take() {
            Some(known) => known,
            None => Known::read(&mut self.conn).await?,
        };
        Ok(self.known.insert(known))
    }

    /// Adds one to the counter of clock runs and gives the new number.
    async fn advance_clock(&mut self) -> Result<ClockEpoch> {
        let next = clock(&mut self.conn).await?.saturating_add(1);
        self.known = None;
        self.set_meta(CLOCK_EPOCH, Some(&next.to_string())).await?;
        Ok(ClockEpoch(next))
    }

    async fn set_meta(&mut self, key: &str, value: Option<&str>) -> Result<()> {
        let query = match value {
            Some(value) => sqlx::query(sql::SET_META).bind(key).bind(value),
            None => sqlx::query(sql::FORGET_META).bind(key),
        };
        query.execute(&mut self.conn).await?;
        Ok(())
    }

    /// Bounds the outbox, and empties the write-ahead log into the database.
    async fn tidy(&mut self) -> Result<()> {
        self.trim_outbox().await?;
        sqlx::query(sql::TRUNCATE_LOG)
            .execute(&mut self.conn)
            .await?;
        Ok(())
    }

    async fn close(mut self) -> Result<()> {
        self.set_meta(CLEAN_STOP, Some("1")).await?;
        // Waits for nobody: a reader beside us must not hold up the stop.
        sqlx::query(sql::CHECKPOINT_LOG)
            .execute(&mut self.conn)
            .await?;
        self.conn.close().await?;
        Ok(())
    }
}

async fn clock(conn: &mut SqliteConnection) -> Result<u32> {
    let stored: Option<String> = sqlx::query_scalar(sql::META)
        .bind(CLOCK_EPOCH)
        .fetch_optional(conn)
        .await?;
    Ok(stored.and_then(|text| text.parse().ok()).unwrap_or(0))
}

/// Keys of the meta table that are the store's own.
pub(super) const CLOCK_EPOCH: &str = "clock-epoch";
pub(super) const CLEAN_STOP: &str = "clean-stop";
pub(super) const SET_ASIDE: &str = "set-aside";
pub(super) const THINNED_THROUGH: &str = "thinned-through";
