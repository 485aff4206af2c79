//! The side that answers.

use std::fs::{self, Permissions};
use std::future::Future;
use std::io;
use std::os::unix::fs::PermissionsExt as _;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::Duration;

use tokio::io::{AsyncBufReadExt as _, AsyncReadExt as _, AsyncWriteExt as _, BufReader};
use tokio::net::{UnixListener, UnixStream};
use tokio::sync::{Semaphore, mpsc, oneshot};
use tokio::task::JoinSet;
use tokio::time::{sleep, timeout};

use super::{ControlError, Reach, SOCKET};
use crate::record::{Command, Reply};

/// The socket's name until it is ready.
const NEW: &str = "control.sock.new";
/// Connections at a time; more wait.
const CONNECTIONS: usize = 16;
/// Longest command \[bytes\].
const LONGEST: u64 = 64 * 1024;
/// How long a connection may say nothing.
const IDLE: Duration = Duration::from_secs(30);
/// How long a stop waits for connections to end.
const GOODBYE: Duration = Duration::from_millis(500);
/// How long the daemon may take to answer.
const ANSWER: Duration = Duration::from_secs(50);

/// A command on its way to the daemon, with the way back for its answer.
pub type Ask = (Command, oneshot::Sender<Reply>);

/// The listening socket; its file goes when this does.
#[derive(Debug)]
pub struct Server {
    listener: UnixListener,
    path: PathBuf,
}

impl Server {
    /// Listens in a store's folder, for the daemon's own user only. A file left behind by a daemon that ended badly
    /// is replaced. Needs a running runtime.
    ///
    /// # Errors
    /// Another daemon listens there, or the socket cannot be made.
    pub fn bind(folder: &Path) -> Result<Self, ControlError> {
        let failed = |doing| {
            move |source: io::Error| ControlError::Io {
                folder: folder.to_owned(),
                doing,
                source,
            }
        };
        let reach = Reach::of(folder, NEW).map_err(failed("opening the folder"))?;
        match std::os::unix::net::UnixStream::connect(reach.path(SOCKET)) {
            Ok(_) => {
                return Err(ControlError::Running {
                    folder: folder.to_owned(),
                });
            }
            Err(e)
                if matches!(
                    e.kind(),
                    io::ErrorKind::NotFound | io::ErrorKind::ConnectionRefused
                ) => {}
            Err(e) => return Err(failed("looking for another daemon")(e)),
        }
        // Made under another name and moved when only we may open it: there is no moment at which others could.
        let new = folder.join(NEW);
        match fs::remove_file(&new) {
            Err(e) if e.kind() != io::ErrorKind::NotFound => {
                return Err(failed("removing an old socket")(e));
            }
            _ => {}
        }
        let listener = UnixListener::bind(reach.path(NEW)).map_err(failed("making it"))?;
        fs::set_permissions(&new, Permissions::from_mode(0o600))
            .map_err(failed("closing it to others"))?;
        let path = folder.join(SOCKET);
        fs::rename(&new, &path).map_err(failed("putting it in its place"))?;
        Ok(Self { listener, path })
    }

    /// Takes commands and hands them on until `stop` completes. A command that nobody answers is refused.
    pub async fn serve(self, commands: mpsc::Sender<Ask>, stop: impl Future<Output = ()> + Send) {
        let room = Arc::new(Semaphore::new(CONNECTIONS));
        let mut talks = JoinSet::new();
        let mut stop = std::pin::pin!(stop);
        loop {
            let accepted = tokio::select! {
                () = stop.as_mut() => break,
                Some(_) = talks.join_next(), if !talks.is_empty() => continue,
                accepted = accept(&self.listener, &room) => accepted,
            };
            match accepted {
                Some((stream, place)) => {
                    let commands = commands.clone();
                    talks.spawn(async move {
                        if let Err(why) = talk(stream, &commands).await {
                            tracing::debug!(%why, "a control connection ended");
                        }
                        drop(place);
                    });
                }
                // Out of descriptors, mostly: it passes.
                None => sleep(Duration::from_millis(200)).await,
            }
        }
        // Answers that are on their way still go out.
        let _ = timeout(GOODBYE, async {
            while talks.join_next().await.is_some() {}
        })
        .await;
    }
}

impl Drop for Server {
    fn drop(&mut self) {
        let _ = fs::remove_file(&self.path);
    }
}

async fn accept(
    listener: &UnixListener,
    room: &Arc<Semaphore>,
) -> Option<(UnixStream, tokio::sync::OwnedSemaphorePermit)> {
    let place = Arc::clone(room).acquire_owned().await.ok()?;
    match listener.accept().await {
        Ok((stream, _)) => Some((stream, place)),
        Err(why) => {
            tracing::warn!(%why, "a control connection was not accepted");
            None
        }
    }
}

/// Answers one connection line by line until it ends or says nothing for too long.
async fn talk(stream: UnixStream, commands: &mpsc::Sender<Ask>) -> io::Result<()> {
    let (read, mut write) = stream.into_split();
    let mut read = BufReader::new(read);
    let mut line = Vec::new();
    loop {
        line.clear();
        let mut limited = (&mut read).take(LONGEST);
        let got = timeout(IDLE, limited.read_until(b'\n', &mut line)).await;
        let Ok(got) = got else { return Ok(()) };
        if got? == 0 {
            return Ok(());
        }
        let whole = line.last() == Some(&b'\n');
        let reply = if whole {
            answer(&line, commands).await
        } else {
            refused(format!("a command is one line of at most {LONGEST} bytes"))
        };
        let mut text = serde_json::to_vec(&reply)?;
        text.push(b'\n');
        write.write_all(&text).await?;
        if !whole {
            return Ok(());
        }
    }
}

async fn answer(line: &[u8], commands: &mpsc::Sender<Ask>) -> Reply {
    let command: Command = match serde_json::from_slice(line) {
        Ok(command) => command,
        Err(why) => return refused(format!("this is no command: {why}")),
    };
    let (back, answer) = oneshot::channel();
    let answered = timeout(ANSWER, async {
        commands.send((command, back)).await.ok()?;
        answer.await.ok()
    });
    match answered.await {
        Ok(Some(reply)) => reply,
        Ok(None) => refused("the daemon is stopping".to_owned()),
        Err(_) => refused(
            "the daemon did not answer in time; look at the alarms again to see whether it was done"
                .to_owned(),
        ),
    }
}

fn refused(why: String) -> Reply {
    Reply::Refused { why }
}
