//! Commands and their answers over a line: what the standard calls the recorder.
//!
//! An answer carries its sensor's address and nothing that says which command it answers. A late one could pass for the next:
//! the values of `D0` for those of `D1`. Three rules keep that out:
//!
//! 1. After any failure the line is listened to until it has been silent for a timeout; what came is thrown away.
//! 2. A command is never repeated within a measurement: a failure begins the measurement anew.
//! 3. A sensor that owes an answer must first answer `a!`, whose answer has no form in common with the others. Sensors
//!    answer in order, so that answer proves that the owed one has been sent or never will be.

use std::collections::BTreeSet;
use std::io;
use std::time::Duration;

use thiserror::Error;
use tokio::io::AsyncWriteExt as _;
use tokio::time::{Instant, timeout, timeout_at};

use super::codec::{self, Announcement, AnswerError, Ask, LONGEST};
use crate::config::{Sdi12Address, Sdi12Command, Sdi12Kind, Sdi12Source};
use crate::intake::serial::{self, Wire};

/// Times of a line.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Timing {
    /// How long an answer may take, and how long it may pause.
    pub(crate) timeout: Duration,
    /// One character on the line.
    pub(crate) character: Duration,
    /// Whether the break that wakes the sensors is ours to send.
    pub(crate) wake: bool,
    /// Measurements begun again after a failure.
    pub(crate) retries: u32,
}

impl Timing {
    /// SDI-12 1.4, section 7: at least 12 ms of break, then at least 8.33 ms of mark.
    const BREAK: Duration = Duration::from_millis(15);
    const MARK: Duration = Duration::from_millis(10);

    pub(crate) fn of(settings: &Sdi12Source) -> Self {
        Self {
            timeout: settings.timeout,
            character: serial::duration_of(&settings.serial, 1),
            wake: settings.wake,
            retries: settings.retries,
        }
    }
}

/// A measurement without values.
#[derive(Debug, Error)]
pub(crate) enum Failure {
    /// The port is gone.
    #[error("the serial port failed: {0}")]
    Gone(#[from] io::Error),
    /// Nothing came.
    #[error("sensor {0} does not answer")]
    Silent(Sdi12Address),
    /// Something else came.
    #[error("\"{command}\" was answered with \"{raw}\": {why}")]
    Garbled {
        /// What was sent.
        command: String,
        /// What is wrong with it.
        why: AnswerError,
        /// What came.
        raw: String,
    },
    /// The sensor gave up.
    #[error("sensor {0} broke its measurement off: it gives no values")]
    Aborted(Sdi12Address),
}

/// A concurrent measurement that was begun.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Begun {
    announced: Announcement,
    /// When its values are ready.
    pub(crate) ready: Instant,
}

/// The recorder of a line.
pub(crate) struct Recorder<W> {
    wire: W,
    timing: Timing,
    /// Sensors that owe an answer.
    owing: BTreeSet<Sdi12Address>,
}

impl<W: Wire> Recorder<W> {
    pub(crate) fn new(wire: W, timing: Timing) -> Self {
        Self {
            wire,
            timing,
            owing: BTreeSet::new(),
        }
    }

    /// Measures, and begins anew after a failure as often as is set.
    ///
    /// # Errors
    /// No values after all tries.
    pub(crate) async fn measure(
        &mut self,
        address: Sdi12Address,
        command: Sdi12Command,
    ) -> Result<Vec<f64>, Failure> {
        let mut left = self.timing.retries;
        loop {
            let failure = match self.measure_once(address, command).await {
                Ok(values) => return Ok(values),
                Err(failure) => failure,
            };
            if left == 0 || matches!(failure, Failure::Gone(_)) {
                return Err(failure);
            }
            left -= 1;
        }
    }

