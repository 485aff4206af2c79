//! Entries of the journal that are not batches.

use serde::Deserialize;
use sqlx::{Connection, SqliteConnection};

use super::error::{Result, StoreError};
use super::rows::to_json;
use super::sql;
use super::writer::Writer;
use crate::record::{EntryKind, Stamp};

impl Writer {
    /// Appends entries in one transaction; gives their numbers.
    pub(super) async fn append(&mut self, kinds: &[EntryKind], wall: Stamp) -> Result<Vec<i64>> {
        self.space.for_alarms()?;
        match self.try_append(kinds, wall).await {
            Err(StoreError::Full(_)) if self.space.release() => {
                self.mend().await?;
                self.try_append(kinds, wall).await
            }
            other => other,
        }
    }

    async fn try_append(&mut self, kinds: &[EntryKind], wall: Stamp) -> Result<Vec<i64>> {
        let first = self.known().await?.last_seq.saturating_add(1);
        let mut seqs = Vec::with_capacity(kinds.len());
        let mut tx = self.conn.begin_with("begin immediate").await?;
        for (seq, kind) in (first..).zip(kinds) {
            if matches!(kind, EntryKind::Batch { .. }) {
                return Err(StoreError::Unwritable {
                    what: "a batch",
                    why: "batches are journalled by the commit of their readings".to_owned(),
                });
            }
            insert_entry(&mut tx, seq, wall, kind).await?;
            if let EntryKind::Judged { step, .. } = kind {
                sqlx::query(sql::ADD_STEP)
                    .bind(step.block)
                    .bind(seq)
                    .execute(&mut *tx)
                    .await?;
            }
            seqs.push(seq);
        }
        tx.commit().await?;
        if let (Some(known), Some(last)) = (&mut self.known, seqs.last()) {
            known.last_seq = *last;
        }
        Ok(seqs)
    }
}

/// Writes one entry under its number.
pub(super) async fn insert_entry(
    conn: &mut SqliteConnection,
    seq: i64,
    wall: Stamp,
    kind: &EntryKind,
) -> Result<()> {
    let payload = to_json("an entry of the journal", kind)?;
    let tag: Tag<'_> = serde_json::from_str(&payload)
        .map_err(|e| StoreError::unreadable("an entry of the journal", e))?;
    sqlx::query(sql::ADD_ENTRY)
        .bind(seq)
        .bind(wall.0)
        .bind(tag.kind)
        .bind(&payload)
        .execute(conn)
        .await?;
    Ok(())
}

/// The kind as the payload spells it, so that the column cannot say otherwise.
#[derive(Deserialize)]
struct Tag<'a> {
    kind: &'a str,
}
