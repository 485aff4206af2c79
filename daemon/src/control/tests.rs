//! The socket with a daemon behind it that answers at once.

use std::io::{Read as _, Write as _};
use std::os::unix::fs::PermissionsExt as _;
use std::os::unix::net::UnixStream;

use tokio::sync::{mpsc, oneshot};
use tokio::task::JoinHandle;

use super::*;
use crate::record::{AlarmId, Command, CommandKind, Reply, Snapshot};

fn acknowledge() -> Command {
    Command {
        by: "jm".into(),
        note: "seen \"it\"\n".into(),
        kind: CommandKind::Acknowledge {
            alarm: AlarmId("watch".into()),
            occurrence: 3,
        },
    }
}

/// A daemon that says what it was asked.
fn daemon(folder: &Path) -> (oneshot::Sender<()>, JoinHandle<()>) {
    let server = Server::bind(folder).unwrap();
    let (asks, mut asked) = mpsc::channel::<Ask>(4);
    tokio::spawn(async move {
        while let Some((command, back)) = asked.recv().await {
            let reply = match command.kind {
                CommandKind::Show => Reply::State {
                    snapshot: Box::new(Snapshot {
                        site: "sorrel-flat".into(),
                        ..Snapshot::default()
                    }),
                },
                _ if command == acknowledge() => Reply::Done {
                    text: "as sent".into(),
                },
                _ => continue,
            };
            let _ = back.send(reply);
        }
    });
    let (stop, stopped) = oneshot::channel();
    let task = tokio::spawn(server.serve(asks, async {
        let _ = stopped.await;
    }));
    (stop, task)
}

async fn asking(folder: &Path, command: Command) -> Result<Reply, ControlError> {
    let folder = folder.to_owned();
    tokio::task::spawn_blocking(move || ask(&folder, &command))
        .await
        .unwrap()
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn commands_and_answers_pass_whole() {
    let folder = tempfile::tempdir().unwrap();
    let (stop, task) = daemon(folder.path());
    let socket = folder.path().join(SOCKET);
    let mode = std::fs::metadata(&socket).unwrap().permissions().mode();
    assert_eq!(mode & 0o777, 0o600);
    let reply = asking(folder.path(), acknowledge()).await.unwrap();
    assert_eq!(
        reply,
        Reply::Done {
            text: "as sent".into()
        }
    );
    let show = Command {
        kind: CommandKind::Show,
        ..acknowledge()
    };
    let reply = asking(folder.path(), show).await.unwrap();
    assert!(matches!(reply, Reply::State { snapshot } if snapshot.site == "sorrel-flat"));
    stop.send(()).unwrap();
    task.await.unwrap();
    assert!(!socket.exists(), "the file goes with the daemon");
    let why = asking(folder.path(), acknowledge()).await.unwrap_err();
    assert!(matches!(why, ControlError::NotRunning { .. }), "{why}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_dropped_command_and_a_strange_line_are_refused() {
    let folder = tempfile::tempdir().unwrap();
    let (_stop, _task) = daemon(folder.path());
    let unknown = Command {
        by: "nobody".into(),
        ..acknowledge()
    };
    let reply = asking(folder.path(), unknown).await.unwrap();
    assert!(matches!(reply, Reply::Refused { .. }), "nobody answered it");

    let path = folder.path().join(SOCKET);
    let answers = tokio::task::spawn_blocking(move || {
        let mut stream = UnixStream::connect(&path).unwrap();
        // Two lines in one write, then one that is too long: each is answered, the last one ends the connection.
        let good = serde_json::to_string(&acknowledge()).unwrap();
        stream
            .write_all(format!("{{\"ask\":\"dance\"}}\n{good}\n").as_bytes())
            .unwrap();
        let long = vec![b'x'; 64 * 1024];
        stream.write_all(&long).unwrap();
        let mut text = String::new();
        stream.read_to_string(&mut text).unwrap();
        text
    })
    .await
    .unwrap();
    let lines: Vec<&str> = answers.lines().collect();
    assert_eq!(lines.len(), 3, "{answers}");
    assert!(lines[0].contains("no command"), "{answers}");
    assert!(lines[1].contains("as sent"), "{answers}");
    assert!(lines[2].contains("65536 bytes"), "{answers}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_file_left_behind_is_replaced_and_a_living_daemon_is_not() {
    let folder = tempfile::tempdir().unwrap();
    // A listener that is dropped leaves its file, as a killed daemon does.
    drop(std::os::unix::net::UnixListener::bind(folder.path().join(SOCKET)).unwrap());
    let why = asking(folder.path(), acknowledge()).await.unwrap_err();
    assert!(matches!(why, ControlError::NotRunning { .. }), "{why}");
    let (_stop, _task) = daemon(folder.path());
    let why = Server::bind(folder.path()).unwrap_err();
    assert!(matches!(why, ControlError::Running { .. }), "{why}");
    assert!(asking(folder.path(), acknowledge()).await.is_ok());
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_long_path_is_no_obstacle() {
    let folder = tempfile::tempdir().unwrap();
    let deep = folder.path().join("d".repeat(120));
    std::fs::create_dir(&deep).unwrap();
    let (_stop, _task) = daemon(&deep);
    assert!(deep.join(SOCKET).exists());
    assert!(asking(&deep, acknowledge()).await.is_ok());
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn silent_connections_do_not_shut_others_out() {
    let folder = tempfile::tempdir().unwrap();
    let (_stop, _task) = daemon(folder.path());
    let path = folder.path().join(SOCKET);
    let mut silent: Vec<UnixStream> = (0..15)
        .map(|_| UnixStream::connect(&path).unwrap())
        .collect();
    assert!(asking(folder.path(), acknowledge()).await.is_ok());
    // With all places taken one waits, and gets its turn when another leaves.
    silent.push(UnixStream::connect(&path).unwrap());
    let asking = tokio::spawn({
        let folder = folder.path().to_owned();
        async move { asking(&folder, acknowledge()).await }
    });
    silent.clear();
    assert!(asking.await.unwrap().is_ok());
}
