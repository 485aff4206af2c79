//! Plays logged data through the keeper, with a clock that runs on sample time.

use thiserror::Error;

use super::{Keeper, KeeperError, Undelivered};
use crate::intake::log::{LogError, LogReader};
use crate::record::{Delivery, Reading, Stamp};

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
    held: Option<Delivery>,
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
            held: None,
        }
    }

    /// Plays the next stretch of the log; gives the clock after it, or `None` at the end.
    ///
    /// # Errors
    /// The log or the store cannot be used.
    pub async fn next(&mut self) -> Result<Option<Stamp>, PlayError> {
        let Some(delivery) = self.stretch()? else {
            return Ok(None);
        };
        let newest = delivery.readings.iter().map(|r| r.received);
        let newest = newest
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

    /// The next deliveries cut where the clock passes a tick, so that a replay's clock is never far from its readings.
    fn stretch(&mut self) -> Result<Option<Delivery>, LogError> {
        let Some(mut delivery) = self
            .held
            .take()
            .map_or_else(|| self.log.next_delivery(), |d| Ok(Some(d)))?
        else {
            return Ok(None);
        };
        let tick = |r: &Reading| r.received.0.div_euclid(TICK);
        let first = delivery.readings.first().map(tick);
        let end = delivery.readings.iter().position(|r| Some(tick(r)) > first);
        if let Some(end) = end {
            let rest = delivery.readings.split_off(end);
            self.held = Some(Delivery {
                source: delivery.source.clone(),
                readings: rest,
                rejected: Vec::new(),
                ack: None,
            });
        }
        Ok(Some(delivery))
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
        let store = self.keeper.store().clone();
        self.keeper.stop(wall).await?;
        store.close().await.map_err(KeeperError::from)?;
        Ok(())
    }
}
