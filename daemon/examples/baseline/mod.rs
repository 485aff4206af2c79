//! What the store is measured beside.

use std::path::Path;
use std::time::{Duration, Instant};

use anyhow::Result;
use borewake::record::Reading;
use sqlx::sqlite::{SqliteConnectOptions, SqliteJournalMode, SqliteSynchronous};
use sqlx::{ConnectOptions, Connection};

/// Inserts rows one by one with a prepared statement into the table the store uses, one transaction a batch, and nothing else.
pub(crate) async fn insert(path: &Path, batches: &[Vec<Reading>]) -> Result<Duration> {
    let mut conn = SqliteConnectOptions::new()
        .filename(path)
        .create_if_missing(true)
        .journal_mode(SqliteJournalMode::Wal)
        .synchronous(SqliteSynchronous::Full)
        .connect()
        .await?;
    sqlx::raw_sql(
        "create table reading (channel integer not null, sampled integer not null, epoch integer not null, \
         received integer not null, value real, raw real, quality integer not null, device integer not null, \
         clock integer not null, arrival integer not null, primary key (channel, sampled, epoch)) strict, without rowid; \
         create index reading_by_arrival on reading (arrival)",
    )
    .execute(&mut conn)
    .await?;
    let numbers: std::collections::HashMap<_, i64> = batches
        .iter()
        .flatten()
        .map(|reading| reading.channel.clone())
        .collect::<std::collections::BTreeSet<_>>()
        .into_iter()
        .zip(1..)
        .collect();
    let begun = Instant::now();
    for (batch, arrival) in batches.iter().zip(1_i64..) {
        let mut tx = conn.begin_with("begin immediate").await?;
        for reading in batch {
            sqlx::query("insert into reading values (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)")
                .bind(numbers.get(&reading.channel))
                .bind(reading.sampled.0)
                .bind(reading.epoch.0)
                .bind(reading.received.0)
                .bind(reading.value)
                .bind(reading.raw)
                .bind(i64::from(reading.quality.flag()))
                .bind(0_i64)
                .bind(3_i64)
                .bind(arrival)
                .execute(&mut *tx)
                .await?;
        }
        tx.commit().await?;
    }
    let time = begun.elapsed();
    conn.close().await?;
    Ok(time)
}
