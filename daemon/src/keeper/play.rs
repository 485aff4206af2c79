//! Plays logged data through the keeper, with a clock that runs on sample time.

use thiserror::Error;

use super::{Keeper, KeeperError, Undelivered};
use crate::intake::log::{LogError, LogReader};
use crate::record::Stamp;

/// How often the clock of a replay is journalled \[µs of sample time\].
const TICK: i64 = 3600 * Stamp::SECOND;

/// What stops a replay.
#[derive(Debug, Error)]
pub enum PlayError {
    /// The log cannot be read.
    #[error(transparent)]
    Log(#[from] LogError),
    /// The store refused what was played.
    #[error(transparent)]
    Undelivered(#[from] Undelivered),
    /// The pipeline cannot go on.
    #[error(transparent)]
    Keeper(#[from] KeeperError),
}

/// A log on its way through the keeper.
pub struct Player {
    keeper: Keeper,
    log: LogReader,
    clock: Option<Stamp>,
    rows: u64,
}

impl Player {
    /// A player at the beginning of a log.
    #[must_use]
    pub fn new(keeper: Keeper, log: LogReader) -> Self {
        Self {
            keeper,
            log,
            clock: None,
            rows: 0,
        }
    }

    /// Plays the next stretch of the log; gives the clock after it, or `None` at the end.
    ///
    /// # Errors
    /// The log or the store cannot be used.
    pub async fn next(&mut self) -> Result<Option<Stamp>, PlayError> {
        let Some(delivery) = self.log.next_delivery()? else {
            return Ok(None);
        };
        let newest = delivery
            .readings
            .iter()
            .map(|r| r.received)
            .chain(delivery.rejected.iter().map(|r| r.received))
            .max();
        let before = self.clock;
        let wall = before.max(newest).unwrap_or_default();
        self.rows += u64::try_from(delivery.readings.len()).unwrap_or(0);
        self.clock = Some(wall);
        self.keeper.deliver(vec![delivery], wall).await?;
        if before.is_none_or(|b| b.0.div_euclid(TICK) != wall.0.div_euclid(TICK)) {
            self.keeper.tick(wall).await?;
        }
        Ok(Some(wall))
    }

    /// The keeper, for requests between two stretches.
    pub fn keeper(&mut self) -> &mut Keeper {
        &mut self.keeper
    }

    /// The log.
    #[must_use]
    pub fn log(&self) -> &LogReader {
        &self.log
    }

    /// Readings played so far.
    #[must_use]
    pub fn rows(&self) -> u64 {
        self.rows
    }

    /// The clock of the replay: the newest instant played.
    #[must_use]
    pub fn clock(&self) -> Stamp {
        self.clock.unwrap_or_default()
    }

    /// Ends the replay in good order.
    ///
    /// # Errors
    /// The store cannot be used.
    pub async fn stop(self) -> Result<(), PlayError> {
        let wall = self.clock();
        Ok(self.keeper.stop(wall).await?)
    }
}
