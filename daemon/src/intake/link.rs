//! Keeps the link to instruments open: opens it, lets a conversation use it, and opens it again when it is lost.
//!
//! A kind of link is a [`Link`]; what goes on over it is a [`Talk`], which outlives any one opening. [`run`] is the one task
//! of all sources that open a link themselves.

use std::future::Future;
use std::io;

use super::backoff::Backoff;
use super::outlet::{Closed, Outlet};
use super::{Surroundings, stopped};

/// A way to instruments that is opened again and again.
pub(crate) trait Link: Send + Sync {
    /// What is open.
    type Wire: Send;

    /// Opens it.
    ///
    /// # Errors
    /// It cannot be opened now; the message names it.
    fn open(&self) -> impl Future<Output = io::Result<Self::Wire>> + Send;
}

/// What goes on over an open link.
pub(crate) trait Talk<W>: Send {
    /// Uses the wire until it is lost, or until nobody takes readings any more.
    fn talk(&mut self, wire: W, end: &mut SourceEnd) -> impl Future<Output = Over> + Send;
}

/// Why a conversation ended.
#[derive(Debug)]
pub(crate) enum Over {
    /// The wire is lost.
    Gone(io::Error),
    /// Nobody takes readings any more.
    Closed,
}

impl From<io::Error> for Over {
    fn from(error: io::Error) -> Self {
        Self::Gone(error)
    }
}

impl From<Closed> for Over {
    fn from(Closed: Closed) -> Self {
        Self::Closed
    }
}

/// A source's own end: where its readings go, what is round it, and how eagerly it opens its link again.
pub(crate) struct SourceEnd {
    pub(crate) outlet: Outlet,
    pub(crate) around: Surroundings,
    backoff: Backoff,
}

impl SourceEnd {
    pub(crate) fn new(outlet: Outlet, around: Surroundings) -> Self {
        Self {
            outlet,
            around,
            backoff: Backoff::default(),
        }
    }

    /// Something sensible came over the link: if it is lost now, it is opened again soon.
    pub(crate) fn alive(&mut self) {
        self.backoff.reset();
    }
}

/// Talks over a link until shutdown.
pub(crate) async fn run<L: Link>(
    link: L,
    mut talk: impl Talk<L::Wire>,
    outlet: Outlet,
    around: Surroundings,
) {
    let mut shutdown = around.shutdown.clone();
    let mut end = SourceEnd::new(outlet, around);
    tokio::select! {
        () = stopped(&mut shutdown) => {}
        () = keep_open(&link, &mut talk, &mut end) => {}
    }
    end.outlet.say("stopped");
}

/// Opens the link again and again, and talks while it is open.
async fn keep_open<L: Link>(link: &L, talk: &mut impl Talk<L::Wire>, end: &mut SourceEnd) {
    loop {
        let over = match link.open().await {
            Ok(wire) => {
                end.outlet.connected();
                talk.talk(wire, end).await
            }
            Err(error) => Over::Gone(error),
        };
        let Over::Gone(error) = over else {
            return;
        };
        end.outlet.waiting(&error);
        end.outlet.settle();
        tokio::time::sleep(end.backoff.wait()).await;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::intake::clock::SetClock;
    use crate::intake::{Conversions, Window};
    use crate::record::{SourceView, Stamp};
    use std::sync::Arc;
    use std::sync::atomic::{AtomicU32, Ordering};
    use std::time::Duration;
    use tokio::sync::{mpsc, watch};

    /// Opens from the third try on.
    struct Third(AtomicU32);

    impl Link for Third {
        type Wire = u32;

        async fn open(&self) -> io::Result<u32> {
            let tries = self.0.fetch_add(1, Ordering::Relaxed) + 1;
            if tries < 3 {
                return Err(io::Error::other("not yet"));
            }
            Ok(tries)
        }
    }

    /// Loses the wire at once, and wants no more from the fifth on.
    struct Loses(Arc<AtomicU32>);

    impl Talk<u32> for Loses {
        async fn talk(&mut self, wire: u32, end: &mut SourceEnd) -> Over {
            self.0.store(wire, Ordering::Relaxed);
            end.alive();
            if wire >= 5 {
                return Closed.into();
            }
            io::Error::other("lost").into()
        }
    }

    #[tokio::test]
    async fn a_lost_link_is_opened_again_and_each_loss_is_counted() {
        let (queue, _deliveries) = mpsc::channel(1);
        let (view, state) = watch::channel(SourceView::default());
        let (_stop, shutdown) = watch::channel(false);
        let around = Surroundings {
            site: "test".to_owned(),
            clock: Arc::new(SetClock::new(Stamp(0))),
            conversions: Arc::new(Conversions::default()),
            shutdown,
        };
        let outlet = Outlet::new("line".into(), queue, view, Arc::new(Window::new(0)));
        let millisecond = Duration::from_millis(1);
        let mut end = SourceEnd {
            backoff: Backoff::new(millisecond, millisecond),
            ..SourceEnd::new(outlet, around)
        };
        let last = Arc::new(AtomicU32::new(0));
        let mut talk = Loses(Arc::clone(&last));
        keep_open(&Third(AtomicU32::new(0)), &mut talk, &mut end).await;
        assert_eq!(last.load(Ordering::Relaxed), 5);
        assert_eq!(state.borrow().reconnects, 4, "two refused, two lost");
        assert!(state.borrow().state.starts_with("connected"));
    }
}
