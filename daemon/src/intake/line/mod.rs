//! Lines of text over a serial device, one scan each.
//!
//! [`framer`] cuts bytes into lines, [`scan`] reads a line, and this file is what goes on over the port.

pub mod framer;
pub mod scan;

use std::time::Duration;

use tokio::io::AsyncRead;
use tokio::time::{Instant, MissedTickBehavior, timeout_at};

use super::burst::Burst;
use super::link::{Over, SourceEnd, Talk};
use super::outlet::Outlet;
use super::{Surroundings, link, serial};
use crate::config::TextLineSource;
use framer::Framer;

/// A device that was silent this long after opening is between two lines.
const BETWEEN: Duration = Duration::from_millis(500);

/// Reads lines until shutdown.
pub(super) async fn run(settings: TextLineSource, outlet: Outlet, around: Surroundings) {
    link::run(settings.serial.clone(), Reader(settings), outlet, around).await;
}

/// Reads what a device says by itself.
struct Reader(TextLineSource);

impl<W: AsyncRead + Unpin + Send> Talk<W> for Reader {
    async fn talk(&mut self, wire: W, end: &mut SourceEnd) -> Over {
        read_lines(wire, &self.0, end).await
    }
}

/// Reads lines while the port is open.
async fn read_lines(
    mut port: impl AsyncRead + Unpin,
    settings: &TextLineSource,
    end: &mut SourceEnd,
) -> Over {
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
        Ok(Err(error)) => return error.into(),
        Err(_) => None,
    };
    loop {
        let count = match first.take() {
            Some(count) => count,
            None => tokio::select! {
                read = serial::read(&mut port, &mut buffer) => match read {
                    Ok(count) => count,
                    Err(error) => return error.into(),
                },
                _ = ticks.tick() => {
                    end.outlet.settle();
                    continue;
                }
            },
        };
        let now = end.around.clock.read();
        framer.push(buffer.get(..count).unwrap_or_default());
        while let Some(line) = framer.next() {
            end.alive();
            let conversions = &end.around.conversions;
            let (readings, rejected) =
                scan::read(&line, settings, conversions, end.outlet.source(), now);
            if let Err(closed) = end.outlet.offer(readings, rejected) {
                return closed.into();
            }
        }
    }
}
