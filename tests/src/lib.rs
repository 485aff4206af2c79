//! Helpers shared by the end-to-end tests: a real broker, real Modbus devices, the real daemon.
//!
//! Every helper owns what it starts and ends it when dropped. Ports are free ones found at run time; folders are
//! temporary. Waits are for a state to be reached, with a generous limit that only a broken program meets.

pub mod broker;
pub mod browser;
pub mod collect;
pub mod daemon;
pub mod embankment;
pub mod http;
pub mod modbus;
pub mod pty;
pub mod publisher;
pub mod readings;
pub mod sdi12;
pub mod site;
pub mod stored;
pub mod watched;

use std::path::PathBuf;
use std::time::{Duration, Instant};

pub use broker::Broker;
pub use browser::Browser;
pub use collect::{Collector, Message};
pub use daemon::{Daemon, Output, borewake, borewake_in, program};
pub use modbus::{ModbusServer, ModbusTcpServer};
pub use pty::TextDevice;
pub use publisher::Publisher;
pub use sdi12::Sdi12Line;

/// How long a state may take to be reached before the test gives up. Two loaded cores must do.
pub const PATIENCE: Duration = Duration::from_secs(60);

/// The workspace's root.
#[must_use]
pub fn root() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR"))
        .parent()
        .expect("the tests crate lies in the workspace")
        .to_path_buf()
}

/// A port of the loopback interface that nobody listens on at this moment.
#[must_use]
pub fn free_port() -> u16 {
    std::net::TcpListener::bind(("127.0.0.1", 0))
        .and_then(|l| l.local_addr())
        .expect("a free port on loopback")
        .port()
}

/// Asks `probe` again and again until it gives something.
///
/// # Panics
/// Nothing came within [`PATIENCE`]; the message names `what` was waited for.
pub async fn until<T, F>(what: &str, mut probe: F) -> T
where
    F: AsyncFnMut() -> Option<T>,
{
    let start = Instant::now();
    loop {
        if let Some(found) = probe().await {
            return found;
        }
        assert!(start.elapsed() < PATIENCE, "waited in vain for {what}");
        tokio::time::sleep(Duration::from_millis(50)).await;
    }
}
