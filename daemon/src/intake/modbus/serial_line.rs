//! RTU frames over a serial line.

use std::io;
use std::time::Duration;

use tokio::io::AsyncWriteExt as _;
use tokio::time::{Instant, timeout, timeout_at};

use super::codec::{FrameError, Reply, Request};
use super::master::{Failed, Line, ReadError};
use super::rtu;
use crate::config::ModbusRtuSource;
use crate::intake::serial::{self, Wire};

/// Times of a serial line.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Timing {
    /// How long an answer may take, from the end of the request to its first byte.
    pub(crate) timeout: Duration,
    /// One character on the line.
    pub(crate) character: Duration,
    /// Silence before a request.
    pub(crate) gap: Duration,
}

impl Timing {
    /// Least silence after a failure.
    const SILENCE: Duration = Duration::from_millis(50);

    pub(crate) fn of(settings: &ModbusRtuSource) -> Self {
        // Serial line guide V1.02, 2.5.1.1: 3.5 characters, fixed at 1.75 ms above 19200 baud.
        let gap = if settings.serial.baud > 19_200 {
            Duration::from_micros(1750)
        } else {
            serial::duration_of(&settings.serial, 7) / 2
        };
        Self {
            timeout: settings.timeout,
            character: serial::duration_of(&settings.serial, 1),
            gap,
        }
    }
}

/// A serial line with Modbus devices.
pub(crate) struct SerialLine<W> {
    wire: W,
    timing: Timing,
    /// When the line last carried something.
    busy: Instant,
}

/// Why an answer could not be taken.
enum Failure {
    Gone(io::Error),
    Silent,
    Frame(FrameError),
}

impl<W: Wire> Line for SerialLine<W> {
    async fn exchange(&mut self, request: &Request) -> Result<Reply, Failed> {
        tokio::time::sleep_until(self.busy + self.timing.gap).await;
        self.wire.discard_input()?;
        let mut raw = Vec::new();
        let result = self.send_and_receive(request, &mut raw).await;
        self.busy = Instant::now();
        let error = match result {
            Ok(reply) => return Ok(reply),
            Err(Failure::Gone(e)) => return Err(e.into()),
            Err(Failure::Silent) if raw.is_empty() => ReadError::Silent { unit: request.unit },
            Err(Failure::Silent) => ReadError::Garbled {
                why: FrameError::Short(raw.len()),
                raw,
            },
            Err(Failure::Frame(why)) => ReadError::Garbled { why, raw },
        };
        let until = Instant::now() + self.timing.timeout;
        self.listen(request, until).await?;
        self.quieten().await?;
        Err(Failed { error, owed: true })
    }

    async fn listen(&mut self, request: &Request, until: Instant) -> io::Result<()> {
        let mut heard: Vec<u8> = Vec::new();
        let mut buffer = [0; 256];
        while let Ok(read) = timeout_at(until, serial::read(&mut self.wire, &mut buffer)).await {
            heard.extend(buffer.iter().take(read?));
            self.busy = Instant::now();
            // The answer may stand behind the rest of a damaged one.
            let complete = (0..heard.len()).any(|skip| {
                let tail = heard.get(skip..).unwrap_or_default();
                rtu::read_reply(request, tail).is_ok()
            });
            if complete {
                break;
            }
            let excess = heard.len().saturating_sub(512);
            heard.drain(..excess);
        }
        Ok(())
    }
}

impl<W: Wire> SerialLine<W> {
    pub(crate) fn new(wire: W, timing: Timing) -> Self {
        Self {
            wire,
            timing,
            busy: Instant::now(),
        }
    }

    async fn send_and_receive(
        &mut self,
        request: &Request,
        raw: &mut Vec<u8>,
    ) -> Result<Reply, Failure> {
        let frame = rtu::frame(request);
        let characters = u32::from(request.payload()) + 5 + 8;
        let limit = self.timing.timeout + self.timing.character * characters;
        let deadline = Instant::now() + limit;
        // Not flushed: draining a tty blocks the thread, and the deadline counts the characters instead.
        match timeout_at(deadline, self.wire.write_all(&frame)).await {
            Ok(sent) => sent.map_err(Failure::Gone)?,
            Err(_) => return Err(Failure::Silent),
        }
        let mut buffer = [0; 256];
        loop {
            let read = timeout_at(deadline, serial::read(&mut self.wire, &mut buffer)).await;
            let count = match read {
                Ok(count) => count.map_err(Failure::Gone)?,
                Err(_) => return Err(Failure::Silent),
            };
            raw.extend(buffer.iter().take(count));
            match rtu::reply_length(request, raw) {
                Ok(Some(length)) if raw.len() >= length => {
                    return rtu::read_reply(request, raw).map_err(Failure::Frame);
                }
                Ok(_) => {}
                Err(why) => return Err(Failure::Frame(why)),
            }
        }
    }

    /// Waits until the line has been silent, and throws away what came.
    async fn quieten(&mut self) -> io::Result<()> {
        let silence = self.timing.gap.max(Timing::SILENCE);
        // A device that never stops talking must not stop the rest: the next request fails on its own.
        let patience = Instant::now() + silence * 20;
        let mut buffer = [0; 256];
        while let Ok(read) = timeout(silence, serial::read(&mut self.wire, &mut buffer)).await {
            read?;
            self.busy = Instant::now();
            if self.busy > patience {
                break;
            }
        }
        self.wire.discard_input()
    }
}

#[cfg(test)]
mod tests {
    use super::super::master::{Master, Patience};
    use super::super::rtu::crc16;
    use super::*;
    use crate::config::RegisterTable;
    use proptest::prelude::*;
    use tokio::io::AsyncReadExt as _;
    use tokio_serial::SerialStream;

