//! How many deliveries of a source wait for their acknowledgement.

use std::sync::atomic::{AtomicUsize, Ordering};

/// Deliveries handed over and not yet acknowledged, counted by the source and read by the writer: a broker stops sending
/// at its own limit, so a full window is a reason to commit at once.
#[derive(Debug)]
pub struct Window {
    waiting: AtomicUsize,
    limit: usize,
}

impl Window {
    /// A window of this many deliveries; 0 for a source that wants no acknowledgement.
    #[must_use]
    pub fn new(limit: usize) -> Self {
        Self {
            waiting: AtomicUsize::new(0),
            limit,
        }
    }

    /// Whether the source may be held back until something is acknowledged.
    #[must_use]
    pub fn is_full(&self) -> bool {
        self.limit > 0 && self.waiting() >= self.limit
    }

    /// Deliveries waiting.
    #[must_use]
    pub fn waiting(&self) -> usize {
        self.waiting.load(Ordering::Acquire)
    }

    /// Says how many wait.
    pub(crate) fn set(&self, waiting: usize) {
        self.waiting.store(waiting, Ordering::Release);
    }
}
