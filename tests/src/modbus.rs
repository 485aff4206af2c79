//! A Modbus RTU device on the far end of a pty: a general library's server, with registers and a delay to set.

use std::collections::BTreeMap;
use std::fs::File;
use std::future::Future;
use std::pin::Pin;
use std::sync::{Arc, Mutex, MutexGuard};
use std::time::Duration;

use tokio::task::JoinHandle;
use tokio_modbus::server::{Service, rtu::Server};
use tokio_modbus::{ExceptionCode, Request, Response, SlaveRequest};

#[derive(Default)]
struct Device {
    registers: BTreeMap<(u8, u16), u16>,
    delay: Duration,
    requests: u64,
}

#[derive(Clone, Default)]
struct Shared(Arc<Mutex<Device>>);

impl Shared {
    fn lock(&self) -> MutexGuard<'_, Device> {
        self.0.lock().expect("no test thread panicked")
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
            let _ = Server::new(far).serve_forever(service).await;
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
        let bits = value.to_bits();
        let mut device = self.device.lock();
        device
            .registers
            .insert((unit, address), (bits >> 16) as u16);
        device
            .registers
            .insert((unit, address + 1), (bits & 0xffff) as u16);
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
                (device.delay, answer)
            };
            tokio::time::sleep(delay).await;
            answer
        })
    }
}
