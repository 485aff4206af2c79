//! Messages that wait for a far end to confirm them.

use sqlx::Connection;

use super::error::Result;
use super::sql;
use super::writer::Writer;
use crate::record::Outgoing;

/// A message in the outbox of one target.
#[derive(Debug, Clone, PartialEq)]
pub struct Waiting {
    /// Its number: the order of sending, and what is handed back once the far end has confirmed.
    pub number: i64,
    /// The message.
    pub message: Outgoing,
}

impl Writer {
    pub(super) async fn sent(&mut self, target: &str, numbers: &[i64]) -> Result<()> {
        if numbers.is_empty() {
            return Ok(());
        }
        let mut tx = self.conn.begin_with("begin immediate").await?;
        for number in numbers {
            sqlx::query(sql::SENT)
                .bind(target)
                .bind(number)
                .execute(&mut *tx)
                .await?;
        }
        tx.commit().await?;
        Ok(())
    }
}
