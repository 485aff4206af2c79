//! The side that asks.

use std::io::{self, BufRead as _, BufReader, Read as _, Write as _};
use std::os::unix::net::UnixStream;
use std::path::Path;
use std::time::Duration;

use super::{ControlError, Reach, SOCKET};
use crate::record::{Command, Reply};

/// Longest wait for the daemon; it answers when the command is on disk.
const WAIT: Duration = Duration::from_secs(60);
/// Longest answer that is read \[bytes\].
const LONGEST: u64 = 64 * 1024 * 1024;

/// Asks the daemon that runs on a store's folder, and waits for its answer.
///
/// # Errors
/// No daemon runs there, or it could not be asked. A refusal is an answer, not an error.
pub fn ask(folder: &Path, command: &Command) -> Result<Reply, ControlError> {
    let failed = |doing| {
        move |source: io::Error| match source.kind() {
            io::ErrorKind::NotFound | io::ErrorKind::ConnectionRefused => {
                ControlError::NotRunning {
                    folder: folder.to_owned(),
                }
            }
            io::ErrorKind::PermissionDenied => ControlError::NotAllowed {
                folder: folder.to_owned(),
            },
            _ => ControlError::Io {
                folder: folder.to_owned(),
                doing,
                source,
            },
        }
    };
    let reach = Reach::of(folder, SOCKET).map_err(failed("looking for it"))?;
    let mut stream = UnixStream::connect(reach.path(SOCKET)).map_err(failed("connecting"))?;
    let limits = stream
        .set_read_timeout(Some(WAIT))
        .and_then(|()| stream.set_write_timeout(Some(WAIT)));
    limits.map_err(failed("connecting"))?;
    let mut line = serde_json::to_vec(command)?;
    line.push(b'\n');
    stream.write_all(&line).map_err(failed("asking"))?;
    let mut answer = Vec::new();
    BufReader::new(stream.take(LONGEST))
        .read_until(b'\n', &mut answer)
        .map_err(failed("waiting for the answer"))?;
    if answer.is_empty() {
        return Err(ControlError::NoAnswer);
    }
    Ok(serde_json::from_slice(&answer)?)
}
