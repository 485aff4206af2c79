//! How the store is opened.

use std::path::{Path, PathBuf};
use std::time::Duration;

use sqlx::ConnectOptions;
use sqlx::sqlite::{SqliteAutoVacuum, SqliteConnectOptions, SqliteJournalMode, SqliteSynchronous};

/// What a power cut may cost.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Durability {
    /// Nothing that was answered: every commit is flushed to the disk.
    #[default]
    Full,
    /// Anything: for a temporary store that is thrown away.
    Scratch,
}

/// How the store is opened.
#[derive(Debug, Clone)]
pub struct StoreOptions {
    /// What a power cut may cost.
    pub durability: Durability,
    /// Names of the publishers; each gets every message of the outbox.
    pub targets: Vec<String>,
    /// Bytes that must be free on the disk for readings to be committed.
    pub low_water: u64,
    /// Bytes free below which the reserve is given up, so that alarms can still be written.
    pub floor: u64,
    /// Bytes set aside on the disk for alarms and outbox.
    pub reserve: u64,
    /// Rejected deliveries kept; older ones go.
    pub keep_rejected: i64,
    /// Messages that wait for one publisher at most; the oldest go, counted, when a far end stays away for ever.
    pub keep_outbox: i64,
}

impl Default for StoreOptions {
    fn default() -> Self {
        Self {
            durability: Durability::Full,
            targets: Vec::new(),
            low_water: 64 << 20,
            floor: 4 << 20,
            reserve: 8 << 20,
            keep_rejected: 200_000,
            keep_outbox: 50_000,
        }
    }
}

impl StoreOptions {
    /// For a temporary store: no flushing, no reserve, no low-water mark.
    #[must_use]
    pub fn scratch() -> Self {
        Self {
            durability: Durability::Scratch,
            low_water: 0,
            floor: 0,
            reserve: 0,
            ..Self::default()
        }
    }
}

/// The database in a store's folder.
pub(super) fn database(folder: &Path) -> PathBuf {
    folder.join("borewake.sqlite")
}

pub(super) fn writing(path: &Path, durability: Durability) -> SqliteConnectOptions {
    let synchronous = match durability {
        Durability::Full => SqliteSynchronous::Full,
        Durability::Scratch => SqliteSynchronous::Off,
    };
    SqliteConnectOptions::new()
        .filename(path)
        .create_if_missing(true)
        .auto_vacuum(SqliteAutoVacuum::Incremental)
        .journal_mode(SqliteJournalMode::Wal)
        .synchronous(synchronous)
        .foreign_keys(true)
        .busy_timeout(Duration::from_secs(5))
        .pragma("wal_autocheckpoint", "1000")
        .pragma("journal_size_limit", "67108864")
        .pragma("temp_store", "memory")
        .pragma("mmap_size", "0")
        .optimize_on_close(true, 400)
        .thread_name(|_| "store-writer".to_owned())
        .disable_statement_logging()
}

pub(super) fn reading(path: &Path) -> SqliteConnectOptions {
    SqliteConnectOptions::new()
        .filename(path)
        .read_only(true)
        .busy_timeout(Duration::from_secs(5))
        .pragma("mmap_size", "0")
        .thread_name(|_| "store-reader".to_owned())
        .disable_statement_logging()
}
