//! Modbus over a TCP connection.

use std::io;
use std::time::Duration;

use tokio::io::{AsyncReadExt as _, AsyncWriteExt as _};
use tokio::net::TcpStream;
use tokio::time::{Instant, timeout, timeout_at};

use super::codec::{Reply, Request};
use super::master::{Failed, Line, ReadError};
use super::tcp::{self, Frame};
use crate::config::ModbusTcpSource;
use crate::intake::link::Link;

/// How long a connection may take to come about.
const CONNECT: Duration = Duration::from_secs(10);

/// Requests in a row without any answer after which the connection is taken for dead: routers forget connections without a word.
const UNANSWERED: u32 = 6;

impl Link for ModbusTcpSource {
    type Wire = TcpStream;

    async fn open(&self) -> io::Result<TcpStream> {
        let failed = |kind, why: &dyn std::fmt::Display| {
            let text = format!("{}:{} cannot be reached: {why}", self.host, self.port);
            io::Error::new(kind, text)
        };
        let connect = TcpStream::connect((self.host.as_str(), self.port));
        let stream = match timeout(CONNECT, connect).await {
            Ok(Ok(stream)) => stream,
            Ok(Err(error)) => return Err(failed(error.kind(), &error)),
            Err(_) => {
                let why = format!("no answer within {} s", CONNECT.as_secs());
                return Err(failed(io::ErrorKind::TimedOut, &why));
            }
        };
        // A request is one small packet, and the answer is waited for.
        stream.set_nodelay(true)?;
        Ok(stream)
    }
}

/// A connection to a device, or to a gateway with devices behind it.
pub(crate) struct TcpLine {
    stream: TcpStream,
    timeout: Duration,
    /// Number of the last request.
    transaction: u16,
    /// What came and is no whole frame yet.
    buffer: Vec<u8>,
    unanswered: u32,
}

impl TcpLine {
    pub(crate) fn new(stream: TcpStream, timeout: Duration) -> Self {
        Self {
            stream,
            timeout,
            // A gateway that kept the last connection's answers must not find its numbers again.
            transaction: fastrand::u16(..),
            buffer: Vec::new(),
            unanswered: 0,
        }
    }

    /// The next frame; `None` where none came until `until`.
    async fn frame(&mut self, until: Instant) -> io::Result<Option<Frame>> {
        loop {
            if let Some(frame) = tcp::next_frame(&mut self.buffer).map_err(io::Error::other)? {
                self.unanswered = 0;
                return Ok(Some(frame));
            }
            let mut chunk = [0; 512];
            let count = match timeout_at(until, self.stream.read(&mut chunk)).await {
                Err(_) => return Ok(None),
                Ok(count) => count?,
            };
            if count == 0 {
                let why = "the peer closed the connection";
                return Err(io::Error::new(io::ErrorKind::UnexpectedEof, why));
            }
            self.buffer.extend(chunk.iter().take(count));
        }
    }

    /// The frame that carries the number of the last request; those of earlier ones are late, and dropped.
    async fn answer(&mut self, until: Instant) -> io::Result<Option<Frame>> {
        while let Some(frame) = self.frame(until).await? {
            if frame.transaction == self.transaction {
                return Ok(Some(frame));
            }
        }
        Ok(None)
    }
}

impl Line for TcpLine {
    async fn exchange(&mut self, request: &Request) -> Result<Reply, Failed> {
        self.transaction = self.transaction.wrapping_add(1);
        let sent = tcp::frame(self.transaction, request);
        let deadline = Instant::now() + self.timeout;
        if let Ok(sent) = timeout_at(deadline, self.stream.write_all(&sent)).await {
            sent?;
        } else {
            // A part may have been sent: there is no way back into the stream.
            let why = "the peer takes no request";
            return Err(io::Error::new(io::ErrorKind::TimedOut, why).into());
        }
        let Some(frame) = self.answer(deadline).await? else {
            self.unanswered += 1;
            let late = self.answer(Instant::now() + self.timeout).await?;
            if late.is_none() && self.unanswered >= UNANSWERED {
                let why = format!("nothing came for {UNANSWERED} requests; connecting anew");
                return Err(io::Error::new(io::ErrorKind::TimedOut, why).into());
            }
            return Err(Failed {
                error: ReadError::Silent { unit: request.unit },
                owed: late.is_none(),
            });
        };
        request.read_reply(&frame.body).map_err(|why| Failed {
            owed: true,
            error: ReadError::Garbled {
                why,
                raw: frame.body,
            },
        })
    }

