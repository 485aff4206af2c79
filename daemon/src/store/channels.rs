//! Channel names and the small numbers that stand for them.

use std::collections::HashMap;
use std::sync::{PoisonError, RwLock};

use sqlx::SqliteExecutor;

use super::error::{Result, StoreError};
use super::sql;
use crate::record::ChannelId;

/// Names by number and back, as a reader knows them. Channels are only ever added, so what is known stays true.
#[derive(Debug, Default)]
pub(super) struct Names {
    known: RwLock<Known>,
}

#[derive(Debug, Default)]
struct Known {
    names: HashMap<i64, ChannelId>,
    numbers: HashMap<ChannelId, i64>,
}

impl Names {
    pub(super) async fn refresh(&self, db: impl SqliteExecutor<'_>) -> Result<()> {
        let rows: Vec<(i64, String)> = sqlx::query_as(sql::CHANNELS).fetch_all(db).await?;
        let mut known = self.known.write().unwrap_or_else(PoisonError::into_inner);
        for (number, name) in rows {
            let name = ChannelId::from(name.as_str());
            known.numbers.insert(name.clone(), number);
            known.names.insert(number, name);
        }
        Ok(())
    }

    pub(super) fn name(&self, number: i64) -> Result<ChannelId> {
        let known = self.known.read().unwrap_or_else(PoisonError::into_inner);
        known.names.get(&number).cloned().ok_or_else(|| {
            StoreError::unreadable("a reading", format!("channel number {number} has no name"))
        })
    }

    pub(super) fn knows(&self, number: i64) -> bool {
        let known = self.known.read().unwrap_or_else(PoisonError::into_inner);
        known.names.contains_key(&number)
    }

    pub(super) fn number(&self, name: &ChannelId) -> Option<i64> {
        let known = self.known.read().unwrap_or_else(PoisonError::into_inner);
        known.numbers.get(name).copied()
    }

    /// All names, sorted.
    pub(super) fn all(&self) -> Vec<ChannelId> {
        let known = self.known.read().unwrap_or_else(PoisonError::into_inner);
        let mut names: Vec<ChannelId> = known.numbers.keys().cloned().collect();
        names.sort();
        names
    }
}
