//! One request and its answer.
//!
//! RTU has no transaction number: an answer that comes too late looks like the answer to the next request of the same shape,
//! and a master that takes it delivers one register's value under another's name, silently. Three rules keep that out:
//!
//! 1. After any failure the line is listened to until the late answer has come or one more timeout has passed, then until it
//!    has been silent for 3.5 characters and at least 50 ms; what came is thrown away, the system's buffer included.
//! 2. An answer counts only if device, function, byte count and checksum fit and nothing follows it.
//! 3. A device that owes an answer is not asked for the same function and byte count until it has answered a request of
//!    another shape. Devices answer in order, so that answer proves that the owed one has been sent or never will be. Where
//!    the next request has the owed shape, a probe (the same registers, some fewer or more) goes first.

use std::io;
use std::time::Duration;

use thiserror::Error;
use tokio::io::AsyncWriteExt as _;
use tokio::time::{Instant, timeout, timeout_at};

use super::codec::{Exception, FrameError, MOST_REGISTERS, Remedy, Reply, Request};
use crate::config::ModbusRtuSource;
use crate::intake::serial::{self, Wire};

/// Times of a line.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Timing {
    /// How long an answer may take, from the end of the request to its first byte.
    pub(crate) timeout: Duration,
    /// One character on the line.
    pub(crate) character: Duration,
    /// Silence before a request.
    pub(crate) gap: Duration,
    /// Requests made again after a failure.
    pub(crate) retries: u32,
}

impl Timing {
    /// Least silence after a failure.
    const SILENCE: Duration = Duration::from_millis(50);

    /// An owed answer is given up after ten timeouts, and not before this: gateways and adapters buffer.
    const OWED: Duration = Duration::from_secs(3);

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
            retries: settings.retries,
        }
    }
}

/// A request without a usable answer.
#[derive(Debug, Error)]
pub(crate) enum ReadError {
    /// The port is gone.
    #[error("the serial port failed: {0}")]
    Gone(#[from] io::Error),
    /// Nothing came.
    #[error("device {unit} does not answer")]
    Silent {
        /// Who was asked.
        unit: u8,
    },
    /// Something else came.
    #[error("{why}")]
    Garbled {
        /// What is wrong with it.
        why: FrameError,
        /// What came.
        raw: Vec<u8>,
    },
    /// The device refuses.
    #[error("exception {:02X}, {}", .0.0, .0.name())]
    Exception(Exception),
}

/// An answer that may still come.
#[derive(Debug, Clone, Copy)]
struct Owed {
    request: Request,
    until: Instant,
}

/// The master of a line.
pub(crate) struct Master<W> {
    wire: W,
    timing: Timing,
    owed: Vec<Owed>,
    /// When the line last carried something.
    busy: Instant,
}

impl<W: Wire> Master<W> {
    pub(crate) fn new(wire: W, timing: Timing) -> Self {
        Self {
            wire,
            timing,
            owed: Vec::new(),
            busy: Instant::now(),
        }
    }

    /// Reads registers.
    ///
    /// # Errors
    /// No usable answer after all retries.
    pub(crate) async fn read(&mut self, request: &Request) -> Result<Vec<u16>, ReadError> {
        let mut pause = Duration::from_millis(100);
        let mut left = self.timing.retries;
        loop {
            let error = match self.read_once(request).await {
                Ok(registers) => return Ok(registers),
                Err(error) => error,
            };
            let hopeless = match &error {
                ReadError::Gone(_) => true,
                ReadError::Exception(e) => e.remedy() != Remedy::Later,
                ReadError::Silent { .. } | ReadError::Garbled { .. } => false,
            };
            if hopeless || left == 0 {
                return Err(error);
            }
            left -= 1;
            if matches!(error, ReadError::Exception(_)) {
                tokio::time::sleep(pause).await;
                pause = pause.saturating_mul(2);
            }
        }
    }

