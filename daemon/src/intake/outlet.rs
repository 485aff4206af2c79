//! Where a source puts what it has: the queue, the counts and the log.

use std::collections::BTreeMap;
use std::fmt;
use std::sync::Arc;
use std::time::Instant;

use tokio::sync::{mpsc, watch};
use tracing::{info, warn};

use super::burst::Burst;
use super::window::Window;
use crate::record::{AckToken, Delivery, Reading, RejectReason, Rejected, SourceName, SourceView};

/// A source's own end of its queue and state.
pub(crate) struct Outlet {
    source: SourceName,
    /// `None` once the source has stopped delivering.
    queue: Option<mpsc::Sender<Delivery>>,
    view: watch::Sender<SourceView>,
    window: Arc<Window>,
    refusals: BTreeMap<RejectReason, Burst>,
    trouble: Burst,
    gaps: Burst,
}

/// Nobody takes deliveries any more.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) struct Closed;

impl Outlet {
    pub(crate) fn new(
        source: SourceName,
        queue: mpsc::Sender<Delivery>,
        view: watch::Sender<SourceView>,
        window: Arc<Window>,
    ) -> Self {
        Self {
            source,
            queue: Some(queue),
            view,
            window,
            refusals: BTreeMap::new(),
            trouble: Burst::default(),
            gaps: Burst::default(),
        }
    }

    /// Name of the source.
    pub(crate) fn source(&self) -> &SourceName {
        &self.source
    }

    /// The window of unacknowledged deliveries.
    pub(crate) fn window(&self) -> &Window {
        &self.window
    }

    /// The source works.
    pub(crate) fn connected(&mut self) {
        self.say("connected");
        if let Some(failures) = self.trouble.over() {
            info!(failures, "connected again");
        } else {
            info!("connected");
        }
    }

    /// The source does not work, and is tried again.
    pub(crate) fn waiting(&mut self, why: &dyn fmt::Display) {
        self.say(&format!("waiting: {why}"));
        self.view.send_modify(|v| v.reconnects += 1);
        self.trouble(why);
    }

    /// Something goes wrong that costs no delivery: logged once per burst.
    pub(crate) fn trouble(&mut self, why: &dyn fmt::Display) {
        if self.trouble.hit(Instant::now()) {
            warn!("{why}");
        }
    }

    /// States what the source does.
    pub(crate) fn say(&self, state: &str) {
        self.view.send_modify(|v| state.clone_into(&mut v.state));
    }

    /// Hands over without waiting, as a poller must: what finds no room is a gap, and is counted.
    pub(crate) fn offer(
        &mut self,
        readings: Vec<Reading>,
        rejected: Vec<Rejected>,
    ) -> Result<(), Closed> {
        if readings.is_empty() && rejected.is_empty() {
            return Ok(());
        }
        let delivery = self.delivery(readings, rejected, None);
        let Some(queue) = &self.queue else {
            return Err(Closed);
        };
        match queue.try_send(delivery) {
            Ok(()) => Ok(()),
            Err(mpsc::error::TrySendError::Closed(_)) => Err(Closed),
            Err(mpsc::error::TrySendError::Full(lost)) => {
                let lost = u64::try_from(lost.readings.len()).unwrap_or(u64::MAX);
                self.view
                    .send_modify(|v| v.gaps = v.gaps.saturating_add(lost));
                if self.gaps.hit(Instant::now()) {
                    warn!(
                        lost,
                        "the store does not keep up: readings are lost from now on"
                    );
                }
                Ok(())
            }
        }
    }

    /// A delivery of this source, counted and its refusals logged.
    pub(crate) fn delivery(
        &mut self,
        readings: Vec<Reading>,
        rejected: Vec<Rejected>,
        ack: Option<AckToken>,
    ) -> Delivery {
        let now = Instant::now();
        for refusal in &rejected {
            if self.refusals.entry(refusal.reason).or_default().hit(now) {
                warn!(
                    reason = refusal.reason.name(),
                    channel = refusal.channel.as_ref().map(tracing::field::display),
                    raw = refusal.raw,
                    "refused: {}",
                    refusal.detail
                );
            }
        }
        self.view.send_modify(|v| {
            v.deliveries += 1;
            for refusal in &rejected {
                *v.rejected
                    .entry(refusal.reason.name().to_owned())
                    .or_default() += 1;
            }
        });
        Delivery {
            source: self.source.clone(),
            readings,
            rejected,
            ack,
        }
    }

    /// The queue, for a source that can hold its peer back and so waits for room.
    pub(crate) fn queue(&self) -> Option<mpsc::Sender<Delivery>> {
        self.queue.clone()
    }

    /// Delivers nothing more; whoever takes the deliveries sees the end of them.
    pub(crate) fn close(&mut self) {
        self.queue = None;
    }

    /// Logs the count of every burst that has ended; called now and then.
    pub(crate) fn settle(&mut self) {
        let now = Instant::now();
        for (reason, burst) in &mut self.refusals {
            if let Some(count) = burst.ended(now) {
                info!(
                    reason = reason.name(),
                    count, "no more refusals of this kind"
                );
            }
        }
        if let Some(lost) = self.gaps.ended(now) {
            info!(deliveries = lost, "no more readings are lost");
        }
        if let Some(count) = self.trouble.ended(now) {
            info!(count, "no more trouble");
        }
    }
}