    async fn listen(&mut self, request: &Request, until: Instant) -> io::Result<()> {
        while let Some(frame) = self.frame(until).await? {
            if request.read_reply(&frame.body).is_ok() {
                break;
            }
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::super::master::{Master, Patience};
    use super::*;
    use crate::config::RegisterTable;
    use proptest::prelude::*;
    use tokio::net::TcpListener;

    /// What a gateway does with a request.
    #[derive(Debug, Clone, Copy)]
    enum Deed {
        /// Answers after a share of the timeout.
        Answer(f64),
        /// Answers so, and says it twice.
        Repeat(f64),
        /// Answers so, and a device more than was asked.
        Other(f64),
        /// Refuses so.
        Refuse(f64),
        /// Does nothing.
        Ignore,
    }

    /// What register `address` of device `unit` holds: no two are alike.
    fn held(unit: u8, address: u16) -> u16 {
        u16::from(unit) << 12 | address
    }

    /// A gateway with devices behind it, which answer in order, one request after the other. A `careless` one puts every
    /// answer under the number of the newest request it has read, as if its serial line had no memory.
    async fn serve(stream: TcpStream, timeout: Duration, deeds: Vec<Deed>, careless: bool) {
        let (mut from, mut to) = stream.into_split();
        let (queue, mut queued) = tokio::sync::mpsc::unbounded_channel::<[u8; 12]>();
        let newest = std::sync::Arc::new(std::sync::Mutex::new([0_u8; 2]));
        let seen = std::sync::Arc::clone(&newest);
        tokio::spawn(async move {
            let mut request = [0; 12];
            while from.read_exact(&mut request).await.is_ok() {
                *seen.lock().unwrap() = [request[0], request[1]];
                let _ = queue.send(request);
            }
        });
        for deed in deeds.iter().cycle() {
            let Some(request) = queued.recv().await else {
                return;
            };
            let [t, u, _, _, _, _, unit, function, a, b, c, d] = request;
            let (address, count) = (u16::from_be_bytes([a, b]), u16::from_be_bytes([c, d]));
            let mut body = vec![unit, function, u8::try_from(2 * count).unwrap()];
            body.extend((address..address + count).flat_map(|a| held(unit, a).to_be_bytes()));
            let share = match *deed {
                Deed::Answer(share) | Deed::Repeat(share) => share,
                Deed::Other(share) => {
                    body[0] = unit.wrapping_add(1);
                    share
                }
                Deed::Refuse(share) => {
                    body = vec![unit, function | 0x80, 0x0B];
                    share
                }
                Deed::Ignore => continue,
            };
            tokio::time::sleep(timeout.mul_f64(share)).await;
            let number = if careless {
                *newest.lock().unwrap()
            } else {
                [t, u]
            };
            let mut frame = number.to_vec();
            frame.extend([0, 0, 0, u8::try_from(body.len()).unwrap()]);
            frame.extend(body);
            if matches!(deed, Deed::Repeat(_)) {
                frame.extend(frame.clone());
            }
            if to.write_all(&frame).await.is_err() {
                return;
            }
        }
    }

    /// How many reads came out right of `requests`; any wrong value fails the test.
    async fn right_of(
        requests: &[Request],
        deeds: Vec<Deed>,
        patience: Patience,
        careless: bool,
    ) -> usize {
        let listener = TcpListener::bind(("127.0.0.1", 0)).await.unwrap();
        let address = listener.local_addr().unwrap();
        let server = tokio::spawn(async move {
            while let Ok((stream, _)) = listener.accept().await {
                tokio::spawn(serve(stream, patience.timeout, deeds.clone(), careless));
            }
        });
        let connect = async || {
            let stream = TcpStream::connect(address).await.unwrap();
            Master::new(TcpLine::new(stream, patience.timeout), patience)
        };
        let mut master = connect().await;
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
                Err(ReadError::Gone(_)) => master = connect().await,
                Err(_) => {}
            }
        }
        server.abort();
        right
    }

    fn request(unit: u8, address: u16, count: u16) -> Request {
        Request {
            unit,
            table: RegisterTable::Input,
            address,
            count,
        }
    }

    fn any_deed() -> impl Strategy<Value = Deed> {
        let share = 0.0..2.0_f64;
        prop_oneof![
            4 => share.clone().prop_map(Deed::Answer),
            2 => (0.0..0.5_f64).prop_map(Deed::Answer),
            1 => share.clone().prop_map(Deed::Repeat),
            1 => share.clone().prop_map(Deed::Other),
            1 => share.prop_map(Deed::Refuse),
            1 => Just(Deed::Ignore),
        ]
    }

    fn on_runtime<T>(future: impl Future<Output = T>) -> T {
        let mut builder = tokio::runtime::Builder::new_current_thread();
        builder.enable_all().build().unwrap().block_on(future)
    }

    proptest! {
        #![proptest_config(ProptestConfig { cases: 12, max_shrink_iters: 0, ..ProptestConfig::default() })]

        /// Late, repeated, misnumbered and missing answers may cost readings and never make a wrong one.
        #[test]
        fn a_late_answer_is_never_taken_for_the_next(
            deeds in prop::collection::vec(any_deed(), 1..20),
            asked in prop::collection::vec((0_u8..8, 0_u16..6, 0_u16..8), 12),
            retries in 0_u32..2,
            careless in any::<bool>(),
        ) {
            let requests: Vec<_> = asked.iter().map(|&(u, a, c)| request(1 + u / 7, 100 * a, 1 + c / 7)).collect();
            let patience = Patience { timeout: Duration::from_millis(15), retries };
            on_runtime(right_of(&requests, deeds, patience, careless));
        }
    }

    /// The answer for register 100 comes when register 200 is asked for, under the number of that request.
    #[test]
    fn a_gateway_that_misnumbers_a_late_answer_is_found_out() {
        let requests = [request(1, 100, 1), request(1, 200, 1), request(1, 300, 1)];
        let deeds = vec![Deed::Answer(2.3), Deed::Answer(0.0), Deed::Answer(0.0)];
        let patience = Patience {
            timeout: Duration::from_millis(60),
            retries: 0,
        };
        on_runtime(right_of(&requests, deeds, patience, true));
    }

    #[test]
    fn a_dead_connection_is_given_up() {
        on_runtime(async {
            let listener = TcpListener::bind(("127.0.0.1", 0)).await.unwrap();
            let stream = TcpStream::connect(listener.local_addr().unwrap()).await;
            let patience = Patience {
                timeout: Duration::from_millis(5),
                retries: 0,
            };
            let mut master = Master::new(TcpLine::new(stream.unwrap(), patience.timeout), patience);
            let mut silent = 0;
            // The probe of a device that owes an answer counts too.
            while let Err(error) = master.read(&request(1, 0, 1)).await {
                match error {
                    ReadError::Silent { .. } => silent += 1,
                    ReadError::Gone(_) => break,
                    other => panic!("{other}"),
                }
            }
            assert_eq!(silent + 1, UNANSWERED);
        });
    }
}