    /// One try, with a probe before it where the device owes an answer of the same shape.
    async fn read_once(&mut self, request: &Request) -> Result<Vec<u16>, ReadError> {
        let now = Instant::now();
        self.owed.retain(|o| o.until > now);
        if self.owed.iter().any(|o| same_shape(&o.request, request)) {
            let probe = self.probe(request);
            match self.exchange(&probe).await {
                // An exception has no byte count: it may be the owed answer itself, and the probe's may be still to come.
                Err(ReadError::Exception(_)) => {
                    let until = Instant::now() + self.timing.timeout;
                    self.listen(&probe, until).await?;
                }
                other => drop(other?),
            }
            self.owed.retain(|o| o.request.unit != request.unit);
        }
        let registers = self.exchange(request).await?;
        // Another shape than all that was owed, or nothing was.
        self.owed.retain(|o| o.request.unit != request.unit);
        Ok(registers)
    }

    /// A request near the owed ones, of a shape that no owed answer has, nor `request`.
    fn probe(&self, request: &Request) -> Request {
        let fewer = (1..request.count).rev();
        let more = request.count + 1..=MOST_REGISTERS;
        let of = |count| Request { count, ..*request };
        let free = |probe: &Request| !self.owed.iter().any(|o| same_shape(&o.request, probe));
        // 125 shapes are never all owed: each costs a timeout, and they are given up in time.
        fewer.chain(more).map(of).find(free).unwrap_or(*request)
    }

    /// Sends a request and takes its answer. After a failure the line is quiet again.
    async fn exchange(&mut self, request: &Request) -> Result<Vec<u16>, ReadError> {
        tokio::time::sleep_until(self.busy + self.timing.gap).await;
        self.wire.discard_input()?;
        let mut raw = Vec::new();
        let result = self.send_and_receive(request, &mut raw).await;
        self.busy = Instant::now();
        let error = match result {
            Ok(Reply::Registers(registers)) => return Ok(registers),
            Ok(Reply::Exception(exception)) => return Err(ReadError::Exception(exception)),
            Err(Failure::Gone(e)) => return Err(e.into()),
            Err(Failure::Silent) if raw.is_empty() => ReadError::Silent { unit: request.unit },
            Err(Failure::Silent) => ReadError::Garbled {
                why: FrameError::Short(raw.len()),
                raw,
            },
            Err(Failure::Frame(why)) => ReadError::Garbled { why, raw },
        };
        let now = Instant::now();
        self.owed.push(Owed {
            request: *request,
            until: now + (self.timing.timeout * 10).max(Timing::OWED),
        });
        self.listen(request, now + self.timing.timeout).await?;
        self.quieten().await?;
        Err(error)
    }

    async fn send_and_receive(
        &mut self,
        request: &Request,
        raw: &mut Vec<u8>,
    ) -> Result<Reply, Failure> {
        let frame = request.frame();
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
            match request.reply_length(raw) {
                Ok(Some(length)) if raw.len() >= length => {
                    return request.read_reply(raw).map_err(Failure::Frame);
                }
                Ok(_) => {}
                Err(why) => return Err(Failure::Frame(why)),
            }
        }
    }

    /// Listens for the late answer to `request` until it has come or `until` is reached.
    async fn listen(&mut self, request: &Request, until: Instant) -> Result<(), ReadError> {
        let mut heard: Vec<u8> = Vec::new();
        let mut buffer = [0; 256];
        while let Ok(read) = timeout_at(until, serial::read(&mut self.wire, &mut buffer)).await {
            heard.extend(buffer.iter().take(read?));
            self.busy = Instant::now();
            // The answer may stand behind the rest of a damaged one.
            let complete = (0..heard.len()).any(|skip| {
                let tail = heard.get(skip..).unwrap_or_default();
                request.read_reply(tail).is_ok()
            });
            if complete {
                break;
            }
            let excess = heard.len().saturating_sub(512);
            heard.drain(..excess);
        }
        Ok(())
    }

    /// Waits until the line has been silent, and throws away what came.
    async fn quieten(&mut self) -> Result<(), ReadError> {
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
        Ok(self.wire.discard_input()?)
    }
}

/// Why an answer could not be taken.
enum Failure {
    Gone(io::Error),
    Silent,
    Frame(FrameError),
}

/// Whether an answer to one could pass for an answer to the other.
fn same_shape(a: &Request, b: &Request) -> bool {
    (a.unit, a.table, a.count) == (b.unit, b.table, b.count)
}

#[cfg(test)]
mod tests {
    use super::super::codec::crc16;
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
            retries,
        };
        let mut master = Master::new(near, timing);
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
