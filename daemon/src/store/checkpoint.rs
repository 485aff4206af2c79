//! States of the watch kept on a ladder of ages, and the marks of attempts at a block.

use sqlx::Connection;

use super::error::{Result, StoreError};
use super::sql;
use super::writer::Writer;
use crate::record::Stamp;

/// Why a checkpoint was made.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum CheckpointKind {
    /// In the course of running.
    Ladder,
    /// At a clean stop.
    Stop,
}

impl CheckpointKind {
    fn code(self) -> &'static str {
        match self {
            Self::Ladder => "ladder",
            Self::Stop => "stop",
        }
    }

    pub(super) fn from_code(code: &str) -> Result<Self> {
        match code {
            "ladder" => Ok(Self::Ladder),
            "stop" => Ok(Self::Stop),
            other => Err(StoreError::unreadable(
                "a checkpoint",
                format!("kind {other:?}"),
            )),
        }
    }
}

/// The whole state of the watch after a block.
#[derive(Debug, Clone, PartialEq)]
pub struct Checkpoint {
    /// The last block it has seen.
    pub block: i64,
    /// Why it was made.
    pub kind: CheckpointKind,
    /// Sample instant at which the block ends: ages on the ladder are differences of these.
    pub at: Stamp,
    /// Wall-clock instant of making.
    pub created: Stamp,
    /// Program, processor feature set and ground file it belongs to; under another it is no use.
    pub fingerprint: String,
    /// The state, opaque to the store.
    pub state: Vec<u8>,
}

/// What tells one checkpoint from another.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
struct Mark {
    at: i64,
    block: i64,
    kind: CheckpointKind,
}

const HOUR: i64 = 3_600 * Stamp::SECOND;

/// Ages at which a checkpoint is wanted \[us of sample time\]: 6 h, 1 d, 7 d, 30 d.
const RUNGS: [i64; 4] = [6 * HOUR, 24 * HOUR, 7 * 24 * HOUR, 30 * 24 * HOUR];

/// Which checkpoints go. Kept are the newest; the newest made at a stop; and for each rung the newest that has
/// reached its age, with the oldest that has not, which is its successor. So, with checkpoints made often, the
/// one standing on a rung is never older than twice the rung's age, and no more than ten are kept.
fn superfluous(marks: &[Mark]) -> Vec<Mark> {
    let mut sorted = marks.to_vec();
    sorted.sort_unstable();
    let Some(newest) = sorted.last().copied() else {
        return Vec::new();
    };
    let mut kept = vec![newest];
    kept.extend(
        sorted
            .iter()
            .rev()
            .find(|mark| mark.kind == CheckpointKind::Stop),
    );
    for age in RUNGS {
        let reached = sorted.partition_point(|mark| newest.at.saturating_sub(mark.at) >= age);
        let (old, young) = sorted.split_at(reached);
        kept.extend(old.last());
        kept.extend(young.first());
    }
    sorted.retain(|mark| !kept.contains(mark));
    sorted
}

impl Writer {
    /// Stores a checkpoint and drops those the ladder no longer needs.
    pub(super) async fn save_checkpoint(&mut self, checkpoint: Checkpoint) -> Result<()> {
        let mut tx = self.conn.begin_with("begin immediate").await?;
        sqlx::query(sql::SET_CHECKPOINT)
            .bind(checkpoint.block)
            .bind(checkpoint.kind.code())
            .bind(checkpoint.at.0)
            .bind(checkpoint.created.0)
            .bind(&checkpoint.fingerprint)
            .bind(&checkpoint.state)
            .execute(&mut *tx)
            .await?;
        let rows: Vec<(i64, String, i64)> = sqlx::query_as(sql::CHECKPOINT_MARKS)
            .fetch_all(&mut *tx)
            .await?;
        let marks = rows
            .into_iter()
            .map(|(block, kind, at)| {
                let kind = CheckpointKind::from_code(&kind)?;
                Ok(Mark { at, block, kind })
            })
            .collect::<Result<Vec<_>>>()?;
        for mark in superfluous(&marks) {
            sqlx::query(sql::DROP_CHECKPOINT)
                .bind(mark.block)
                .bind(mark.kind.code())
                .execute(&mut *tx)
                .await?;
        }
        tx.commit().await?;
        Ok(())
    }

    pub(super) async fn forget_checkpoints(&mut self, from_block: i64) -> Result<()> {
        sqlx::query(sql::DROP_CHECKPOINTS_FROM)
            .bind(from_block)
            .execute(&mut self.conn)
            .await?;
        Ok(())
    }

    pub(super) async fn mark_attempt(&mut self, block: i64) -> Result<u32> {
        Ok(sqlx::query_scalar(sql::MARK_ATTEMPT)
            .bind(block)
            .fetch_one(&mut self.conn)
            .await?)
    }

    pub(super) async fn clear_attempts(&mut self) -> Result<()> {
        sqlx::query(sql::CLEAR_ATTEMPTS)
            .execute(&mut self.conn)
            .await?;
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn ladder(hours: i64) -> Mark {
        Mark {
            at: hours * HOUR,
            block: hours,
            kind: CheckpointKind::Ladder,
        }
    }

    /// Makes a checkpoint every hour for a year and looks at the ladder after each.
    #[test]
    fn every_rung_keeps_one_between_its_age_and_twice_that() {
        let mut marks: Vec<Mark> = Vec::new();
        for hour in 0..24 * 365 {
            marks.push(ladder(hour));
            let gone = superfluous(&marks);
            marks.retain(|m| !gone.contains(m));
            assert!(marks.len() <= 10, "{} kept", marks.len());
            for age in RUNGS {
                // The very first checkpoint is all there is until a rung has come round once.
                if hour * HOUR < 2 * age {
                    continue;
                }
                let standing = marks
                    .iter()
                    .map(|m| hour * HOUR - m.at)
                    .filter(|a| *a >= age)
                    .min()
                    .unwrap();
                assert!(standing <= 2 * age + HOUR, "{standing} for {age}");
            }
        }
    }

    #[test]
    fn newest_and_newest_stop_stay() {
        let stop = |hours| Mark {
            kind: CheckpointKind::Stop,
            ..ladder(hours)
        };
        let marks = [ladder(1), stop(2), stop(3), ladder(3), ladder(4), ladder(5)];
        let gone = superfluous(&marks);
        assert_eq!(gone, vec![stop(2), ladder(3), ladder(4)]);
        assert!(superfluous(&[]).is_empty());
    }
}
