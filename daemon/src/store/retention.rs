//! Raw readings go when they are old enough, oldest first and a bounded chunk at a time. Journal, steps,
//! alarms and their history stay.

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
        retained.rejected = sqlx::query(sql::TRIM_REJECTED)
            .bind(self.options.keep_rejected)
            .bind(retention.before.0)
            .bind(chunk)
            .execute(&mut *tx)
            .await?
            .rows_affected();
        tx.commit().await?;
        retained.more |= left <= 0 || retained.rejected >= u64::from(retention.chunk.max(1));
        // A channel whose readings are all gone has no newest any more.
        self.known = None;
        Ok(retained)
    }
}
