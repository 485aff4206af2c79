//! Requests to the running daemon over a Unix socket, and the client that sends them; tokens for those who ask over HTTP.
//!
//! One line of JSON asks ([`Command`]), one line answers ([`Reply`]); a connection may ask again. The socket is
//! `control.sock` in the store's folder, for the daemon's own user only: who may write there may ask.
//!
//! [`Command`]: crate::record::Command
//! [`Reply`]: crate::record::Reply

mod client;
mod server;
pub mod tokens;

use std::fs::File;
use std::io;
use std::os::fd::AsRawFd as _;
use std::path::{Path, PathBuf};

use thiserror::Error;

pub use client::ask;
pub use server::{Ask, Server};

/// Name of the socket in the store's folder.
pub const SOCKET: &str = "control.sock";

/// Longest path that a socket's address holds \[bytes\]; the system allows 108 with a zero at the end.
const LONGEST_PATH: usize = 107;

/// Why the daemon cannot be reached, or cannot be asked.
#[derive(Debug, Error)]
pub enum ControlError {
    /// Nobody listens.
    #[error("no daemon is running on {}; start it with `borewake run`", folder.display())]
    NotRunning {
        /// The store's folder.
        folder: PathBuf,
    },
    /// Somebody listens already.
    #[error("another daemon is running on {}; stop it first", folder.display())]
    Running {
        /// The store's folder.
        folder: PathBuf,
    },
    /// The socket belongs to another user.
    #[error("the daemon on {} runs as another user; ask as that user or as root", folder.display())]
    NotAllowed {
        /// The store's folder.
        folder: PathBuf,
    },
    /// The socket cannot be made or used.
    #[error("the control socket in {} cannot be used while {doing}: {source}", folder.display())]
    Io {
        /// The store's folder.
        folder: PathBuf,
        /// What was being done.
        doing: &'static str,
        /// What the system said.
        source: io::Error,
    },
    /// The answer is none.
    #[error("the daemon's answer cannot be read: {0}; is it of another version?")]
    Unreadable(#[from] serde_json::Error),
    /// The daemon closed the connection without an answer.
    #[error("the daemon ended before it answered")]
    NoAnswer,
}

/// A folder by a name short enough for a socket's address.
#[derive(Debug)]
struct Reach {
    base: PathBuf,
    /// Keeps the folder open while it is reached through its descriptor.
    _open: Option<File>,
}

impl Reach {
    /// A folder by its own path, or where that is too long through an open descriptor of it.
    fn of(folder: &Path, longest_name: &str) -> io::Result<Self> {
        let plain = folder.join(longest_name);
        if plain.as_os_str().len() <= LONGEST_PATH {
            return Ok(Self {
                base: folder.to_owned(),
                _open: None,
            });
        }
        let open = File::open(folder)?;
        Ok(Self {
            base: PathBuf::from(format!("/proc/self/fd/{}", open.as_raw_fd())),
            _open: Some(open),
        })
    }

    fn path(&self, name: &str) -> PathBuf {
        self.base.join(name)
    }
}

#[cfg(test)]
mod tests;
