//! Alarms, their history, the outbox and the retained set.

use std::fmt::Write as _;

use sha2::{Digest, Sha256};

use super::super::error::{Result, StoreError};
use super::super::outbox::Waiting;
use super::super::rows::from_spelled;
use super::super::sql;
use super::Reader;
use crate::record::{Alarm, AlarmId, Outgoing, OutgoingId, Stamp, Transition};

/// Id, kind, at, recorded, person, note, body.
type TransitionRow = (i64, String, i64, i64, Option<String>, String, String);

/// Id, kind, state, condition, acknowledgement, latch, suppression, occurrence, sequence, priority, since, body.
type AlarmRow = (
    String,
    String,
    String,
    String,
    String,
    String,
    String,
    i64,
    i64,
    String,
    i64,
    String,
);

impl Reader {
    /// All alarms as they stand, those back to normal too, by name.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn alarms(&self) -> Result<Vec<Alarm>> {
        let bodies: Vec<String> = sqlx::query_scalar(sql::ALARMS)
            .fetch_all(&self.pool)
            .await?;
        bodies.iter().map(|body| alarm(body)).collect()
    }

    /// At most `limit` steps in the life of alarms with numbers after `id`, in the order written, with their numbers.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn transitions_after(&self, id: i64, limit: i64) -> Result<Vec<(i64, Transition)>> {
        let rows: Vec<TransitionRow> = sqlx::query_as(sql::TRANSITIONS_AFTER)
            .bind(id)
            .bind(limit)
            .fetch_all(&self.pool)
            .await?;
        rows.into_iter().map(transition).collect()
    }

    /// Number of the last step in the life of any alarm; 0 for none.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn last_transition(&self) -> Result<i64> {
        Ok(sqlx::query_scalar(sql::LAST_TRANSITION)
            .fetch_one(&self.pool)
            .await?)
    }

    /// The latest steps in the life of one alarm, or of all, newest first, at most `limit`, with their numbers.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn latest_transitions(
        &self,
        alarm: Option<&AlarmId>,
        limit: i64,
    ) -> Result<Vec<(i64, Transition)>> {
        let query = match alarm {
            Some(alarm) => sqlx::query_as::<_, TransitionRow>(sql::TRANSITIONS_OF).bind(&alarm.0),
            None => sqlx::query_as::<_, TransitionRow>(sql::LATEST_TRANSITIONS),
        };
        let rows = query.bind(limit).fetch_all(&self.pool).await?;
        rows.into_iter().map(transition).collect()
    }

    /// A digest (SHA-256, hexadecimal) of the table of alarms: equal for two runs that came to the same. Wall-clock
    /// instants and journal numbers, which differ between runs, are left out.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn alarm_digest(&self) -> Result<String> {
        let rows: Vec<AlarmRow> = sqlx::query_as(sql::ALARM_TABLE)
            .fetch_all(&self.pool)
            .await?;
        let mut digest = Sha256::new();
        for row in rows {
            // Debug text quotes strings, so that no two rows run into one.
            digest.update(format!("{row:?}\n"));
        }
        let mut text = String::with_capacity(64);
        for byte in digest.finalize() {
            let _ = write!(text, "{byte:02x}");
        }
        Ok(text)
    }

    /// At most `limit` messages that wait for a target after `number`, in the order of sending.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn outbox_after(
        &self,
        target: &str,
        number: i64,
        limit: i64,
    ) -> Result<Vec<Waiting>> {
        let rows: Vec<(i64, String, u32, u32, String, String, bool)> =
            sqlx::query_as(sql::OUTBOX_AFTER)
                .bind(target)
                .bind(number)
                .bind(limit)
                .fetch_all(&self.pool)
                .await?;
        Ok(rows
            .into_iter()
            .map(
                |(number, subject, occurrence, sequence, topic, payload, retain)| Waiting {
                    number,
                    message: Outgoing {
                        id: OutgoingId {
                            subject,
                            occurrence,
                            sequence,
                        },
                        topic,
                        payload,
                        retain,
                    },
                },
            )
            .collect())
    }

    /// How many messages wait, over all targets.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn outbox_len(&self) -> Result<u64> {
        let count: i64 = sqlx::query_scalar(sql::OUTBOX_COUNT)
            .fetch_one(&self.pool)
            .await?;
        Ok(u64::try_from(count).unwrap_or(0))
    }

    /// The whole retained set, by topic: what a broker should hold, and with an empty payload the topics that it
    /// should hold no longer. Publishing all of it puts a broker right.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn retained(&self) -> Result<Vec<Outgoing>> {
        let rows: Vec<(String, String, u32, u32, String)> =
            sqlx::query_as(sql::RETAINED).fetch_all(&self.pool).await?;
        Ok(rows
            .into_iter()
            .map(|(topic, subject, occurrence, sequence, payload)| Outgoing {
                id: OutgoingId {
                    subject,
                    occurrence,
                    sequence,
                },
                topic,
                payload,
                retain: true,
            })
            .collect())
    }
}

fn alarm(body: &str) -> Result<Alarm> {
    serde_json::from_str(body).map_err(|e| StoreError::unreadable("an alarm", e))
}

fn transition(
    (id, kind, at, recorded, by, note, body): TransitionRow,
) -> Result<(i64, Transition)> {
    Ok((
        id,
        Transition {
            alarm: alarm(&body)?,
            kind: from_spelled("a transition", &kind)?,
            at: Stamp(at),
            recorded: Stamp(recorded),
            by,
            note,
        },
    ))
}
