//! Entries of the journal that are not batches.

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
    sqlx::query(sql::ADD_ENTRY)
        .bind(seq)
        .bind(wall.0)
        .bind(name(kind))
        .bind(to_json("an entry of the journal", kind)?)
        .execute(conn)
        .await?;
    Ok(())
}

/// The kind as it is spelled in the payload.
fn name(kind: &EntryKind) -> &'static str {
    match kind {
        EntryKind::Start { .. } => "start",
        EntryKind::Batch { .. } => "batch",
        EntryKind::BlockClosed { .. } => "block-closed",
        EntryKind::Judged { .. } => "judged",
        EntryKind::WatchBlind { .. } => "watch-blind",
        EntryKind::WatchSees => "watch-sees",
        EntryKind::Tick => "tick",
        EntryKind::Person { .. } => "person",
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_are_those_of_the_payload() {
        for kind in [
            EntryKind::Start {
                version: "0".into(),
                ground: None,
            },
            EntryKind::Batch { readings: 3 },
            EntryKind::BlockClosed { block: 7 },
            EntryKind::WatchBlind {
                from: 1,
                why: String::new(),
            },
            EntryKind::WatchSees,
            EntryKind::Tick,
        ] {
            let json = serde_json::to_value(&kind).unwrap();
            assert_eq!(json["kind"], name(&kind));
        }
    }
}