    async fn measure_once(
        &mut self,
        address: Sdi12Address,
        command: Sdi12Command,
    ) -> Result<Vec<f64>, Failure> {
        if command.kind == Sdi12Kind::Continuous {
            let read = |answer: &str| codec::values(address, command.checked, answer);
            let values = self.ask(address, Ask::Measure(command), read).await?;
            return some(address, values);
        }
        let begun = self.begin(address, command).await?;
        if command.kind == Sdi12Kind::Measurement && begun.announced.seconds > 0 {
            self.await_service_request(address, begun.ready).await?;
        }
        self.collect(address, command, begun).await
    }

    /// Begins a measurement whose values are fetched by [`Recorder::collect`].
    ///
    /// # Errors
    /// The sensor does not announce it.
    pub(crate) async fn begin(
        &mut self,
        address: Sdi12Address,
        command: Sdi12Command,
    ) -> Result<Begun, Failure> {
        let read = |answer: &str| codec::announcement(address, command.kind, answer);
        let announced = self.ask(address, Ask::Measure(command), read).await?;
        Ok(Begun {
            announced,
            ready: Instant::now() + Duration::from_secs(announced.seconds.into()),
        })
    }

    /// Waits until a measurement is ready, and fetches its values.
    ///
    /// # Errors
    /// Not all of them came.
    pub(crate) async fn collect(
        &mut self,
        address: Sdi12Address,
        command: Sdi12Command,
        begun: Begun,
    ) -> Result<Vec<f64>, Failure> {
        if command.kind == Sdi12Kind::Concurrent {
            tokio::time::sleep_until(begun.ready).await;
        }
        let due = begun.announced.values;
        let mut values = Vec::new();
        for part in 0..=9 {
            if values.len() >= due {
                break;
            }
            let read = |answer: &str| {
                let more = codec::values(address, command.checked, answer)?;
                let found = values.len() + more.len();
                if found > due {
                    return Err(AnswerError::TooMany { found, due });
                }
                Ok(more)
            };
            let more = self.ask(address, Ask::Data(part), read).await?;
            values.extend(some(address, more)?);
        }
        if values.len() < due {
            return Err(Failure::Aborted(address));
        }
        some(address, values)
    }

    /// What the sensor says of itself.
    ///
    /// # Errors
    /// It does not answer.
    pub(crate) async fn identify(&mut self, address: Sdi12Address) -> Result<String, Failure> {
        let read = |answer: &str| codec::own(address, answer).map(|text| text.trim().to_owned());
        self.ask(address, Ask::Identify, read).await
    }

    /// The address of the only sensor on the line; `None` where none answers, or several at once.
    ///
    /// # Errors
    /// The port is gone.
    pub(crate) async fn who(&mut self) -> io::Result<Option<Sdi12Address>> {
        self.wake().await?;
        let answer = self.exchange("?!").await?.unwrap_or_default();
        let mut letters = answer.chars();
        Ok(match (letters.next(), letters.next()) {
            (Some(letter), None) => Sdi12Address::new(letter),
            _ => None,
        })
    }

    /// Waits for the sensor to say that it is ready, which it may do before its time has run out, or not at all.
    async fn await_service_request(
        &mut self,
        address: Sdi12Address,
        ready: Instant,
    ) -> Result<(), Failure> {
        let letter = address.letter();
        let mut heard = Vec::new();
        let mut buffer = [0; 64];
        while let Ok(read) = timeout_at(ready, serial::read(&mut self.wire, &mut buffer)).await {
            heard.extend(buffer.iter().take(read?));
            if text(&heard).ends_with(&format!("{letter}\r\n")) {
                break;
            }
        }
        Ok(())
    }

    /// Sends a command and reads its answer, after what the sensor owes. After a failure the line is quiet again.
    async fn ask<T: Send>(
        &mut self,
        address: Sdi12Address,
        ask: Ask,
        read: impl FnOnce(&str) -> Result<T, AnswerError> + Send,
    ) -> Result<T, Failure> {
        if self.owing.contains(&address) {
            let bare = |answer: &str| match codec::own(address, answer)? {
                "" => Ok(()),
                _ => Err(AnswerError::Form("bare address")),
            };
            self.ask_once(address, Ask::Active, bare).await?;
            self.owing.remove(&address);
        }
        self.ask_once(address, ask, read).await
    }

