//! A verb that is interrupted says so with its exit code and leaves nothing behind.

use std::process::{Command, Stdio};

use borewake_tests::site::Site;
use borewake_tests::{program, until};
use rustix::process::{Pid, Signal, kill_process};

#[tokio::test]
async fn an_interrupted_replay_ends_with_its_code_and_leaves_no_store() {
    let site = Site::new(&[]);
    let scratch = tempfile::tempdir().expect("a temporary folder");
    let log = site.folder().join("log.csv");
    let rows = "time,channel,value\n2031-01-01T00:00:00Z,o.pressure,5000\n2031-06-01T00:00:00Z,o.pressure,5000\n";
    std::fs::write(&log, rows).expect("a log");
    let mut replay = Command::new(program())
        .arg("replay")
        .args([site.file(), log])
        .args(["--speed", "1"])
        .env("TMPDIR", scratch.path())
        .stdin(Stdio::null())
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .spawn()
        .expect("borewake starts");
    let left = || {
        std::fs::read_dir(scratch.path())
            .expect("the folder")
            .count()
    };
    until("the replay to open its store", async || {
        (left() > 0).then_some(())
    })
    .await;
    let pid = i32::try_from(replay.id()).ok().and_then(Pid::from_raw);
    kill_process(pid.expect("a process number"), Signal::INT).expect("the replay runs");
    let status = replay.wait().expect("the replay ends");
    assert_eq!((status.code(), left()), (Some(4), 0));
}
