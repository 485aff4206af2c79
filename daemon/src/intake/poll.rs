//! Sources that ask: a round of all instruments at every tick.

use std::future::Future;
use std::io;
use std::time::Duration;

use tokio::time::MissedTickBehavior;

use super::Surroundings;
use super::decode::{Refusal, When, missing};
use super::link::{Over, SourceEnd};
use crate::record::{ChannelId, DeviceStatus, Reading, Rejected, SourceName};

/// What a round brought.
#[derive(Debug, Default)]
pub(crate) struct Scan {
    pub(crate) readings: Vec<Reading>,
    pub(crate) rejected: Vec<Rejected>,
    /// Whether any device answered at all.
    pub(crate) answered: bool,
    /// What else to say.
    pub(crate) trouble: Option<String>,
}

impl Scan {
    /// Readings without a value, kept so that the gap is seen.
    pub(crate) fn lose<'c>(
        &mut self,
        channels: impl IntoIterator<Item = &'c ChannelId>,
        when: When,
        device: DeviceStatus,
    ) {
        let gap = |channel| missing(channel, when, device);
        self.readings.extend(channels.into_iter().map(gap));
    }

    /// The same refusal for several channels.
    pub(crate) fn refuse<'c>(
        &mut self,
        channels: impl IntoIterator<Item = &'c ChannelId>,
        refusal: &Refusal,
        when: When,
        source: &SourceName,
        raw: &[u8],
    ) {
        let keep = |channel| {
            refusal
                .clone()
                .keep(source, Some(channel), when.received, raw)
        };
        self.rejected.extend(channels.into_iter().map(keep));
    }
}

/// All instruments of a link.
pub(crate) trait Round: Send {
    /// Asks each of them once.
    ///
    /// # Errors
    /// The link is lost.
    fn round(&mut self, around: &Surroundings) -> impl Future<Output = io::Result<Scan>> + Send;
}

/// Asks round after round until the link is lost.
pub(crate) async fn poll(round: &mut impl Round, every: Duration, end: &mut SourceEnd) -> Over {
    let mut ticks = tokio::time::interval(every.max(Duration::from_millis(1)));
    // Rounds that a slow line leaves no time for are left out, and the rest keep to the schedule.
    ticks.set_missed_tick_behavior(MissedTickBehavior::Skip);
    loop {
        ticks.tick().await;
        let scan = match round.round(&end.around).await {
            Ok(scan) => scan,
            Err(gone) => return gone.into(),
        };
        if scan.answered {
            end.alive();
        }
        match &scan.trouble {
            Some(trouble) => {
                end.outlet.say(&format!("connected, but {trouble}"));
                end.outlet.trouble(trouble);
            }
            None => end.outlet.say("connected"),
        }
        if let Err(closed) = end.outlet.offer(scan.readings, scan.rejected) {
            return closed.into();
        }
        end.outlet.settle();
    }
}
