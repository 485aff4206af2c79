//! Opening: start-up and recovery are one path.
//!
//! A store that was not closed cleanly is checked. A damaged one is set aside under another name, never
//! deleted, and a new one begins; the report says so until it is told to forget.

use std::fs;
use std::path::{Path, PathBuf};

use serde::{Deserialize, Serialize};
use sqlx::{ConnectOptions, SqliteConnection};

use super::error::{Result, StoreError};
use super::handle::Store;
use super::lock::FolderLock;
use super::options::{self, Durability, StoreOptions};
use super::space::Space;
use super::sql;
use super::writer::{CLEAN_STOP, SET_ASIDE, Statements, Writer};
use crate::record::Stamp;

/// Older versions can lose data when the write-ahead log is reset.
const SQLITE_NEEDED: &str = "3.51.3";

static MIGRATIONS: sqlx::migrate::Migrator = sqlx::migrate!("../migrations");

/// An open store, and how it was found.
#[derive(Debug)]
pub struct Opened {
    /// The store.
    pub store: Store,
    /// How it was found.
    pub report: OpenReport,
}

/// How a store was found.
#[derive(Debug, Clone, PartialEq)]
pub struct OpenReport {
    /// What was there.
    pub outcome: Outcome,
    /// The last damaged database set aside, at this start or an earlier one, until
    /// [`Store::forget_set_aside`]: an alarm is due as long as it stands here.
    pub set_aside: Option<SetAside>,
    /// Version of SQLite in use.
    pub sqlite: String,
}

/// What was in the folder.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Outcome {
    /// Nothing: the store is new.
    New,
    /// A store that had been closed.
    Clean,
    /// A store that had not been closed; it was checked and is sound.
    Recovered,
    /// A damaged database, set aside; the store is new.
    Replaced,
}

/// A damaged database that was set aside.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct SetAside {
    /// Where it is now.
    pub path: PathBuf,
    /// When it was set aside.
    pub at: Stamp,
    /// What was wrong with it.
    pub why: String,
}

impl Store {
    /// Opens the store in `folder`, making both where they are not there.
    ///
    /// # Errors
    /// The folder is in use, cannot be used, or was written by a newer program; SQLite is too old.
    pub async fn open(folder: &Path, options: StoreOptions) -> Result<Opened> {
        let (writer, report) = Writer::open(folder, options).await?;
        Ok(Opened {
            store: Self::start(folder, writer),
            report,
        })
    }
}

impl Writer {
    pub(super) async fn open(folder: &Path, options: StoreOptions) -> Result<(Self, OpenReport)> {
        fs::create_dir_all(folder).map_err(|source| StoreError::File {
            path: folder.to_owned(),
            doing: "make the folder",
            source,
        })?;
        let lock = FolderLock::take(folder)?;
        let path = options::database(folder);
        let (mut conn, outcome) = match examine(&path, options.durability).await {
            Ok(found) => found,
            Err(StoreError::Damaged(why)) => {
                let aside = set_aside(&path, why)?;
                tracing::error!(path = %aside.path.display(), why = aside.why,
                    "the database is damaged: set aside, a new one begins");
                let (mut conn, _) = examine(&path, options.durability).await?;
                let text = serde_json::to_string(&aside).map_err(|e| StoreError::Unwritable {
                    what: "the report of a damaged database",
                    why: e.to_string(),
                })?;
                set_meta(&mut conn, SET_ASIDE, &text).await?;
                (conn, Outcome::Replaced)
            }
            Err(error) => return Err(error),
        };
        set_meta(&mut conn, CLEAN_STOP, "0").await?;
        let report = OpenReport {
            outcome,
            set_aside: meta(&mut conn, SET_ASIDE)
                .await?
                .and_then(|text| serde_json::from_str(&text).ok()),
            sqlite: sqlx::query_scalar(sql::VERSION)
                .fetch_one(&mut conn)
                .await?,
        };
        drop_strange_targets(&mut conn, &options.targets).await?;
        let last = sqlx::query_scalar(sql::OUTBOX_LAST)
            .fetch_one(&mut conn)
            .await?;
        let writer = Self {
            conn,
            path,
            space: Space::new(folder, &options),
            statements: Statements::new(),
            known: None,
            outbox: tokio::sync::watch::Sender::new(last),
            options,
            _lock: lock,
        };
        Ok((writer, report))
    }
}

/// Connects for writing and makes sure of what the promises rest on.
pub(super) async fn connect(path: &Path, durability: Durability) -> Result<SqliteConnection> {
    let mut conn = options::writing(path, durability).connect().await?;
    check_version(&mut conn).await?;
    check_pragmas(&mut conn, durability).await?;
    Ok(conn)
}

