//! Journal, steps, checkpoints and the desk's own state.

use super::super::checkpoint::{Checkpoint, CheckpointKind};
use super::super::error::{Result, StoreError};
use super::super::sql;
use super::Reader;
use crate::record::{Entry, EntryKind, Stamp, Step};

/// What the watch said of a block.
#[derive(Debug, Clone, PartialEq)]
pub struct Judged {
    /// The step, with its block.
    pub step: Step,
    /// How often the block has been judged, this time included.
    pub revision: u32,
    /// The journal entry.
    pub seq: i64,
    /// When it was written.
    pub wall: Stamp,
    /// Why the block was judged again, where it was.
    pub rerun: Option<String>,
}

/// Block, revision, seq, wall, payload.
type StepRow = (i64, u32, i64, i64, String);

/// Block, kind, at, created, fingerprint, state.
type CheckpointRow = (i64, String, i64, i64, String, Vec<u8>);

impl Reader {
    /// The last position applied and the state of the desk after it; `None` before the first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn restore(&self) -> Result<Option<(i64, Vec<u8>)>> {
        Ok(sqlx::query_as(sql::DESK).fetch_optional(&self.pool).await?)
    }

    /// Number of the last entry of the journal; 0 for none.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn last_seq(&self) -> Result<i64> {
        Ok(sqlx::query_scalar(sql::LAST_SEQ)
            .fetch_one(&self.pool)
            .await?)
    }

    /// At most `limit` entries of the journal after `seq`, in order.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn entries_after(&self, seq: i64, limit: i64) -> Result<Vec<Entry>> {
        let rows: Vec<(i64, i64, String)> = sqlx::query_as(sql::ENTRIES_AFTER)
            .bind(seq)
            .bind(limit)
            .fetch_all(&self.pool)
            .await?;
        rows.into_iter()
            .map(|(seq, wall, payload)| {
                Ok(Entry {
                    seq,
                    wall: Stamp(wall),
                    kind: entry_kind(seq, &payload)?,
                })
            })
            .collect()
    }

    /// What the watch last said of a block.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn judged(&self, block: i64) -> Result<Option<Judged>> {
        let between = self.judged_page(block, block.saturating_add(1), 1).await?;
        Ok(between.into_iter().next())
    }

    /// What the watch last said of each block from `from` up to but not `to`, in order.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn judged_between(&self, from: i64, to: i64) -> Result<Vec<Judged>> {
        self.judged_page(from, to, i64::MAX).await
    }

    /// As [`Reader::judged_between`], at most `limit` blocks: for going through a long record in pieces.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn judged_page(&self, from: i64, to: i64, limit: i64) -> Result<Vec<Judged>> {
        let rows: Vec<StepRow> = sqlx::query_as(sql::STEPS_BETWEEN)
            .bind(from)
            .bind(to)
            .bind(limit)
            .fetch_all(&self.pool)
            .await?;
        rows.into_iter().map(judged).collect()
    }

    /// All that the watch ever said of a block, oldest first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn revisions(&self, block: i64) -> Result<Vec<Judged>> {
        let rows: Vec<StepRow> = sqlx::query_as(sql::STEP_REVISIONS)
            .bind(block)
            .fetch_all(&self.pool)
            .await?;
        rows.into_iter().map(judged).collect()
    }

    /// The last block judged.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn last_judged(&self) -> Result<Option<i64>> {
        Ok(sqlx::query_scalar(sql::LAST_STEP)
            .fetch_one(&self.pool)
            .await?)
    }

    /// The newest checkpoint of a block earlier than `block` made under the same fingerprint.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn checkpoint_before(
        &self,
        block: i64,
        fingerprint: &str,
    ) -> Result<Option<Checkpoint>> {
        let row: Option<CheckpointRow> = sqlx::query_as(sql::CHECKPOINT_BEFORE)
            .bind(block)
            .bind(fingerprint)
            .fetch_optional(&self.pool)
            .await?;
        row.map(|(block, kind, at, created, fingerprint, state)| {
            Ok(Checkpoint {
                block,
                kind: CheckpointKind::from_code(&kind)?,
                at: Stamp(at),
                created: Stamp(created),
                fingerprint,
                state,
            })
        })
        .transpose()
    }

    /// How often a block has been begun and not finished.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn attempts(&self, block: i64) -> Result<u32> {
        let count: Option<u32> = sqlx::query_scalar(sql::ATTEMPTS)
            .bind(block)
            .fetch_optional(&self.pool)
            .await?;
        Ok(count.unwrap_or(0))
    }
}

pub(in crate::store) fn entry_kind(seq: i64, payload: &str) -> Result<EntryKind> {
    serde_json::from_str(payload)
        .map_err(|e| StoreError::unreadable(format!("entry {seq} of the journal"), e))
}

fn judged((block, revision, seq, wall, payload): StepRow) -> Result<Judged> {
    match entry_kind(seq, &payload)? {
        EntryKind::Judged { step, rerun } => Ok(Judged {
            step: *step,
            revision,
            seq,
            wall: Stamp(wall),
            rerun,
        }),
        _ => Err(StoreError::unreadable(
            format!("the step of block {block}"),
            format!("entry {seq} is none"),
        )),
    }
}
