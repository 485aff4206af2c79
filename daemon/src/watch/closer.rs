//! Decides when a block is closed: sample time has passed its end by the lateness wait, or the wall clock has.

use serde::{Deserialize, Serialize};

use crate::record::{Reading, Stamp};

/// Where closing stands. Part of what is saved with the position in the journal.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Closer {
    /// First block not yet closed; unknown until something is read or a ground file says.
    pub next: Option<i64>,
    /// Newest sample instant seen that the receiving clock vouches for.
    pub newest: Option<Stamp>,
}

impl Closer {
    /// Takes in committed readings. A reading's instant counts no further than the clock that received it,
    /// so that one wrong future stamp closes nothing.
    pub fn take(&mut self, readings: &[Reading]) {
        let seen = readings.iter().map(|r| r.sampled.min(r.received)).max();
        self.newest = self.newest.max(seen);
    }

    /// Takes in the wall clock, so that blocks close in silence too.
    pub fn tick(&mut self, wall: Stamp, grace: i64) {
        if self.next.is_some() {
            self.newest = self.newest.max(Some(wall.plus(-grace)));
        }
    }

    /// Blocks that may be closed now, in order; they count as closed afterwards.
    pub fn close(&mut self, length: i64, lateness: i64) -> std::ops::Range<i64> {
        let Some(newest) = self.newest else {
            return 0..0;
        };
        let first_open = newest.plus(-lateness).0.div_euclid(length);
        let next = *self.next.get_or_insert(first_open);
        if first_open <= next {
            return next..next;
        }
        self.next = Some(first_open);
        next..first_open
    }

    /// Whether a block has been closed already.
    #[must_use]
    pub fn is_closed(&self, block: i64) -> bool {
        self.next.is_some_and(|next| block < next)
    }
}

#[cfg(test)]
mod tests {
    use super::Closer;
    use crate::record::Stamp;

    const HOUR: i64 = 3600 * Stamp::SECOND;

    #[test]
    fn blocks_close_after_the_lateness_wait_and_once() {
        let mut c = Closer {
            next: Some(10),
            newest: Some(Stamp(11 * HOUR)),
        };
        assert!(c.close(HOUR, 120 * Stamp::SECOND).is_empty());
        c.newest = Some(Stamp(11 * HOUR + 120 * Stamp::SECOND));
        assert_eq!(c.close(HOUR, 120 * Stamp::SECOND), 10..11);
        assert!(c.close(HOUR, 120 * Stamp::SECOND).is_empty());
        assert!(c.is_closed(10) && !c.is_closed(11));
    }

    #[test]
    fn silence_closes_blocks_by_the_wall_clock() {
        let mut c = Closer {
            next: Some(10),
            newest: Some(Stamp(10 * HOUR)),
        };
        c.tick(Stamp(13 * HOUR), HOUR);
        assert_eq!(c.close(HOUR, 0), 10..12);
    }

    #[test]
    fn the_first_block_closed_is_the_one_after_the_start() {
        let mut c = Closer {
            next: None,
            newest: Some(Stamp(5 * HOUR + 1)),
        };
        assert!(c.close(HOUR, 0).is_empty());
        c.newest = Some(Stamp(7 * HOUR));
        assert_eq!(c.close(HOUR, 0), 5..7);
    }
}
