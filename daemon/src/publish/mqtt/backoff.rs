//! How long to wait before the next attempt to connect.

use std::time::Duration;

/// Shortest wait.
const FIRST: Duration = Duration::from_secs(1);
/// Longest wait.
const LAST: Duration = Duration::from_secs(60);

/// Waits that double from one second to a minute, each cut by up to half at random so that many sites do not come
/// back to a broker at the same instant.
#[derive(Debug, Default)]
pub(super) struct Backoff {
    failures: u32,
}

impl Backoff {
    /// The wait after one more failure; `chance` is a number from 0 to 1.
    pub(super) fn wait(&mut self, chance: f64) -> Duration {
        let full = FIRST
            .saturating_mul(1_u32.checked_shl(self.failures.min(30)).unwrap_or(u32::MAX))
            .min(LAST);
        self.failures = self.failures.saturating_add(1);
        full.mul_f64(0.5 + 0.5 * chance.clamp(0.0, 1.0))
    }

    /// The connection proved useful.
    pub(super) fn settled(&mut self) {
        self.failures = 0;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn waits_double_from_a_second_to_a_minute() {
        let mut b = Backoff::default();
        let full: Vec<u64> = (0..8).map(|_| b.wait(1.0).as_secs()).collect();
        assert_eq!(full, [1, 2, 4, 8, 16, 32, 60, 60]);
        for _ in 0..1000 {
            assert!(b.wait(0.0) >= Duration::from_secs(30));
        }
        b.settled();
        assert_eq!(b.wait(0.0), Duration::from_millis(500));
    }
}
