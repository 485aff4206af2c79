//! `borewake alarms` as its users meet it, with a daemon behind the socket and without one.

#![allow(clippy::unwrap_used, reason = "a test says what it expects")]

use std::path::Path;
use std::process::{Command, Output};

use borewake::control::{Ask, Server};
use borewake::record::{
    Acknowledgement, Alarm, AlarmId, AlarmKind, AlarmView, CommandKind, Condition, Latch, Priority,
    Reply, Snapshot, Stamp, Suppression,
};
use tokio::sync::mpsc;

fn alarms(site: &Path, arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_borewake"))
        .env("USER", "jm")
        .arg("alarms")
        .arg(site)
        .args(arguments)
        .output()
        .unwrap()
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8(bytes.to_vec()).unwrap()
}

/// A site file of the program's own tests, in a folder of its own.
fn site(folder: &Path) -> (std::path::PathBuf, std::path::PathBuf) {
    let file = folder.join("site.toml");
    let full = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/sites/full.toml");
    std::fs::copy(full, &file).unwrap();
    let store = borewake::config::load(&file).unwrap().store.folder;
    std::fs::create_dir_all(&store).unwrap();
    (file, store)
}

fn watch() -> AlarmView {
    let alarm = Alarm {
        id: AlarmId("watch".into()),
        kind: AlarmKind::Watch,
        occurrence: 3,
        sequence: 1,
        condition: Condition::Present,
        acknowledgement: Acknowledgement::Unacknowledged,
        latch: Latch::None,
        suppression: Suppression::None,
        priority: Priority::High,
        since: Stamp::parse("2031-05-02T04:00:00Z").unwrap(),
        summary: "leak of 14.2 ± 1.1 m3/d".into(),
        response: "call the duty engineer".into(),
        finding: None,
    };
    AlarmView {
        state: alarm.state(),
        alarm,
    }
}

/// Answers as the keeper does, with the command's own words.
async fn daemon(server: Server) {
    let (asks, mut asked) = mpsc::channel::<Ask>(4);
    tokio::spawn(server.serve(asks, std::future::pending()));
    while let Some((command, back)) = asked.recv().await {
        let reply = match command.kind {
            CommandKind::Show => Reply::State {
                snapshot: Box::new(Snapshot {
                    site: "sorrel-flat".into(),
                    alarms: vec![watch()],
                    ..Snapshot::default()
                }),
            },
            CommandKind::Acknowledge { alarm, occurrence } if occurrence == 3 => Reply::Done {
                text: format!("{alarm} {occurrence} {} {}", command.by, command.note),
            },
            CommandKind::Adopt { occurrence: 3, .. } => Reply::Done {
                text: "adopted".into(),
            },
            _ => Reply::Refused {
                why: "it is occurrence 3 now".into(),
            },
        };
        let _ = back.send(reply);
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn people_are_answered_by_the_daemon() {
    let folder = tempfile::tempdir().unwrap();
    let (file, store) = site(folder.path());
    tokio::spawn(daemon(Server::bind(&store).unwrap()));

    let output = alarms(&file, &[]);
    assert_eq!(output.status.code(), Some(0), "{output:?}");
    let told = text(&output.stdout);
    assert!(
        told.contains("leak of 14.2 ± 1.1 m3/d") && told.contains("unacknowledged"),
        "{told}"
    );
    assert!(told.contains("not a safety function"), "{told}");

    let output = alarms(&file, &["list", "--json"]);
    let document: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(document["live"], true);
    assert_eq!(document["alarms"][0]["state"], "unacknowledged");
    assert_eq!(document["alarms"][0]["occurrence"], 3);

    // Without an occurrence it is the present one; without a name it is the user.
    let output = alarms(&file, &["acknowledge", "watch", "--note", "on it"]);
    assert_eq!(text(&output.stdout), "watch 3 jm on it\n");
    let output = alarms(
        &file,
        &["ack", "watch", "--occurrence", "2", "--by", "night shift"],
    );
    assert_eq!(output.status.code(), Some(2));
    assert!(text(&output.stderr).contains("refused: it is occurrence 3 now"));
    let output = alarms(&file, &["adopt", "watch"]);
    assert_eq!(text(&output.stdout), "adopted\n");
    let output = alarms(&file, &["adopt", "wacht"]);
    assert_eq!(output.status.code(), Some(2));
    assert!(
        text(&output.stderr).contains("there are watch"),
        "{output:?}"
    );
}

#[test]
fn without_a_daemon_it_says_so_and_ends_with_three() {
    let folder = tempfile::tempdir().unwrap();
    let (file, store) = site(folder.path());
    for arguments in [&[][..], &["acknowledge", "watch"], &["adopt", "watch"]] {
        let output = alarms(&file, arguments);
        assert_eq!(output.status.code(), Some(3), "{output:?}");
        let why = text(&output.stderr);
        assert!(why.contains("no daemon is running"), "{why}");
        assert!(why.contains("borewake run"), "{why}");
    }
    // A store without a daemon: what it holds is listed.
    tokio::runtime::Runtime::new().unwrap().block_on(async {
        let options = borewake::store::StoreOptions::default();
        let opened = borewake::store::Store::open(&store, options).await.unwrap();
        opened.store.close().await.unwrap();
    });
    let output = alarms(&file, &["list"]);
    assert_eq!(output.status.code(), Some(0), "{output:?}");
    assert!(text(&output.stdout).starts_with("No alarm stands"));
    assert!(text(&output.stderr).contains("as it left them"));
}
