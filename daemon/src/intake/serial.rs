//! Serial devices: opening them, and telling when they are gone.

use std::io;
use std::time::Duration;

use tokio::io::{AsyncRead, AsyncReadExt as _, AsyncWrite};
use tokio_serial::{
    ClearBuffer, DataBits, FlowControl, SerialPort as _, SerialPortBuilderExt as _, SerialStream,
    StopBits,
};

use super::link::Link;
use crate::config::{Parity, SerialSettings};

/// A line whose unread input can be thrown away.
pub(crate) trait Wire: AsyncRead + AsyncWrite + Unpin + Send {
    /// Throws away what has arrived and was not read, the system's own buffer included.
    fn discard_input(&mut self) -> io::Result<()>;

    /// Begins or ends a break, on a line that has one.
    fn set_break(&mut self, on: bool) -> io::Result<()>;
}

impl Wire for SerialStream {
    fn discard_input(&mut self) -> io::Result<()> {
        Ok(self.clear(ClearBuffer::Input)?)
    }

    fn set_break(&mut self, on: bool) -> io::Result<()> {
        if on {
            tokio_serial::SerialPort::set_break(self)?;
        } else {
            self.clear_break()?;
        }
        Ok(())
    }
}

impl Link for SerialSettings {
    type Wire = SerialStream;

    async fn open(&self) -> io::Result<SerialStream> {
        let mut port = open(self)?;
        // What came before anybody listened belongs to no request and may begin anywhere.
        port.discard_input()?;
        Ok(port)
    }
}

/// Opens a device.
///
/// # Errors
/// It is not there, not ours, or in use; the message names it.
fn open(settings: &SerialSettings) -> io::Result<SerialStream> {
    let data_bits = match settings.data_bits {
        7 => DataBits::Seven,
        _ => DataBits::Eight,
    };
    let stop_bits = match settings.stop_bits {
        2 => StopBits::Two,
        _ => StopBits::One,
    };
    let parity = match settings.parity {
        Parity::None => tokio_serial::Parity::None,
        Parity::Even => tokio_serial::Parity::Even,
        Parity::Odd => tokio_serial::Parity::Odd,
    };
    let path = settings.port.to_string_lossy();
    tokio_serial::new(path.as_ref(), settings.baud)
        .data_bits(data_bits)
        .stop_bits(stop_bits)
        .parity(parity)
        .flow_control(FlowControl::None)
        .open_native_async()
        .map_err(|e| {
            io::Error::new(
                io::Error::from(e.clone()).kind(),
                format!("{path} cannot be opened: {e}"),
            )
        })
}

/// Reads what is there, at least one byte. A port that has vanished gives an error with some drivers and nothing, for ever
/// and at once, with others: both are "gone" here, since reading on would spin.
pub(crate) async fn read(
    wire: &mut (impl AsyncRead + Unpin),
    buffer: &mut [u8],
) -> io::Result<usize> {
    match wire.read(buffer).await? {
        0 => Err(io::Error::new(
            io::ErrorKind::UnexpectedEof,
            "the device is gone",
        )),
        count => Ok(count),
    }
}

/// Time that `characters` take on the line.
pub(crate) fn duration_of(settings: &SerialSettings, characters: u32) -> Duration {
    let parity = u32::from(settings.parity != Parity::None);
    let bits = 1 + u32::from(settings.data_bits) + parity + u32::from(settings.stop_bits);
    Duration::from_secs(1) * bits * characters / settings.baud.max(1)
}
