//! Modbus over a serial line and over TCP, as a master that only reads.
//!
//! [`codec`] is requests, answers and numbers; [`rtu`] and [`tcp`] are the frames round them; `plan` says which registers are
//! asked for together; `master` is one request and its answer with all that keeps a late answer from being taken for the
//! next, over a `serial_line` or a `tcp_line`; `scan` is one round of all devices.

pub mod codec;
pub(crate) mod master;
mod plan;
pub mod rtu;
mod scan;
pub(crate) mod serial_line;
pub mod tcp;
pub(crate) mod tcp_line;

use std::time::Duration;

use tokio::net::TcpStream;

use super::Surroundings;
use super::link::{self, Over, SourceEnd, Talk};
use super::outlet::Outlet;
use super::poll::poll;
use super::serial::Wire;
use crate::config::{ModbusRtuSource, ModbusTcpSource};
use master::{Line, Master, Patience};
use scan::Scanner;
use serial_line::{SerialLine, Timing};
use tcp_line::TcpLine;

/// Polls a serial line until shutdown.
pub(super) async fn run_rtu(settings: ModbusRtuSource, outlet: Outlet, around: Surroundings) {
    let devices = Devices {
        scanner: Scanner::new(&settings.channels, outlet.source().clone()),
        patience: Patience {
            timeout: settings.timeout,
            retries: settings.retries,
        },
        every: settings.every,
    };
    let talk = OverSerial(Timing::of(&settings), devices);
    link::run(settings.serial, talk, outlet, around).await;
}

/// Polls over TCP until shutdown.
pub(super) async fn run_tcp(settings: ModbusTcpSource, outlet: Outlet, around: Surroundings) {
    let devices = Devices {
        scanner: Scanner::new(&settings.channels, outlet.source().clone()),
        patience: Patience {
            timeout: settings.timeout,
            retries: settings.retries,
        },
        every: settings.every,
    };
    link::run(settings, OverTcp(devices), outlet, around).await;
}

/// The devices of a line. What is known of them outlives a pulled adapter.
struct Devices {
    scanner: Scanner,
    patience: Patience,
    every: Duration,
}

impl Devices {
    async fn poll(&mut self, line: impl Line, end: &mut SourceEnd) -> Over {
        let master = Master::new(line, self.patience);
        poll(&mut self.scanner.over(master), self.every, end).await
    }
}

struct OverSerial(Timing, Devices);

impl<W: Wire> Talk<W> for OverSerial {
    async fn talk(&mut self, wire: W, end: &mut SourceEnd) -> Over {
        let Self(timing, devices) = self;
        devices.poll(SerialLine::new(wire, *timing), end).await
    }
}

struct OverTcp(Devices);

impl Talk<TcpStream> for OverTcp {
    async fn talk(&mut self, stream: TcpStream, end: &mut SourceEnd) -> Over {
        let timeout = self.0.patience.timeout;
        self.0.poll(TcpLine::new(stream, timeout), end).await
    }
}
