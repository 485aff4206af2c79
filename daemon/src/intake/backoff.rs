//! How long to wait before trying again.

use std::time::Duration;

/// Waits that double from the first to the longest, each within a quarter of its length up or down, so that the sources of
/// many sites do not come back to one broker at the same moment.
#[derive(Debug, Clone)]
pub struct Backoff {
    first: Duration,
    longest: Duration,
    next: Duration,
}

impl Backoff {
    /// From `first` to `longest`.
    #[must_use]
    pub fn new(first: Duration, longest: Duration) -> Self {
        Self {
            first,
            longest,
            next: first,
        }
    }

    /// The next wait.
    pub fn wait(&mut self) -> Duration {
        let now = self.next;
        self.next = now.saturating_mul(2).min(self.longest);
        now.mul_f64(0.75 + 0.5 * fastrand::f64()).min(self.longest)
    }

    /// All is well: the next wait is the first again.
    pub fn reset(&mut self) {
        self.next = self.first;
    }
}

impl Default for Backoff {
    /// 1 s to 60 s.
    fn default() -> Self {
        Self::new(Duration::from_secs(1), Duration::from_secs(60))
    }
}

#[cfg(test)]
mod tests {
    use super::Backoff;
    use std::time::Duration;

    #[test]
    fn waits_double_up_to_the_longest_and_start_again() {
        let mut backoff = Backoff::default();
        let waits: Vec<f64> = (0..9).map(|_| backoff.wait().as_secs_f64()).collect();
        for (wait, nominal) in waits.iter().zip([1.0, 2.0, 4.0, 8.0, 16.0, 32.0, 60.0]) {
            assert!(
                (0.75 * nominal..=1.25 * nominal).contains(wait),
                "{waits:?}"
            );
        }
        assert!(waits.iter().all(|&w| w <= 60.0));
        backoff.reset();
        assert!(backoff.wait() <= Duration::from_millis(1250));
    }
}
