//! Sources, decoding and reading quality.
//!
//! Every source is one task with a bounded queue of its own. [`start`] begins it and gives a [`SourceHandle`];
//! [`merge::Merge`] takes deliveries from all of them in turn, so that a flooded broker cannot starve a serial line.
//! What can be refused is refused alone: it is counted, logged once per [`burst`], and handed on as rejected.
//!
//! Each protocol is a pure codec with a thin task round it: [`modbus`], [`sdi12`], [`mod@line`], [`mqtt`]; [`log`] reads files without any task.

mod absence;
pub mod appraise;
pub mod backoff;
pub mod burst;
pub mod clock;
pub mod conversions;
mod crc;
mod decode;
pub mod instrument;
pub mod line;
mod link;
pub mod log;
pub mod merge;
pub mod modbus;
pub mod mqtt;
mod outlet;
mod poll;
pub mod probe;
mod quality;
pub mod sdi12;
mod serial;
mod window;

use std::future::Future;
use std::sync::Arc;

use thiserror::Error;
use tokio::sync::{mpsc, watch};
use tokio::task::JoinHandle;
use tracing::Instrument as _;

use crate::config::{SourceConfig, SourceSettings};
use crate::record::{AckToken, Delivery, SourceName, SourceView};

pub use appraise::Appraiser;
pub use clock::{Clock, ClockReading};
pub use conversions::{Conversions, Meaning};
pub use merge::{Acks, Merge};
pub use window::Window;

use outlet::Outlet;

/// Deliveries a source may have waiting. A scan a second fills it in four minutes of a store that does not commit.
pub const QUEUE: usize = 256;

/// What every source is given beside its own settings.
#[derive(Clone)]
pub struct Surroundings {
    /// Id of the site, for the client id at a broker.
    pub site: String,
    /// What time it is.
    pub clock: Arc<dyn Clock>,
    /// What the delivered numbers mean.
    pub conversions: Arc<Conversions>,
    /// Turns true when sources must stop.
    pub shutdown: watch::Receiver<bool>,
}

/// The other ends of a running source.
#[derive(Debug)]
pub struct SourceHandle {
    /// Its name.
    pub name: SourceName,
    /// What it delivers; closed when the source has stopped delivering.
    pub deliveries: mpsc::Receiver<Delivery>,
    /// Where tokens go once their delivery is on disk. Unbounded, so that the writer never waits for a source; at most one
    /// token for each delivery is ever in it.
    pub acks: mpsc::UnboundedSender<AckToken>,
    /// Its state and counts.
    pub state: watch::Receiver<SourceView>,
    /// Deliveries it waits to have acknowledged.
    pub window: Arc<Window>,
    /// The task; it ends by itself after shutdown, once all acknowledgements are in or given up.
    pub task: JoinHandle<()>,
}

/// A source that cannot be started at all.
#[derive(Debug, Error)]
pub enum IntakeError {
    /// TLS was asked for.
    #[error(
        "source \"{0}\": mqtts:// is not in this build; use mqtt:// to a broker on this machine that bridges over TLS"
    )]
    Tls(SourceName),
    /// The password cannot be read.
    #[error("source \"{source_name}\": {why}")]
    Secret {
        /// Which source.
        source_name: SourceName,
        /// Why.
        why: String,
    },
}

/// Starts a source; `None` for one without a task, whose channels come from log files only.
///
/// # Errors
/// The settings ask for something this build or this machine does not have.
pub fn start(
    source: &SourceSettings,
    around: &Surroundings,
) -> Result<Option<SourceHandle>, IntakeError> {
    let name = &source.name;
    Ok(Some(match &source.config {
        SourceConfig::ModbusRtu(settings) => {
            let settings = settings.clone();
            spawn(name, around, 0, |outlet, around, _| {
                modbus::run_rtu(settings, outlet, around)
            })
        }
        SourceConfig::ModbusTcp(settings) => {
            let settings = settings.clone();
            spawn(name, around, 0, |outlet, around, _| {
                modbus::run_tcp(settings, outlet, around)
            })
        }
        SourceConfig::Sdi12(settings) => {
            let settings = settings.clone();
            spawn(name, around, 0, |outlet, around, _| {
                sdi12::run(settings, outlet, around)
            })
        }
        SourceConfig::TextLine(settings) => {
            let settings = settings.clone();
            spawn(name, around, 0, |outlet, around, _| {
                line::run(settings, outlet, around)
            })
        }
        SourceConfig::Mqtt(settings) => {
            let entry = mqtt::Entry::new(settings, name, &around.site)?;
            let settings = settings.clone();
            spawn(name, around, mqtt::WINDOW, |outlet, around, acks| {
                mqtt::run(settings, entry, outlet, around, acks)
            })
        }
        SourceConfig::Log(_) => return Ok(None),
    }))
}

/// Spawns a source's task in a span of its own.
fn spawn<F, Fut>(name: &SourceName, around: &Surroundings, window: usize, run: F) -> SourceHandle
where
    F: FnOnce(Outlet, Surroundings, mpsc::UnboundedReceiver<AckToken>) -> Fut,
    Fut: Future<Output = ()> + Send + 'static,
{
    let (sender, deliveries) = mpsc::channel(QUEUE);
    let (acks, tokens) = mpsc::unbounded_channel();
    let (view, state) = watch::channel(SourceView::default());
    let window = Arc::new(Window::new(window));
    let outlet = Outlet::new(name.clone(), sender, view, Arc::clone(&window));
    let span = tracing::info_span!("source", name = %name);
    let task = tokio::spawn(run(outlet, around.clone(), tokens).instrument(span));
    SourceHandle {
        name: name.clone(),
        deliveries,
        acks,
        state,
        window,
        task,
    }
}

/// Waits until shutdown is asked for, or nobody is left to ask.
async fn stopped(shutdown: &mut watch::Receiver<bool>) {
    // An error means that the sender is gone: nobody can want this source any more.
    let _ = shutdown.wait_for(|stop| *stop).await;
}
