//! What the alarm desk made of an entry, in one transaction.

use sqlx::{Connection, SqliteConnection};

use super::error::{Result, StoreError};
use super::rows::{spelled, to_json};
use super::sql;
use super::writer::Writer;
use crate::record::{Alarm, Outgoing, Transition};

/// All that follows from the entries up to `position`: stored as a whole or not at all.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Applied {
    /// Number of the last entry processed; larger than any applied before.
    pub position: i64,
    /// State of the desk after it, opaque to the store.
    pub desk: Vec<u8>,
    /// Steps in the life of alarms, in order.
    pub transitions: Vec<Transition>,
    /// Messages for every publisher, in order. Those to be retained change the retained set.
    pub outgoing: Vec<Outgoing>,
    /// Checkpoints of this block and later ones no longer hold, because what they were made from has changed.
    pub stale_from: Option<i64>,
}

impl Writer {
    pub(super) async fn apply(&mut self, applied: &Applied) -> Result<()> {
        self.space.for_alarms()?;
        match self.try_apply(applied).await {
            // The reserve is there for this.
            Err(StoreError::Full(_)) if self.space.release() => {
                self.mend().await?;
                self.try_apply(applied).await
            }
            other => other,
        }
    }

    async fn try_apply(&mut self, applied: &Applied) -> Result<()> {
        let known = self.known().await?;
        if applied.position <= known.position || applied.position > known.last_seq {
            return Err(StoreError::Position {
                given: applied.position,
                stands: known.position,
                ends: known.last_seq,
            });
        }
        let mut last_number = None;
        let mut tx = self.conn.begin_with("begin immediate").await?;
        for transition in &applied.transitions {
            insert_transition(&mut tx, applied.position, transition).await?;
        }
        for message in &applied.outgoing {
            for target in &self.options.targets {
                let done = sqlx::query(sql::ADD_OUTBOX)
                    .bind(target)
                    .bind(&message.id.subject)
                    .bind(message.id.occurrence)
                    .bind(message.id.sequence)
                    .bind(&message.topic)
                    .bind(&message.payload)
                    .bind(message.retain)
                    .execute(&mut *tx)
                    .await?;
                last_number = Some(done.last_insert_rowid());
            }
            if message.retain {
                sqlx::query(sql::SET_RETAINED)
                    .bind(&message.topic)
                    .bind(&message.id.subject)
                    .bind(message.id.occurrence)
                    .bind(message.id.sequence)
                    .bind(&message.payload)
                    .execute(&mut *tx)
                    .await?;
            }
        }
        if let Some(block) = applied.stale_from {
            sqlx::query(sql::DROP_CHECKPOINTS_FROM)
                .bind(block)
                .execute(&mut *tx)
                .await?;
        }
        sqlx::query(sql::SET_DESK)
            .bind(applied.position)
            .bind(&applied.desk)
            .execute(&mut *tx)
            .await?;
        tx.commit().await?;
        if let Some(known) = &mut self.known {
            known.position = applied.position;
        }
        if let Some(number) = last_number {
            self.outbox.send_replace(number);
        }
        Ok(())
    }
}

async fn insert_transition(
    conn: &mut SqliteConnection,
    position: i64,
    transition: &Transition,
) -> Result<()> {
    let alarm = &transition.alarm;
    let body = to_json("an alarm", alarm)?;
    sqlx::query(sql::ADD_TRANSITION)
        .bind(position)
        .bind(&alarm.id.0)
        .bind(alarm.occurrence)
        .bind(alarm.sequence)
        .bind(spelled("a transition", &transition.kind)?)
        .bind(transition.at.0)
        .bind(transition.recorded.0)
        .bind(transition.by.as_deref())
        .bind(&transition.note)
        .bind(&body)
        .execute(&mut *conn)
        .await?;
    set_alarm(conn, position, alarm, &body).await
}

async fn set_alarm(
    conn: &mut SqliteConnection,
    position: i64,
    alarm: &Alarm,
    body: &str,
) -> Result<()> {
    sqlx::query(sql::SET_ALARM)
        .bind(&alarm.id.0)
        .bind(spelled("an alarm", &alarm.kind)?)
        .bind(alarm.state().name())
        .bind(spelled("an alarm", &alarm.condition)?)
        .bind(spelled("an alarm", &alarm.acknowledgement)?)
        .bind(spelled("an alarm", &alarm.latch)?)
        .bind(to_json("an alarm", &alarm.suppression)?)
        .bind(alarm.occurrence)
        .bind(alarm.sequence)
        .bind(spelled("an alarm", &alarm.priority)?)
        .bind(alarm.since.0)
        .bind(position)
        .bind(body)
        .execute(conn)
        .await?;
    Ok(())
}
