//! One request and its answer.
//!
//! RTU has no transaction number: an answer that comes too late looks like the answer to the next request of the same shape,
//! and a master that takes it delivers one register's value under another's name, silently. TCP has the number, but gateways
//! put a late answer of their serial line under the number of the next request. Three rules keep that out:
//!
//! 1. After any failure the line is listened to until the late answer has come or one more timeout has passed; on a serial
//!    line then until it has been silent for 3.5 characters and at least 50 ms. What came is thrown away, the system's
//!    buffer included.
//! 2. An answer counts only if device, function, byte count, and checksum or number fit and nothing follows it.
//! 3. A device that owes an answer is not asked for the same function and byte count until it has answered a request of
//!    another shape. Devices answer in order, so that answer proves that the owed one has been sent or never will be. Where
//!    the next request has the owed shape, a probe (the same registers, some fewer or more) goes first.

use std::future::Future;
use std::io;
use std::time::Duration;

use thiserror::Error;
use tokio::time::Instant;

use super::codec::{Exception, FrameError, MOST_REGISTERS, Remedy, Reply, Request};

/// A request without a usable answer.
#[derive(Debug, Error)]
pub(crate) enum ReadError {
    /// The line is lost.
    #[error("the line failed: {0}")]
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

/// What carries requests and answers.
pub(crate) trait Line: Send {
    /// Sends a request and takes its answer. After a failure rule 1 has been kept.
    fn exchange(&mut self, request: &Request)
    -> impl Future<Output = Result<Reply, Failed>> + Send;

    /// Listens for a late answer to `request` until it has come or `until` is reached.
    fn listen(
        &mut self,
        request: &Request,
        until: Instant,
    ) -> impl Future<Output = io::Result<()>> + Send;
}

/// An exchange that failed.
#[derive(Debug)]
pub(crate) struct Failed {
    pub(crate) error: ReadError,
    /// Whether the answer may still come.
    pub(crate) owed: bool,
}

impl From<io::Error> for Failed {
    fn from(error: io::Error) -> Self {
        Self {
            error: error.into(),
            owed: false,
        }
    }
}

/// How patient a master is.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Patience {
    /// How long an answer may take.
    pub(crate) timeout: Duration,
    /// Requests made again after a failure.
    pub(crate) retries: u32,
}

impl Patience {
    /// An owed answer is given up after ten timeouts, and not before this: gateways and adapters buffer.
    const OWED: Duration = Duration::from_secs(3);
}

/// An answer that may still come.
#[derive(Debug, Clone, Copy)]
struct Owed {
    request: Request,
    until: Instant,
}

/// The master of a line.
pub(crate) struct Master<L> {
    line: L,
    patience: Patience,
    owed: Vec<Owed>,
}

impl<L: Line> Master<L> {
    pub(crate) fn new(line: L, patience: Patience) -> Self {
        Self {
            line,
            patience,
            owed: Vec::new(),
        }
    }

    /// Reads registers.
    ///
    /// # Errors
    /// No usable answer after all retries.
    pub(crate) async fn read(&mut self, request: &Request) -> Result<Vec<u16>, ReadError> {
        let mut pause = Duration::from_millis(100);
        let mut left = self.patience.retries;
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
                    let until = Instant::now() + self.patience.timeout;
                    self.line.listen(&probe, until).await?;
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

    /// One exchange; remembers what is owed after it.
    async fn exchange(&mut self, request: &Request) -> Result<Vec<u16>, ReadError> {
        match self.line.exchange(request).await {
            Ok(Reply::Registers(registers)) => Ok(registers),
            Ok(Reply::Exception(exception)) => Err(ReadError::Exception(exception)),
            Err(Failed { error, owed }) => {
                if owed {
                    let patience = (self.patience.timeout * 10).max(Patience::OWED);
                    self.owed.push(Owed {
                        request: *request,
                        until: Instant::now() + patience,
                    });
                }
                Err(error)
            }
        }
    }
}

/// Whether an answer to one could pass for an answer to the other.
fn same_shape(a: &Request, b: &Request) -> bool {
    (a.unit, a.table, a.count) == (b.unit, b.table, b.count)
}
