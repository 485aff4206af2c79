//! Takes deliveries from all sources in turn.

use std::collections::BTreeMap;
use std::future::poll_fn;
use std::sync::Arc;
use std::task::{Context, Poll};

use tokio::sync::mpsc;

use super::{SourceHandle, Window};
use crate::record::{AckToken, Delivery, SourceName};

/// A fair merge: every turn visits each source once and takes at most a few deliveries from it.
#[derive(Debug, Default)]
pub struct Merge {
    lanes: Vec<Lane>,
    /// The lane that is visited first in the next turn.
    first: usize,
    most: usize,
}

/// One source's queue.
#[derive(Debug)]
struct Lane {
    name: SourceName,
    queue: mpsc::Receiver<Delivery>,
    window: Arc<Window>,
    open: bool,
}

impl Merge {
    /// Deliveries taken from one source in one turn.
    pub const MOST: usize = 64;

    /// Merges the sources' queues. Keep the rest of the handles: the tasks, and [`Acks::of`] them.
    #[must_use]
    pub fn new(
        queues: impl IntoIterator<Item = (SourceName, mpsc::Receiver<Delivery>, Arc<Window>)>,
    ) -> Self {
        Self::with_most(queues, Self::MOST)
    }

    /// The same with at most `most` deliveries of one source in a turn.
    #[must_use]
    pub fn with_most(
        queues: impl IntoIterator<Item = (SourceName, mpsc::Receiver<Delivery>, Arc<Window>)>,
        most: usize,
    ) -> Self {
        let lane = |(name, queue, window)| Lane {
            name,
            queue,
            window,
            open: true,
        };
        Self {
            lanes: queues.into_iter().map(lane).collect(),
            first: 0,
            most: most.max(1),
        }
    }

    /// Waits until some source has something, then takes one turn's deliveries, appending them to `out`. False when every
    /// source has stopped and its queue is empty. Safe to cancel: nothing is taken unless it is appended.
    pub async fn turn(&mut self, out: &mut Vec<Delivery>) -> bool {
        poll_fn(|cx| self.poll_turn(cx, out)).await
    }

    fn poll_turn(&mut self, cx: &mut Context<'_>, out: &mut Vec<Delivery>) -> Poll<bool> {
        let before = out.len();
        let first = self.first.min(self.lanes.len());
        let (tail, head) = self.lanes.split_at_mut(first);
        let mut open = false;
        for lane in head.iter_mut().chain(tail) {
            let mut taken = 0;
            while lane.open && taken < self.most {
                match lane.queue.poll_recv(cx) {
                    Poll::Ready(Some(delivery)) => out.push(delivery),
                    Poll::Ready(None) => lane.open = false,
                    Poll::Pending => break,
                }
                taken += 1;
            }
            open |= lane.open;
        }
        if out.len() > before {
            self.first = (self.first + 1) % self.lanes.len().max(1);
            return Poll::Ready(true);
        }
        if open {
            Poll::Pending
        } else {
            Poll::Ready(false)
        }
    }

    /// Sources that are held back until something of theirs is committed: a broker whose window is full, or a poller whose
    /// queue is. A reason to commit at once.
    pub fn full(&self) -> impl Iterator<Item = &SourceName> {
        let full =
            |lane: &&Lane| lane.window.is_full() || lane.queue.len() >= lane.queue.max_capacity();
        self.lanes.iter().filter(full).map(|lane| &lane.name)
    }
}

/// Where acknowledgements go, by source.
#[derive(Debug, Clone, Default)]
pub struct Acks(BTreeMap<SourceName, mpsc::UnboundedSender<AckToken>>);

impl Acks {
    /// Of these sources.
    #[must_use]
    pub fn of<'a>(handles: impl IntoIterator<Item = &'a SourceHandle>) -> Self {
        let one = |h: &SourceHandle| (h.name.clone(), h.acks.clone());
        Self(handles.into_iter().map(one).collect())
    }

    /// Tells the source that a delivery of its own is on disk. A source that has ended needs no telling.
    pub fn committed(&self, source: &SourceName, token: AckToken) {
        if let Some(acks) = self.0.get(source) {
            let _ = acks.send(token);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn delivery(source: &str, number: u64) -> Delivery {
        Delivery {
            source: source.into(),
            readings: Vec::new(),
            rejected: Vec::new(),
            ack: Some(AckToken(number)),
        }
    }

    type Queue = (SourceName, mpsc::Receiver<Delivery>, Arc<Window>);

    fn queue(name: &str, capacity: usize) -> (mpsc::Sender<Delivery>, Queue) {
        let (sender, receiver) = mpsc::channel(capacity);
        (sender, (name.into(), receiver, Arc::new(Window::new(3))))
    }

    #[tokio::test]
    async fn a_flooded_source_waits_for_the_quiet_one() {
        let (flood, a) = queue("broker", 1000);
        let (line, b) = queue("line", 10);
        let mut merge = Merge::with_most([a, b], 8);
        for n in 0..1000 {
            flood.try_send(delivery("broker", n)).unwrap();
        }
        for n in 0..5 {
            line.try_send(delivery("line", n)).unwrap();
            let mut out = Vec::new();
            assert!(merge.turn(&mut out).await);
            let lines = out.iter().filter(|d| d.source == "line".into()).count();
            assert_eq!((out.len(), lines), (9, 1));
        }
    }

    #[tokio::test]
    async fn full_windows_and_full_queues_are_told() {
        let (_broker, a) = queue("broker", 10);
        let (line, b) = queue("line", 2);
        let window = Arc::clone(&a.2);
        let merge = Merge::new([a, b]);
        assert_eq!(merge.full().count(), 0);
        window.set(3);
        line.try_send(delivery("line", 0)).unwrap();
        assert_eq!(merge.full().collect::<Vec<_>>(), [&"broker".into()]);
        line.try_send(delivery("line", 1)).unwrap();
        assert_eq!(merge.full().count(), 2);
    }

    proptest! {
        /// Nothing is lost, nothing is turned round within a source, and no turn gives one source more than its share.
        #[test]
        fn every_delivery_comes_once_and_in_its_sources_order(
            counts in prop::collection::vec(0_u64..40, 1..6),
            most in 1_usize..10,
        ) {
            let runtime = tokio::runtime::Builder::new_current_thread().build().unwrap();
            runtime.block_on(async {
                let mut queues = Vec::new();
                for (i, &count) in counts.iter().enumerate() {
                    let (sender, queue) = queue(&i.to_string(), 64);
                    for n in 0..count {
                        sender.try_send(delivery(&i.to_string(), n)).unwrap();
                    }
                    queues.push(queue);
                }
                let mut merge = Merge::with_most(queues, most);
                let mut next = vec![0_u64; counts.len()];
                let mut out = Vec::new();
                while merge.turn(&mut out).await {
                    let mut share = vec![0; counts.len()];
                    for delivery in out.drain(..) {
                        let i: usize = delivery.source.0.parse().unwrap();
                        assert_eq!(delivery.ack, Some(AckToken(next[i])));
                        next[i] += 1;
                        share[i] += 1;
                    }
                    assert!(share.iter().all(|&s| s <= most));
                }
                assert_eq!(next, counts);
            });
        }
    }
}
