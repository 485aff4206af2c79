//! Lines of text over a serial device, one scan each.
//!
//! [`framer`] cuts bytes into lines, [`scan`] reads a line, and this file is the port.

pub mod framer;
pub mod scan;

use std::time::Duration;

use tokio::io::AsyncRead;
use tokio::time::{Instant, MissedTickBehavior, timeout_at};

use super::backoff::Backoff;
use super::burst::Burst;
use super::outlet::{Closed, Outlet};
use super::serial::{self, Wire as _};
use super::{Surroundings, stopped};
use crate::config::TextLineSource;
use framer::Framer;

/// A device that was silent this long after opening is between two lines.
const BETWEEN: Duration = Duration::from_millis(500);

/// Why a session with an open port ended.
enum End {
    /// The port is gone.
    Gone(std::io::Error),
    /// Nobody takes readings any more.
    Closed(Closed),
}

/// Reads lines until shutdown.
pub(super) async fn run(settings: TextLineSource, mut outlet: Outlet, around: Surroundings) {
    let mut shutdown = around.shutdown.clone();
    tokio::select! {
        () = stopped(&mut shutdown) => {}
        () = keep_reading(&settings, &mut outlet, &around) => {}
    }
    outlet.say("stopped");
}

/// Opens the port again and again, and reads while it is open.
async fn keep_reading(settings: &TextLineSource, outlet: &mut Outlet, around: &Surroundings) {
    let mut backoff = Backoff::default();
    loop {
        let error = match session(settings, outlet, around, &mut backoff).await {
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
    settings: &TextLineSource,
    outlet: &mut Outlet,
    around: &Surroundings,
    backoff: &mut Backoff,
) -> End {
    let opened = serial::open(&settings.serial).and_then(|mut port| {
        port.discard_input()?;
        Ok(port)
    });
    match opened {
        Ok(port) => {
            outlet.connected();
            read_lines(port, settings, outlet, around, backoff).await
        }
        Err(error) => End::Gone(error),
    }
}

/// Reads lines while the port is open.
async fn read_lines(
    mut port: impl AsyncRead + Unpin,
    settings: &TextLineSource,
    outlet: &mut Outlet,
    around: &Surroundings,
    backoff: &mut Backoff,
) -> End {
    let between = Instant::now() + BETWEEN;
    let mut framer = Framer::new(settings.max_line);
    let mut ticks = tokio::time::interval(Burst::QUIET / 2);
    ticks.set_missed_tick_behavior(MissedTickBehavior::Delay);
    let mut buffer = [0; 1024];
    // What comes at once may be the rest of a line whose beginning nobody saw: a shorter number, and a wrong one.
    let mut first = match timeout_at(between, serial::read(&mut port, &mut buffer)).await {
        Ok(Ok(count)) => {
            framer.skip_rest_of_line();
            Some(count)
        }
        Ok(Err(error)) => return End::Gone(error),
        Err(_) => None,
    };
    loop {
        let count = match first.take() {
            Some(count) => count,
            None => tokio::select! {
                read = serial::read(&mut port, &mut buffer) => match read {
                    Ok(count) => count,
                    Err(error) => return End::Gone(error),
                },
                _ = ticks.tick() => {
                    outlet.settle();
                    continue;
                }
            },
        };
        let now = around.clock.read();
        framer.push(buffer.get(..count).unwrap_or_default());
        while let Some(line) = framer.next() {
            backoff.reset();
            let (readings, rejected) =
                scan::read(&line, settings, &around.conversions, outlet.source(), now);
            if let Err(closed) = outlet.offer(readings, rejected) {
                return End::Closed(closed);
            }
        }
    }
}