/// Connects, checks what is there, and brings the schema up to date.
async fn examine(path: &Path, durability: Durability) -> Result<(SqliteConnection, Outcome)> {
    let mut conn = connect(path, durability).await?;
    let empty: bool = sqlx::query_scalar(sql::IS_EMPTY)
        .fetch_one(&mut conn)
        .await?;
    let outcome = if empty {
        Outcome::New
    } else if meta(&mut conn, CLEAN_STOP).await.ok().flatten().as_deref() == Some("1") {
        Outcome::Clean
    } else {
        quick_check(&mut conn).await?;
        Outcome::Recovered
    };
    MIGRATIONS
        .run(&mut conn)
        .await
        .map_err(|error| migration_error(path, error))?;
    Ok((conn, outcome))
}

fn migration_error(path: &Path, error: sqlx::migrate::MigrateError) -> StoreError {
    use sqlx::migrate::MigrateError;
    match error {
        MigrateError::Execute(e) | MigrateError::ExecuteMigration(e, _) => e.into(),
        other => StoreError::Newer {
            path: path.to_owned(),
            source: Box::new(other),
        },
    }
}

async fn check_version(conn: &mut SqliteConnection) -> Result<()> {
    let found: String = sqlx::query_scalar(sql::VERSION).fetch_one(conn).await?;
    if version(&found) >= version(SQLITE_NEEDED) {
        Ok(())
    } else {
        Err(StoreError::TooOld {
            found,
            needed: SQLITE_NEEDED,
        })
    }
}

fn version(text: &str) -> Vec<u32> {
    text.split('.').map(|n| n.parse().unwrap_or(0)).collect()
}

/// A library between us and SQLite may override a setting, so what matters is read back.
async fn check_pragmas(conn: &mut SqliteConnection, durability: Durability) -> Result<()> {
    let journal: String = sqlx::query_scalar(sql::JOURNAL_MODE)
        .fetch_one(&mut *conn)
        .await?;
    let synchronous: i64 = sqlx::query_scalar(sql::SYNCHRONOUS)
        .fetch_one(&mut *conn)
        .await?;
    let foreign_keys: i64 = sqlx::query_scalar(sql::FOREIGN_KEYS)
        .fetch_one(&mut *conn)
        .await?;
    let wanted_synchronous = match durability {
        Durability::Full => "2",
        Durability::Scratch => "0",
    };
    for (name, wanted, found) in [
        ("journal_mode", "wal", journal),
        ("synchronous", wanted_synchronous, synchronous.to_string()),
        ("foreign_keys", "1", foreign_keys.to_string()),
    ] {
        if found != wanted {
            return Err(StoreError::Pragma {
                name,
                wanted,
                found,
            });
        }
    }
    Ok(())
}

async fn quick_check(conn: &mut SqliteConnection) -> Result<()> {
    let lines: Vec<String> = sqlx::query_scalar(sql::QUICK_CHECK).fetch_all(conn).await?;
    if lines.iter().all(|line| line == "ok") {
        Ok(())
    } else {
        Err(StoreError::Damaged(lines.join("; ")))
    }
}

async fn meta(conn: &mut SqliteConnection, key: &str) -> Result<Option<String>> {
    Ok(sqlx::query_scalar(sql::META)
        .bind(key)
        .fetch_optional(conn)
        .await?)
}

async fn set_meta(conn: &mut SqliteConnection, key: &str, value: &str) -> Result<()> {
    sqlx::query(sql::SET_META)
        .bind(key)
        .bind(value)
        .execute(conn)
        .await?;
    Ok(())
}

/// Messages for publishers that the site file no longer has would wait for ever.
async fn drop_strange_targets(conn: &mut SqliteConnection, targets: &[String]) -> Result<()> {
    let list = serde_json::to_string(targets).map_err(|e| StoreError::Unwritable {
        what: "the list of publishers",
        why: e.to_string(),
    })?;
    sqlx::query(sql::DROP_TARGET)
        .bind(list)
        .execute(conn)
        .await?;
    Ok(())
}

/// Renames the database and what belongs to it.
fn set_aside(path: &Path, why: String) -> Result<SetAside> {
    let at = Stamp::now();
    let moved = path.with_extension(format!("damaged-{}", at.0));
    for suffix in ["", "-wal", "-shm"] {
        let (from, to) = (with_suffix(path, suffix), with_suffix(&moved, suffix));
        match fs::rename(&from, &to) {
            Ok(()) => {}
            Err(e) if e.kind() == std::io::ErrorKind::NotFound => {}
            Err(source) => {
                return Err(StoreError::File {
                    path: from,
                    doing: "set aside",
                    source,
                });
            }
        }
    }
    Ok(SetAside {
        path: moved,
        at,
        why,
    })
}

fn with_suffix(path: &Path, suffix: &str) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(suffix);
    PathBuf::from(name)
}

#[cfg(test)]
mod tests {
    use super::version;

    #[test]
    fn versions_compare_by_number() {
        assert!(version("3.51.3") >= version("3.51.3"));
        assert!(version("3.100.0") > version("3.51.3"));
        assert!(version("3.51.2") < version("3.51.3"));
        assert!(version("4.0") > version("3.51.3"));
    }
}
