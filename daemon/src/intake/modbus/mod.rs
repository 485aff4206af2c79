//! Modbus RTU over a serial line, as a master that only reads.
//!
//! [`codec`] is the frames, [`plan`] which registers are asked for together, [`master`] one request and its answer with all
//! that keeps a late answer from being taken for the next, `scan` one round of all devices, and this file the port.

pub mod codec;
mod master;
mod plan;
mod scan;

use std::time::Duration;

use tokio::time::MissedTickBehavior;

use super::backoff::Backoff;
use super::outlet::{Closed, Outlet};
use super::{Surroundings, serial, stopped};
use crate::config::ModbusRtuSource;
use master::{Master, Timing};
use scan::Scanner;

/// Why a session with an open port ended.
enum End {
    /// The port is gone.
    Gone(std::io::Error),
    /// Nobody takes readings any more.
    Closed(Closed),
}

/// Polls until shutdown.
pub(super) async fn run(settings: ModbusRtuSource, mut outlet: Outlet, around: Surroundings) {
    let mut shutdown = around.shutdown.clone();
    tokio::select! {
        () = stopped(&mut shutdown) => {}
        () = keep_polling(&settings, &mut outlet, &around) => {}
    }
    outlet.say("stopped");
}

/// Opens the port again and again, and polls while it is open.
async fn keep_polling(settings: &ModbusRtuSource, outlet: &mut Outlet, around: &Surroundings) {
    let mut scanner = Scanner::new(settings, outlet.source().clone());
    let mut backoff = Backoff::default();
    loop {
        let error = match session(settings, &mut scanner, outlet, around, &mut backoff).await {
            End::Closed(Closed) => return,
            End::Gone(error) => error,
        };
        outlet.waiting(&error);
        outlet.settle();
        tokio::time::sleep(backoff.wait()).await;
    }
}

/// One opening of the port.
async fn session(
    settings: &ModbusRtuSource,
    scanner: &mut Scanner,
    outlet: &mut Outlet,
    around: &Surroundings,
    backoff: &mut Backoff,
) -> End {
    let port = match serial::open(&settings.serial) {
        Ok(port) => port,
        Err(error) => return End::Gone(error),
    };
    let mut master = Master::new(port, Timing::of(settings));
    outlet.connected();
    let mut ticks = tokio::time::interval(settings.every.max(Duration::from_millis(1)));
    // Scans that a slow line leaves no time for are left out, and the rest keep to the schedule.
    ticks.set_missed_tick_behavior(MissedTickBehavior::Skip);
    loop {
        ticks.tick().await;
        let scan = match scanner.scan(&mut master, around).await {
            Ok(scan) => scan,
            Err(gone) => return End::Gone(gone),
        };
        if scan.answered {
            backoff.reset();
        }
        match &scan.trouble {
            Some(trouble) => {
                outlet.say(&format!("connected, but {trouble}"));
                outlet.trouble(trouble);
            }
            None => outlet.say("connected"),
        }
        if let Err(closed) = outlet.offer(scan.readings, scan.rejected) {
            return End::Closed(closed);
        }
        outlet.settle();
    }
}
