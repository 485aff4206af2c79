//! Trouble that repeats is logged once, then counted.

use std::time::{Duration, Instant};

/// A run of the same trouble, with no quiet as long as [`Burst::QUIET`] in it.
#[derive(Debug, Clone, Copy, Default)]
pub struct Burst {
    /// When it last happened, and how often since the run began.
    running: Option<(Instant, u64)>,
}

impl Burst {
    /// A run ends after this long without trouble.
    pub const QUIET: Duration = Duration::from_secs(60);

    /// It happened. True for the first of a run: the one to log.
    pub fn hit(&mut self, now: Instant) -> bool {
        match &mut self.running {
            Some((last, count)) => {
                *last = now;
                *count += 1;
                false
            }
            None => {
                self.running = Some((now, 1));
                true
            }
        }
    }

    /// How often it happened, once the run has ended by quiet; `None` while it goes on and where there is none.
    pub fn ended(&mut self, now: Instant) -> Option<u64> {
        let (last, count) = self.running?;
        if now.saturating_duration_since(last) < Self::QUIET {
            return None;
        }
        self.running = None;
        Some(count)
    }

    /// How often it happened, where it is known to be over; `None` where there was none.
    pub fn over(&mut self) -> Option<u64> {
        self.running.take().map(|(_, count)| count)
    }
}

#[cfg(test)]
mod tests {
    use super::Burst;
    use std::time::Instant;

    #[test]
    fn only_the_first_of_a_run_is_logged_and_the_end_gives_the_count() {
        let start = Instant::now();
        let mut burst = Burst::default();
        assert_eq!(burst.ended(start), None);
        assert!(burst.hit(start));
        let soon = start + Burst::QUIET / 2;
        assert!(!burst.hit(soon));
        assert_eq!(
            burst.ended(start + Burst::QUIET),
            None,
            "the second hit keeps it going"
        );
        assert_eq!(burst.ended(soon + Burst::QUIET), Some(2));
        assert_eq!(burst.ended(soon + Burst::QUIET), None);
        assert!(burst.hit(soon + Burst::QUIET), "a new run");
    }
}
