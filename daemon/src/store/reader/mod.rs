//! Reading: a pool of read-only connections, in the daemon or in another process beside it.

mod alarms;
mod journal;
mod readings;
mod walk;

use std::path::{Path, PathBuf};
use std::sync::Arc;

use sqlx::SqlitePool;
use sqlx::sqlite::SqlitePoolOptions;

use super::channels::Names;
use super::error::{Result, StoreError};
use super::options;
use super::sql;
use super::writer::THINNED_THROUGH;

pub use journal::Judged;
pub(in crate::store) use journal::entry_kind;
pub use walk::Walk;

/// Reads what is stored; cheap to clone. Each call sees one consistent state.
#[derive(Debug, Clone)]
pub struct Reader {
    pub(super) pool: SqlitePool,
    names: Arc<Names>,
    folder: Arc<PathBuf>,
}

impl Reader {
    pub(super) fn over(folder: &Path) -> Self {
        let pool = SqlitePoolOptions::new()
            .max_connections(2)
            .test_before_acquire(false)
            .idle_timeout(None)
            .max_lifetime(None)
            .connect_lazy_with(options::reading(&options::database(folder)));
        Self {
            pool,
            names: Arc::default(),
            folder: Arc::new(folder.to_owned()),
        }
    }

    /// Opens the store in `folder` for reading only, beside a running daemon or without one.
    ///
    /// # Errors
    /// There is no store, or it cannot be read.
    pub async fn open(folder: &Path) -> Result<Self> {
        let path = options::database(folder);
        if !path.exists() {
            return Err(StoreError::Missing { path });
        }
        let reader = Self::over(folder);
        reader.names.refresh(&reader.pool).await?;
        Ok(reader)
    }

    /// The store's folder.
    #[must_use]
    pub fn folder(&self) -> &Path {
        &self.folder
    }

    /// The text kept under a name by [`Store::set_meta`](super::Store::set_meta).
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn meta(&self, key: &str) -> Result<Option<String>> {
        Ok(sqlx::query_scalar(sql::META)
            .bind(key)
            .fetch_optional(&self.pool)
            .await?)
    }

    /// Whether raw readings were ever dropped for age or room.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn raw_readings_dropped(&self) -> Result<bool> {
        Ok(self.meta(THINNED_THROUGH).await?.is_some())
    }

    /// Bytes of the database in use, free pages not counted.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn bytes_used(&self) -> Result<u64> {
        let (size, count, free): (i64, i64, i64) =
            sqlx::query_as(sql::PAGES).fetch_one(&self.pool).await?;
        let used = size.saturating_mul(count.saturating_sub(free));
        Ok(u64::try_from(used).unwrap_or(0))
    }

    /// Closes the connections.
    pub async fn close(&self) {
        self.pool.close().await;
    }
}
