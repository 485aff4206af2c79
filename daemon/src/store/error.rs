//! What can go wrong in the store, and what the caller may do about it.

use std::fmt;
use std::path::PathBuf;

use thiserror::Error;

use crate::record::Delivery;

/// Result of a call on the store.
pub type Result<T, E = StoreError> = std::result::Result<T, E>;

/// An error of the store.
#[derive(Debug, Error)]
#[non_exhaustive]
pub enum StoreError {
    /// Another process holds the folder.
    #[error(
        "{folder} is in use by another borewake (process {holder}); stop it or give this site a folder of its own"
    )]
    Locked {
        /// The store's folder.
        folder: PathBuf,
        /// What the lock file says of its holder.
        holder: String,
    },
    /// A file or folder cannot be used.
    #[error("{path}: cannot {doing}: {source}")]
    File {
        /// Which.
        path: PathBuf,
        /// What was tried.
        doing: &'static str,
        /// What the system said.
        source: std::io::Error,
    },
    /// There is no store in the folder.
    #[error("{path}: no store here yet; `borewake run` makes it")]
    Missing {
        /// Where the database would be.
        path: PathBuf,
    },
    /// The SQLite linked is older than the one that no longer loses a write-ahead log reset.
    #[error("SQLite {found} is linked, but {needed} or newer is needed")]
    TooOld {
        /// Version found.
        found: String,
        /// Version needed.
        needed: &'static str,
    },
    /// A pragma did not take.
    #[error("SQLite pragma {name} is {found} though {wanted} was set")]
    Pragma {
        /// Which.
        name: &'static str,
        /// What was set.
        wanted: &'static str,
        /// What was read back.
        found: String,
    },
    /// The store was written by a newer program.
    #[error(
        "{path} was written by a newer borewake ({source}); use that version or a folder of its own"
    )]
    Newer {
        /// The database.
        path: PathBuf,
        /// What the migrator said.
        source: Box<sqlx::migrate::MigrateError>,
    },
    /// The disk is nearly full: readings are not committed until space returns.
    #[error("{folder}: {available} bytes are free, below the low-water mark of {low_water}")]
    LowSpace {
        /// The store's folder.
        folder: PathBuf,
        /// Bytes free.
        available: u64,
        /// Bytes that must be free.
        low_water: u64,
    },
    /// The disk is full: even the reserve is gone.
    #[error("the disk is full: {0}")]
    Full(String),
    /// The database file is damaged. The next start sets it aside.
    #[error("the database is damaged: {0}; stop and start again to set it aside")]
    Damaged(String),
    /// A position that has been applied already, or that the journal does not have.
    #[error(
        "entry {given} cannot be applied: the desk stands at {stands}, the journal ends at {ends}"
    )]
    Position {
        /// The position given.
        given: i64,
        /// The position stored.
        stands: i64,
        /// The last entry of the journal.
        ends: i64,
    },
    /// Something that would not read back as it was written, such as a number that is not finite.
    #[error("{what} cannot be stored: {why}")]
    Unwritable {
        /// What.
        what: &'static str,
        /// Why.
        why: String,
    },
    /// A stored row that cannot be understood.
    #[error("{what} of the store cannot be read: {why}; run `borewake verify`")]
    Unreadable {
        /// Which row.
        what: String,
        /// Why.
        why: String,
    },
    /// The store has been closed, or its task has ended.
    #[error("the store is closed")]
    Closed,
    /// Any other error of the database.
    #[error("database: {0}")]
    Sql(sqlx::Error),
}

impl StoreError {
    /// Whether the database file itself is damaged.
    #[must_use]
    pub fn is_damage(&self) -> bool {
        matches!(self, Self::Damaged(_))
    }

    /// Whether the disk has no room for what was asked.
    #[must_use]
    pub fn is_space(&self) -> bool {
        matches!(self, Self::LowSpace { .. } | Self::Full(_))
    }

    pub(super) fn unreadable(what: impl Into<String>, why: impl ToString) -> Self {
        Self::Unreadable {
            what: what.into(),
            why: why.to_string(),
        }
    }
}

/// Primary result codes of SQLite: database disk image is malformed, disk full, file is not a database.
const CORRUPT: i64 = 11;
const FULL: i64 = 13;
const NOT_A_DATABASE: i64 = 26;

impl From<sqlx::Error> for StoreError {
    fn from(error: sqlx::Error) -> Self {
        let code = error
            .as_database_error()
            .and_then(|e| e.code())
            .and_then(|code| code.parse::<i64>().ok())
            // The low byte of an extended code is its primary code.
            .map(|code| code & 0xff);
        match (code, &error) {
            (Some(CORRUPT | NOT_A_DATABASE), _) => Self::Damaged(error.to_string()),
            (Some(FULL), _) => Self::Full(error.to_string()),
            (_, sqlx::Error::PoolClosed) => Self::Closed,
            _ => Self::Sql(error),
        }
    }
}

/// A commit that was refused, with what was to be committed: nothing of it was stored.
#[derive(Error)]
#[error("{error}")]
pub struct Refused {
    /// Why.
    #[source]
    pub error: StoreError,
    /// What was handed in, to be tried again.
    pub deliveries: Vec<Delivery>,
}

/// Says how much came back, not all of it.
impl fmt::Debug for Refused {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Refused")
            .field("error", &self.error)
            .field("deliveries", &self.deliveries.len())
            .finish()
    }
}

impl From<Refused> for StoreError {
    fn from(refused: Refused) -> Self {
        refused.error
    }
}
