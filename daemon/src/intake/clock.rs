//! What time it is, in which run of the clock, and what is known of it.
//!
//! Keys of readings carry the clock's run, so that a step of the clock can neither overwrite nor contradict what was kept
//! before it. The daemon's wall clock stamps readings; steps are seen against the monotonic clock.

use std::path::PathBuf;
use std::sync::atomic::{AtomicI64, Ordering};
use std::sync::{Mutex, PoisonError};
use std::time::{Duration, Instant};

use crate::record::{ClockEpoch, ClockState, Stamp};

/// One look at a clock.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct ClockReading {
    /// The instant.
    pub now: Stamp,
    /// The clock's run.
    pub epoch: ClockEpoch,
    /// What is known of it.
    pub state: ClockState,
}

/// A clock that stamps readings.
pub trait Clock: Send + Sync {
    /// Looks at it.
    fn read(&self) -> ClockReading;
}

/// A wall clock that jumps against the monotonic clock by more than this has been stepped, not slewed \[us\].
pub const STEP: i64 = 2 * Stamp::SECOND;

/// Sees steps of a wall clock. The monotonic clock stands still while the machine sleeps, so waking up counts as a step too.
#[derive(Debug, Clone, Copy)]
pub struct StepWatch {
    epoch: ClockEpoch,
    /// Wall minus monotonic at the last look \[us\]; followed from look to look, so that slewing never adds up to a step.
    offset: Option<i64>,
}

impl StepWatch {
    /// Begins with this run of the clock.
    #[must_use]
    pub fn new(epoch: ClockEpoch) -> Self {
        Self {
            epoch,
            offset: None,
        }
    }

    /// The run that a look at both clocks belongs to \[us\].
    pub fn look(&mut self, wall: i64, monotonic: i64) -> ClockEpoch {
        let offset = wall.saturating_sub(monotonic);
        if let Some(before) = self.offset.replace(offset)
            && offset.saturating_sub(before).abs() > STEP
        {
            self.epoch = ClockEpoch(self.epoch.0.saturating_add(1));
        }
        self.epoch
    }
}

/// What is known of the machine's clock, from the marker its time daemon leaves once it has synchronised.
#[derive(Debug)]
struct SyncWatch {
    marker: PathBuf,
    /// When the marker was last looked for, and what is known since.
    known: Option<(Instant, ClockState)>,
}

impl SyncWatch {
    /// The marker is looked for this often at most.
    const EVERY: Duration = Duration::from_secs(10);

    /// The state now.
    fn look(&mut self, now: Instant) -> ClockState {
        if let Some((last, state)) = self.known
            && now.saturating_duration_since(last) < Self::EVERY
        {
            return state;
        }
        let state = match (self.marker.exists(), self.known) {
            (true, _) => ClockState::Synchronised,
            (false, Some((_, ClockState::Synchronised | ClockState::Holdover))) => {
                ClockState::Holdover
            }
            (false, _) => ClockState::Unsynchronised,
        };
        self.known = Some((now, state));
        state
    }
}

/// The machine's clock.
#[derive(Debug)]
pub struct SystemClock {
    start: Instant,
    looks: Mutex<(StepWatch, SyncWatch)>,
}

impl SystemClock {
    /// Left by `systemd-timesyncd`, and by other time daemons that keep to its convention, once the clock is synchronised.
    pub const MARKER: &'static str = "/run/systemd/timesync/synchronized";

    /// The machine's clock, whose run since this start has the number `epoch`: one more than any kept so far.
    #[must_use]
    pub fn new(epoch: ClockEpoch) -> Self {
        Self::with_marker(epoch, Self::MARKER.into())
    }

    /// The same with another marker of synchronisation.
    #[must_use]
    pub fn with_marker(epoch: ClockEpoch, marker: PathBuf) -> Self {
        let sync = SyncWatch {
            marker,
            known: None,
        };
        Self {
            start: Instant::now(),
            looks: Mutex::new((StepWatch::new(epoch), sync)),
        }
    }
}

impl Clock for SystemClock {
    fn read(&self) -> ClockReading {
        let now = Stamp::now();
        let instant = Instant::now();
        let monotonic = i64::try_from((instant - self.start).as_micros()).unwrap_or(i64::MAX);
        let mut looks = self.looks.lock().unwrap_or_else(PoisonError::into_inner);
        let (steps, sync) = &mut *looks;
        ClockReading {
            now,
            epoch: steps.look(now.0, monotonic),
            state: sync.look(instant),
        }
    }
}

/// A clock that somebody sets: sample time, in replay and in tests.
#[derive(Debug, Default)]
pub struct SetClock(AtomicI64);

impl SetClock {
    /// A clock that stands at `now`.
    #[must_use]
    pub fn new(now: Stamp) -> Self {
        Self(AtomicI64::new(now.0))
    }

    /// Sets it.
    pub fn set(&self, now: Stamp) {
        self.0.store(now.0, Ordering::Release);
    }
}

impl Clock for SetClock {
    fn read(&self) -> ClockReading {
        ClockReading {
            now: Stamp(self.0.load(Ordering::Acquire)),
            epoch: ClockEpoch(0),
            state: ClockState::Foreign,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_step_either_way_begins_a_new_run_and_slewing_does_not() {
        let s = Stamp::SECOND;
        let mut steps = StepWatch::new(ClockEpoch(7));
        assert_eq!(steps.look(1_000 * s, 0), ClockEpoch(7));
        // 500 ppm for a day, looked at every minute.
        for minute in 1..1440 {
            assert_eq!(
                steps.look(1_000 * s + minute * (60 * s + 30_000), minute * 60 * s),
                ClockEpoch(7)
            );
        }
        assert_eq!(steps.look(90_000 * s, 86_400 * s), ClockEpoch(8), "forward");
        assert_eq!(steps.look(90_010 * s, 86_410 * s), ClockEpoch(8));
        assert_eq!(steps.look(80_010 * s, 86_420 * s), ClockEpoch(9), "back");
    }

    #[test]
    fn the_marker_tells_synchronised_from_holdover_and_never() {
        let folder = tempfile::tempdir().unwrap();
        let marker = folder.path().join("synchronized");
        let mut sync = SyncWatch {
            marker: marker.clone(),
            known: None,
        };
        let start = Instant::now();
        assert_eq!(sync.look(start), ClockState::Unsynchronised);
        std::fs::write(&marker, "").unwrap();
        assert_eq!(
            sync.look(start),
            ClockState::Unsynchronised,
            "looked at a moment ago"
        );
        assert_eq!(
            sync.look(start + SyncWatch::EVERY),
            ClockState::Synchronised
        );
        std::fs::remove_file(&marker).unwrap();
        assert_eq!(
            sync.look(start + SyncWatch::EVERY * 2),
            ClockState::Holdover
        );
        assert_eq!(
            sync.look(start + SyncWatch::EVERY * 3),
            ClockState::Holdover
        );
    }
}
