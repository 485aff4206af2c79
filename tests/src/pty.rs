//! Pseudo-terminals: a wire between a test's device and the daemon.

use std::fs::File;
use std::os::unix::fs::OpenOptionsExt as _;

use tokio::io::AsyncWriteExt as _;
use tokio_serial::{SerialPort as _, SerialStream};

/// `O_NOCTTY` of Linux.
const NO_CONTROLLING_TERMINAL: i32 = 0o400;

/// A new pair: the far end, the near end held open, and the near end's path.
///
/// The near end is held so that the far end outlives a daemon that comes and goes; as a plain file, because a serial port
/// of the library's would lock the daemon out.
pub(crate) fn open() -> (SerialStream, File, String) {
    let (far, near) = SerialStream::pair().expect("a pty pair");
    let path = near.name().expect("a pty's near end has a name");
    let held = File::options()
        .read(true)
        .write(true)
        .custom_flags(NO_CONTROLLING_TERMINAL)
        .open(&path)
        .expect("the near end opens");
    (far, held, path)
}

/// A device that speaks when it likes.
pub struct TextDevice {
    path: String,
    far: SerialStream,
    _near: File,
}

impl TextDevice {
    /// Starts a device on a new pty.
    #[must_use]
    pub fn start() -> Self {
        let (far, near, path) = open();
        Self {
            path,
            far,
            _near: near,
        }
    }

    /// The serial device to name in the site file.
    #[must_use]
    pub fn path(&self) -> &str {
        &self.path
    }

    /// Puts bytes on the wire.
    pub async fn send(&mut self, bytes: &[u8]) {
        self.far.write_all(bytes).await.expect("the wire takes it");
    }
}
