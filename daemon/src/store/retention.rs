//! Raw readings go when they are old enough, oldest first and a bounded chunk at a time, and with them the batches of the
//! journal that they came in. The rest of the journal, steps, alarms and their history stay: from them `verify` still works
//! out the watch's alarms.
//!
//! The outbox is bounded too: messages for a far end that stays away for ever go, oldest first. What they told stays in the
//! history of alarms, and the state of every alarm is told anew with every connection.

use sqlx::Connection;

use super::error::Result;
use super::sql;
use super::writer::{THINNED_THROUGH, Writer};
use crate::record::Stamp;

/// What may go.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Retention {
    /// Readings sampled before this instant go.
    pub before: Stamp,
    /// About this many rows at most go in one call, so that commits are not held up.
    pub chunk: u32,
}

/// What went.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq)]
pub struct Retained {
    /// Readings deleted.
    pub readings: u64,
    /// Rejected deliveries deleted.
    pub rejected: u64,
    /// Batches deleted of which no reading is left.
    pub batches: u64,
    /// Whether there may be more to delete: call again.
    pub more: bool,
}

impl Writer {
    pub(super) async fn retain(&mut self, retention: Retention) -> Result<Retained> {
        let chunk = i64::from(retention.chunk.max(1));
        let mut channels: Vec<i64> = self.known().await?.channels.values().copied().collect();
        channels.sort_unstable();
        let mut retained = Retained::default();
        let mut left = chunk;
        let mut tx = self.conn.begin_with("begin immediate").await?;
        let mut thinned: i64 = sqlx::query_scalar::<_, String>(sql::META)
            .bind(THINNED_THROUGH)
            .fetch_optional(&mut *tx)
            .await?
            .and_then(|text| text.parse().ok())
            .unwrap_or(0);
        for channel in channels {
            if left <= 0 {
                retained.more = true;
                break;
            }
            let until: Option<i64> = sqlx::query_scalar(sql::OLDEST_CHUNK)
                .bind(channel)
                .bind(retention.before.0)
                .bind(left)
                .fetch_one(&mut *tx)
                .await?;
            let Some(until) = until else { continue };
            let arrival: i64 = sqlx::query_scalar(sql::LAST_ARRIVAL_UNTIL)
                .bind(channel)
                .bind(until)
                .fetch_one(&mut *tx)
                .await?;
            thinned = thinned.max(arrival);
            let gone = sqlx::query(sql::DROP_UNTIL)
                .bind(channel)
                .bind(until)
                .execute(&mut *tx)
                .await?
                .rows_affected();
            retained.readings += gone;
            left -= i64::try_from(gone).unwrap_or(i64::MAX);
        }
        if retained.readings > 0 {
            // Batches up to here may have lost rows; `verify` must know.
            sqlx::query(sql::SET_META)
                .bind(THINNED_THROUGH)
                .bind(thinned.to_string())
                .execute(&mut *tx)
                .await?;
        }
        retained.batches = sqlx::query(sql::DROP_EMPTY_BATCHES)
            .bind(thinned)
            .bind(chunk)
            .execute(&mut *tx)
            .await?
            .rows_affected();
        retained.rejected = sqlx::query(sql::TRIM_REJECTED)
            .bind(self.options.keep_rejected)
            .bind(retention.before.0)
            .bind(chunk)
            .execute(&mut *tx)
            .await?
            .rows_affected();
        tx.commit().await?;
        let full = u64::from(retention.chunk.max(1));
        retained.more |= left <= 0 || retained.rejected >= full || retained.batches >= full;
        // A channel whose readings are all gone has no newest any more.
        self.known = None;
        Ok(retained)
    }

    /// Drops the oldest messages of every publisher that has too many waiting, and counts them.
    pub(super) async fn trim_outbox(&mut self) -> Result<u64> {
        let mut trimmed: u64 = 0;
        for target in &self.options.targets {
            trimmed += sqlx::query(sql::TRIM_OUTBOX)
                .bind(target)
                .bind(self.options.keep_outbox)
                .execute(&mut self.conn)
                .await?
                .rows_affected();
        }
        if trimmed > 0 {
            tracing::warn!(
                trimmed,
                "the oldest messages waiting for a publisher were given up; the history of alarms has them"
            );
        }
        Ok(trimmed)
    }
}
