//! A look into a store's database, past all the program's own code.

use std::collections::BTreeSet;
use std::path::Path;

use sqlx::sqlite::{SqliteConnectOptions, SqliteConnection};
use sqlx::{Connection as _, Row as _};

/// A store opened for reading, beside or after the daemon.
pub struct Stored(SqliteConnection);

/// A row of an alarm's history without the instants that hang on the wall clock.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
pub struct Step {
    /// Alarm, occurrence and sequence.
    pub id: (String, i64, i64),
    /// What moved it.
    pub kind: String,
    /// Sample instant \[us\].
    pub at: i64,
    /// Condition and acknowledgement just after.
    pub body: (String, String),
}

impl Stored {
    /// Opens the database in a store's folder.
    ///
    /// # Panics
    /// There is none.
    pub async fn open(folder: &Path) -> Self {
        let options = SqliteConnectOptions::new()
            .filename(folder.join("borewake.sqlite"))
            .read_only(true);
        Self(
            SqliteConnection::connect_with(&options)
                .await
                .expect("a store"),
        )
    }

    /// Instants \[us\] and values of a channel, in order of instant.
    pub async fn readings(&mut self, channel: &str) -> Vec<(i64, Option<f64>)> {
        sqlx::query(
            "select sampled, value from reading join channel on channel.id = reading.channel \
             where channel.name = ?1 order by sampled, epoch",
        )
        .bind(channel)
        .fetch_all(&mut self.0)
        .await
        .expect("readings")
        .iter()
        .map(|r| (r.get(0), r.get(1)))
        .collect()
    }

    /// Reason and raw text of all that was refused, in order of arrival.
    pub async fn rejected(&mut self) -> Vec<(String, String)> {
        sqlx::query("select reason, raw from rejected order by id")
            .fetch_all(&mut self.0)
            .await
            .expect("rejected readings")
            .iter()
            .map(|r| (r.get(0), r.get(1)))
            .collect()
    }

    /// The history of alarms whose names begin with `prefix`.
    pub async fn history(&mut self, prefix: &str) -> Vec<Step> {
        sqlx::query(
            "select alarm, occurrence, sequence, kind, at, \
             json_extract(body, '$.condition'), json_extract(body, '$.acknowledgement') \
             from transition where alarm glob ?1 || '*' order by alarm, occurrence, sequence, id",
        )
        .bind(prefix)
        .fetch_all(&mut self.0)
        .await
        .expect("transitions")
        .iter()
        .map(|r| Step {
            id: (r.get(0), r.get(1), r.get(2)),
            kind: r.get(3),
            at: r.get(4),
            body: (r.get(5), r.get(6)),
        })
        .collect()
    }

    /// Name, state, occurrence and sequence of every alarm.
    pub async fn alarms(&mut self) -> BTreeSet<(String, String, i64, i64)> {
        sqlx::query("select id, state, occurrence, sequence from alarm")
            .fetch_all(&mut self.0)
            .await
            .expect("alarms")
            .iter()
            .map(|r| (r.get(0), r.get(1), r.get(2), r.get(3)))
            .collect()
    }

    /// Messages not yet confirmed by their target.
    pub async fn waiting(&mut self) -> i64 {
        sqlx::query_scalar("select count(*) from outbox")
            .fetch_one(&mut self.0)
            .await
            .expect("the outbox")
    }

    /// What SQLite itself says of the file: `ok` when it is sound.
    pub async fn integrity(&mut self) -> String {
        sqlx::query_scalar("pragma integrity_check")
            .fetch_one(&mut self.0)
            .await
            .expect("an integrity check")
    }
}