    /// What a device does with a request.
    #[derive(Debug, Clone, Copy)]
    enum Deed {
        /// Answers after a share of the timeout.
        Answer(f64),
        /// Answers so, with a byte damaged.
        Damage(f64),
        /// Answers so, and says it twice.
        Repeat(f64),
        /// Refuses so.
        Refuse(f64),
        /// Does nothing.
        Ignore,
    }

    /// What register `address` of device `unit` holds: no two are alike.
    fn held(unit: u8, address: u16) -> u16 {
        u16::from(unit) << 12 | address
    }

    /// Devices on the far end of a line, which answer in order, one request after the other.
    async fn serve(mut port: SerialStream, timeout: Duration, deeds: Vec<Deed>) {
        for deed in deeds.iter().cycle() {
            let mut request = [0; 8];
            if port.read_exact(&mut request).await.is_err() {
                return;
            }
            assert_eq!(crc16(&request), 0, "requests are never damaged here");
            let [unit, function, a, b, c, d, ..] = request;
            let (address, count) = (u16::from_be_bytes([a, b]), u16::from_be_bytes([c, d]));
            let mut frame = vec![unit, function, u8::try_from(2 * count).unwrap()];
            frame.extend((address..address + count).flat_map(|a| held(unit, a).to_be_bytes()));
            let share = match *deed {
                Deed::Answer(share) | Deed::Damage(share) | Deed::Repeat(share) => share,
                Deed::Refuse(share) => {
                    frame = vec![unit, function | 0x80, 6];
                    share
                }
                Deed::Ignore => continue,
            };
            frame.extend(crc16(&frame).to_le_bytes());
            match deed {
                Deed::Damage(_) => frame[3] ^= 0x10,
                Deed::Repeat(_) => frame.extend(frame.clone()),
                _ => {}
            }
            tokio::time::sleep(timeout.mul_f64(share)).await;
            if port.write_all(&frame).await.is_err() {
                return;
            }
        }
    }

    fn any_deed() -> impl Strategy<Value = Deed> {
        let share = 0.0..2.0_f64;
        prop_oneof![
            3 => share.clone().prop_map(Deed::Answer),
            3 => (2.0..8.0_f64).prop_map(Deed::Answer),
            1 => share.clone().prop_map(Deed::Damage),
            1 => share.clone().prop_map(Deed::Repeat),
            1 => share.prop_map(Deed::Refuse),
            1 => Just(Deed::Ignore),
        ]
    }

    /// How many reads came out right of `requests`, over a pty; any wrong value fails the test.
    async fn right_of(requests: &[Request], deeds: Vec<Deed>, retries: u32) -> usize {
        let timeout = Duration::from_millis(15);
        let (near, far) = SerialStream::pair().unwrap();
        let server = tokio::spawn(serve(far, timeout, deeds));
        let timing = Timing {
            timeout,
            character: Duration::from_micros(500),
            gap: Duration::from_micros(1750),
        };
        let patience = Patience { timeout, retries };
        let mut master = Master::new(SerialLine::new(near, timing), patience);
        let mut right = 0;
        for request in requests {
            match master.read(request).await {
                Ok(registers) => {
                    let due: Vec<u16> = (request.address..request.address + request.count)
                        .map(|a| held(request.unit, a))
                        .collect();
                    assert_eq!(registers, due, "{request:?}");
                    right += 1;
                }
                Err(ReadError::Gone(error)) => panic!("{error}"),
                Err(_) => {}
            }
        }
        server.abort();
        right
    }

    fn request(unit: u8, address: u16, count: u16) -> Request {
        Request {
            unit,
            table: RegisterTable::Holding,
            address,
            count,
        }
    }

    fn on_runtime<T>(future: impl Future<Output = T>) -> T {
        let mut builder = tokio::runtime::Builder::new_current_thread();
        builder.enable_all().build().unwrap().block_on(future)
    }

    proptest! {
        #![proptest_config(ProptestConfig { cases: 12, max_shrink_iters: 0, ..ProptestConfig::default() })]

        /// Devices that answer late, twice, damaged or not at all may cost readings and never make a wrong one.
        #[test]
        fn a_late_answer_is_never_taken_for_the_next(
            deeds in prop::collection::vec(any_deed(), 1..20),
            asked in prop::collection::vec((0_u8..8, 0_u16..6, 0_u16..8), 12),
            retries in 0_u32..2,
        ) {
            let requests: Vec<_> = asked.iter().map(|&(u, a, c)| request(1 + u / 7, 100 * a, 1 + c / 7)).collect();
            on_runtime(right_of(&requests, deeds, retries));
        }
    }

    /// The case that misleads masters without these rules: the answer for register 100 arrives when register 200 is asked for.
    #[test]
    fn the_answer_of_the_request_before_is_thrown_away() {
        let requests = [
            request(1, 100, 1),
            request(1, 200, 1),
            request(1, 300, 1),
            request(1, 400, 1),
        ];
        // So late that listening for one timeout more does not hear it.
        let deeds = vec![
            Deed::Answer(6.5),
            Deed::Answer(0.0),
            Deed::Answer(0.0),
            Deed::Answer(0.0),
        ];
        let right = on_runtime(right_of(&requests, deeds, 0));
        assert!(right >= 1, "the line comes back");
    }

    #[test]
    fn a_busy_device_is_asked_again() {
        let deeds = vec![Deed::Refuse(0.0), Deed::Answer(0.0)];
        let requests = [request(1, 100, 2)];
        // On a loaded machine an answer may miss the timeout: several tries.
        let right = (0..5)
            .map(|_| on_runtime(right_of(&requests, deeds.clone(), 3)))
            .max();
        assert_eq!(right, Some(1));
    }
}