    async fn ask_once<T: Send>(
        &mut self,
        address: Sdi12Address,
        ask: Ask,
        read: impl FnOnce(&str) -> Result<T, AnswerError> + Send,
    ) -> Result<T, Failure> {
        let command = ask.command(address);
        self.wake().await?;
        let failure = match self.exchange(&command).await? {
            Some(answer) => match read(&answer) {
                Ok(read) => return Ok(read),
                Err(why) => Failure::Garbled {
                    command,
                    why,
                    raw: answer,
                },
            },
            None => Failure::Silent(address),
        };
        self.owing.insert(address);
        self.quieten().await?;
        Err(failure)
    }

    /// Wakes the sensors, where the adapter does not.
    async fn wake(&mut self) -> io::Result<()> {
        if self.timing.wake {
            self.wire.set_break(true)?;
            tokio::time::sleep(Timing::BREAK).await;
            self.wire.set_break(false)?;
            tokio::time::sleep(Timing::MARK).await;
        }
        self.wire.discard_input()
    }

    /// Sends a command; gives the line that came, without its end, or `None` where none came.
    async fn exchange(&mut self, command: &str) -> io::Result<Option<String>> {
        let sending = self.timing.character * u32::try_from(command.len()).unwrap_or(u32::MAX);
        let mut deadline = Instant::now() + sending + self.timing.timeout;
        match timeout_at(deadline, self.wire.write_all(command.as_bytes())).await {
            Ok(sent) => sent?,
            Err(_) => return Ok(None),
        }
        let mut heard = Vec::new();
        let mut buffer = [0; 128];
        loop {
            let read = timeout_at(deadline, serial::read(&mut self.wire, &mut buffer)).await;
            let Ok(count) = read else {
                break;
            };
            heard.extend(buffer.iter().take(count?));
            let mut line = text(&heard);
            // What came before the answer: a break as the port hears it, and an adapter's echo.
            line = line.trim_start_matches('\0').to_owned();
            line = line.strip_prefix(command).unwrap_or(&line).to_owned();
            if let Some((line, _)) = line.split_once("\r\n") {
                return Ok(Some(line.to_owned()));
            }
            if line.len() > LONGEST + command.len() {
                return Ok(Some(line));
            }
            deadline = Instant::now() + self.timing.timeout;
        }
        let rest = text(&heard);
        let rest = rest.trim_start_matches('\0');
        let rest = rest.strip_prefix(command).unwrap_or(rest);
        Ok(Some(rest.to_owned()).filter(|rest| !rest.is_empty()))
    }

    /// Waits until the line has been silent, and throws away what came.
    async fn quieten(&mut self) -> io::Result<()> {
        // A sensor that never stops talking must not stop the rest: the next command fails on its own.
        let patience = Instant::now() + self.timing.timeout * 20;
        let mut buffer = [0; 128];
        while let Ok(read) = timeout(
            self.timing.timeout,
            serial::read(&mut self.wire, &mut buffer),
        )
        .await
        {
            read?;
            if Instant::now() > patience {
                break;
            }
        }
        self.wire.discard_input()
    }
}

/// Values, where there are any.
fn some(address: Sdi12Address, values: Vec<f64>) -> Result<Vec<f64>, Failure> {
    if values.is_empty() {
        return Err(Failure::Aborted(address));
    }
    Ok(values)
}

/// Characters of seven bits; a parity bit that an eight-bit port lets through is no part of them.
fn text(bytes: &[u8]) -> String {
    bytes.iter().map(|b| char::from(b & 0x7F)).collect()
}
