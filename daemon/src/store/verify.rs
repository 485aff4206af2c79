//! What must hold of the tables together, looked at from outside the daemon.

use std::fmt;

use super::error::{Result, StoreError};
use super::reader::{Reader, entry_kind};
use super::sql;
use super::writer::THINNED_THROUGH;
use crate::record::EntryKind;

/// Something that does not hold.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Problem {
    /// Where: the table.
    pub table: &'static str,
    /// What is wrong.
    pub what: String,
}

impl fmt::Display for Problem {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}: {}", self.table, self.what)
    }
}

/// Entries looked at in one piece.
const PIECE: i64 = 10_000;

impl Reader {
    /// Checks the database file and what must hold between its tables. Nothing is changed; an empty list is good.
    /// It reads the whole store, so it takes its time.
    ///
    /// # Errors
    /// The database cannot be read at all.
    pub async fn verify_integrity(&self) -> Result<Vec<Problem>> {
        let mut problems = Vec::new();
        let lines: Vec<String> = match sqlx::query_scalar(sql::INTEGRITY_CHECK)
            .fetch_all(&self.pool)
            .await
            .map_err(StoreError::from)
        {
            Ok(lines) => lines,
            Err(StoreError::Damaged(why)) => vec![why],
            Err(other) => return Err(other),
        };
        for line in lines.into_iter().filter(|line| line != "ok") {
            problems.push(problem("database", line));
        }
        if !problems.is_empty() {
            // The tables of a damaged file prove nothing.
            return Ok(problems);
        }
        self.check_references(&mut problems).await?;
        self.check_journal(&mut problems).await?;
        self.check_alarms(&mut problems).await?;
        Ok(problems)
    }

    async fn check_references(&self, problems: &mut Vec<Problem>) -> Result<()> {
        let broken: Vec<(String, Option<i64>, String)> = sqlx::query_as(sql::FOREIGN_KEY_CHECK)
            .fetch_all(&self.pool)
            .await?;
        for (table, row, parent) in broken {
            let row = row.map_or_else(String::new, |row| format!(" row {row}"));
            problems.push(problem(
                "references",
                format!("{table}{row} names what {parent} does not have"),
            ));
        }
        for (table, statement, what) in [
            (
                "reading",
                sql::STRAY_CHANNEL,
                "rows of a channel without a name",
            ),
            (
                "reading",
                sql::STRAY_ARRIVAL,
                "rows that no batch of the journal names",
            ),
        ] {
            let count: i64 = sqlx::query_scalar(statement).fetch_one(&self.pool).await?;
            if count > 0 {
                problems.push(problem(table, format!("{count} {what}")));
            }
        }
        let strays: Vec<i64> = sqlx::query_scalar(sql::STRAY_STEP)
            .fetch_all(&self.pool)
            .await?;
        for block in strays {
            problems.push(problem(
                "step",
                format!("block {block} points to an entry that judges nothing"),
            ));
        }
        Ok(())
    }

    async fn check_journal(&self, problems: &mut Vec<Problem>) -> Result<()> {
        // Up to here batches may have gone with their readings.
        let thinned = self.thinned_through().await?;
        let (count, first, last): (i64, i64, i64) = sqlx::query_as(sql::SEQ_GAPS)
            .bind(thinned)
            .fetch_one(&self.pool)
            .await?;
        if count > 0 && (first != thinned + 1 || last != thinned + count) {
            problems.push(problem(
                "journal",
                format!("{count} entries after {thinned} are numbered {first} to {last}"),
            ));
        }
        let last = last.max(thinned);
        let position: i64 = sqlx::query_scalar(sql::DESK_POSITION)
            .fetch_one(&self.pool)
            .await?;
        if position > last {
            problems.push(problem(
                "desk",
                format!("it stands at entry {position}, the journal ends at {last}"),
            ));
        }
        let mut seq = 0;
        loop {
            let rows: Vec<(i64, i64, String)> = sqlx::query_as(sql::ENTRIES_AFTER)
                .bind(seq)
                .bind(PIECE)
                .fetch_all(&self.pool)
                .await?;
            let Some(end) = rows.last().map(|row| row.0) else {
                break;
            };
            for (seq, _, payload) in rows {
                if let Err(error) = entry_kind(seq, &payload) {
                    problems.push(problem("journal", error.to_string()));
                }
            }
            seq = end;
        }
        self.check_batches(problems).await
    }

    /// Every batch has the readings it was journalled with; from the oldest ones retention may have taken some.
    async fn check_batches(&self, problems: &mut Vec<Problem>) -> Result<()> {
        let thinned = self.thinned_through().await?;
        let mut seq = 0;
        loop {
            let rows: Vec<(i64, String, i64)> = sqlx::query_as(sql::BATCH_ENTRIES)
                .bind(seq)
                .bind(PIECE)
                .fetch_all(&self.pool)
                .await?;
            let Some(end) = rows.last().map(|row| row.0) else {
                return Ok(());
            };
            for (seq, payload, stored) in rows {
                let Ok(EntryKind::Batch { readings }) = entry_kind(seq, &payload) else {
                    // Told of by the walk through the journal.
                    continue;
                };
                let journalled = i64::from(readings);
                if stored > journalled || (stored < journalled && seq > thinned) {
                    problems.push(problem(
                        "reading",
                        format!("batch {seq} has {stored} readings, journalled with {journalled}"),
                    ));
                }
            }
            seq = end;
        }
    }

    /// The last batch that may have lost readings.
    async fn thinned_through(&self) -> Result<i64> {
        let stored = self.meta(THINNED_THROUGH).await?;
        Ok(stored.and_then(|text| text.parse().ok()).unwrap_or(0))
    }

    async fn check_alarms(&self, problems: &mut Vec<Problem>) -> Result<()> {
        for (statement, what) in [
            (
                sql::ALARM_BEHIND,
                "does not stand as its last transition left it",
            ),
            (
                sql::STRAY_TRANSITION,
                "has a history and is not in the table",
            ),
        ] {
            let names: Vec<String> = sqlx::query_scalar(statement).fetch_all(&self.pool).await?;
            for name in names {
                problems.push(problem("alarm", format!("{name} {what}")));
            }
        }
        Ok(())
    }
}

fn problem(table: &'static str, what: String) -> Problem {
    Problem { table, what }
}
