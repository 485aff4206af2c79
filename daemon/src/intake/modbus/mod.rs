//! Modbus RTU over a serial line, as a master that only reads.
//!
//! [`codec`] is the frames, [`plan`] which registers are asked for together, [`master`] one request and its answer with all
//! that keeps a late answer from being taken for the next, `scan` one round of all devices.

pub mod codec;
mod master;
mod plan;
mod scan;

use std::time::Duration;

use super::Surroundings;
use super::link::{self, Over, SourceEnd, Talk};
use super::outlet::Outlet;
use super::poll::poll;
use super::serial::Wire;
use crate::config::ModbusRtuSource;
use master::{Master, Timing};
use scan::Scanner;

/// Polls a serial line until shutdown.
pub(super) async fn run_rtu(settings: ModbusRtuSource, outlet: Outlet, around: Surroundings) {
    let poller = Poller {
        scanner: Scanner::new(&settings.channels, outlet.source().clone()),
        timing: Timing::of(&settings),
        every: settings.every,
    };
    link::run(settings.serial, poller, outlet, around).await;
}

/// Polls the devices of a line. What is known of them outlives a pulled adapter.
struct Poller {
    scanner: Scanner,
    timing: Timing,
    every: Duration,
}

impl<W: Wire> Talk<W> for Poller {
    async fn talk(&mut self, wire: W, end: &mut SourceEnd) -> Over {
        let master = Master::new(wire, self.timing);
        poll(&mut self.scanner.over(master), self.every, end).await
    }
}
