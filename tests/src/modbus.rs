//! Modbus devices: a general library's servers, on the far end of a pty and on TCP, with registers and delays to set.

use std::collections::{BTreeMap, VecDeque};
use std::fs::File;
use std::future::Future;
use std::pin::Pin;
use std::sync::{Arc, Mutex, MutexGuard};
use std::time::Duration;

use tokio::net::TcpListener;
use tokio::task::JoinHandle;
use tokio_modbus::server::tcp::{self, accept_tcp_connection};
use tokio_modbus::server::{Service, rtu};
use tokio_modbus::{ExceptionCode, Request, Response, SlaveRequest};

#[derive(Default)]
struct Device {
    registers: BTreeMap<(u8, u16), u16>,
    delay: Duration,
    /// Delays of the next answers, before [`Device::delay`] holds again.
    delays: VecDeque<Duration>,
    /// What the next answers refuse with.
    refusals: VecDeque<ExceptionCode>,
    /// Length of the longest read asked for.
    longest: u16,
    requests: u64,
}

#[derive(Clone, Default)]
struct Shared(Arc<Mutex<Device>>);

impl Shared {
    fn lock(&self) -> MutexGuard<'_, Device> {
        self.0.lock().expect("no test thread panicked")
    }

    fn set_f32(&self, unit: u8, address: u16, value: f32) {
        let bits = value.to_bits();
        self.set(unit, address, (bits >> 16) as u16);
        self.set(unit, address + 1, (bits & 0xffff) as u16);
    }

    fn set(&self, unit: u8, address: u16, register: u16) {
        self.lock().registers.insert((unit, address), register);
    }
}

/// A device that answers reads of holding and input registers (one table) for any unit.
pub struct ModbusServer {
    path: String,
    device: Shared,
    _near: File,
    task: JoinHandle<()>,
}

impl ModbusServer {
    /// Starts a device on a new pty.
    ///
    /// # Panics
    /// The system gives no pty.
    #[must_use]
    pub fn start() -> Self {
        let (far, near, path) = crate::pty::open();
        let device = Shared::default();
        let service = device.clone();
        let task = tokio::spawn(async move {
            let _ = rtu::Server::new(far).serve_forever(service).await;
        });
        Self {
            path,
            device,
            _near: near,
            task,
        }
    }

    /// The serial device to name in the site file.
    #[must_use]
    pub fn path(&self) -> &str {
        &self.path
    }

    /// Sets two registers to a 32-bit float, high word first.
    pub fn set_f32(&self, unit: u8, address: u16, value: f32) {
        self.device.set_f32(unit, address, value);
    }

    /// Sets how long the device thinks before each answer.
    pub fn set_delay(&self, delay: Duration) {
        self.device.lock().delay = delay;
    }

    /// Requests answered so far.
    #[must_use]
    pub fn requests(&self) -> u64 {
        self.device.lock().requests
    }
}

impl Drop for ModbusServer {
    fn drop(&mut self) {
        self.task.abort();
    }
}

/// A device, or a gateway with devices behind it, on TCP.
pub struct ModbusTcpServer {
    port: u16,
    device: Shared,
    task: JoinHandle<()>,
}

impl ModbusTcpServer {
    /// Starts one on a free port.
    pub async fn start() -> Self {
        Self::on(0).await
    }

    /// Starts one on this port.
    ///
    /// # Panics
    /// The port is taken.
    pub async fn on(port: u16) -> Self {
        let listener = TcpListener::bind(("127.0.0.1", port))
            .await
            .expect("a port on loopback");
        let port = listener.local_addr().expect("a bound port").port();
        let device = Shared::default();
        let service = device.clone();
        let task = tokio::spawn(async move {
            let connected = |stream, from| {
                let service = service.clone();
                async move { accept_tcp_connection(stream, from, |_| Ok(Some(service.clone()))) }
            };
            let _ = tcp::Server::new(listener).serve(&connected, drop).await;
        });
        Self { port, device, task }
    }

    /// The port it listens on.
    #[must_use]
    pub fn port(&self) -> u16 {
        self.port
    }

    /// Sets two registers to a 32-bit float, high word first.
    pub fn set_f32(&self, unit: u8, address: u16, value: f32) {
        self.device.set_f32(unit, address, value);
    }

    /// Sets a register.
    pub fn set(&self, unit: u8, address: u16, register: u16) {
        self.device.set(unit, address, register);
    }

    /// The next answers take these times; those after them come at once.
    pub fn delay_next(&self, delays: impl IntoIterator<Item = Duration>) {
        self.device.lock().delays.extend(delays);
    }

    /// The next answers refuse.
    pub fn refuse_next(&self, refusals: impl IntoIterator<Item = ExceptionCode>) {
        self.device.lock().refusals.extend(refusals);
    }

    /// Delays that were set and not yet used up.
    #[must_use]
    pub fn delays_left(&self) -> usize {
        self.device.lock().delays.len()
    }

    /// Registers of the longest read asked for.
    #[must_use]
    pub fn longest(&self) -> u16 {
        self.device.lock().longest
    }
}

impl Drop for ModbusTcpServer {
    fn drop(&mut self) {
        self.task.abort();
    }
}

impl Service for Shared {
    type Request = SlaveRequest<'static>;
    type Response = Response;
    type Exception = ExceptionCode;
    type Future = Pin<Box<dyn Future<Output = Result<Response, ExceptionCode>> + Send>>;

    fn call(&self, asked: Self::Request) -> Self::Future {
        let device = self.clone();
        Box::pin(async move {
            let (delay, answer) = {
                let mut device = device.lock();
                device.requests += 1;
                let delay = device.delays.pop_front().unwrap_or(device.delay);
                if let Some(refusal) = device.refusals.pop_front() {
                    return Err(refusal);
                }
                if let Request::ReadHoldingRegisters(_, n) | Request::ReadInputRegisters(_, n) =
                    asked.request
                {
                    device.longest = device.longest.max(n);
                }
                let read = |address: u16, count: u16| -> Result<Vec<u16>, ExceptionCode> {
                    (address..address.saturating_add(count))
                        .map(|a| device.registers.get(&(asked.slave, a)).copied())
                        .collect::<Option<_>>()
                        .ok_or(ExceptionCode::IllegalDataAddress)
                };
                let answer = match asked.request {
                    Request::ReadHoldingRegisters(a, n) => {
                        read(a, n).map(Response::ReadHoldingRegisters)
                    }
                    Request::ReadInputRegisters(a, n) => {
                        read(a, n).map(Response::ReadInputRegisters)
                    }
                    _ => Err(ExceptionCode::IllegalFunction),
                };
                (delay, answer)
            };
            tokio::time::sleep(delay).await;
            answer
        })
    }
}
