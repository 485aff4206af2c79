//! The invented site: played twice it says the same, and it says what was planted.

use std::fs;
use std::path::{Path, PathBuf};

use borewake_tests::{borewake_in, root};
use tempfile::TempDir;

/// A copy of the invented site with its log up to an instant; the program writes beside the site file.
fn copy(until: &str) -> (TempDir, PathBuf) {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let from = root().join("demo-data");
    fs::copy(from.join("site.toml"), folder.path().join("site.toml")).expect("the site file");
    let log = fs::read_to_string(from.join("log.csv")).expect("the log");
    let rows = log
        .lines()
        .take_while(|row| row.starts_with("time") || *row < until);
    fs::write(
        folder.path().join("log.csv"),
        rows.collect::<Vec<_>>().join("\n"),
    )
    .expect("a log");
    let site = folder.path().join("site.toml");
    (folder, site)
}

fn events(folder: &Path, file: &str) -> String {
    let _ = borewake_in(
        folder,
        &["replay", "site.toml", "log.csv", "--events", file],
    )
    .done();
    fs::read_to_string(folder.join(file)).expect("events")
}

#[test]
fn two_replays_give_byte_identical_events() {
    let (folder, _) = copy("2031-04-21");
    let commission = [
        "commission",
        "site.toml",
        "--log",
        "log.csv",
        "--to",
        "2031-04-10T00:00:00Z",
    ];
    let _ = borewake_in(folder.path(), &commission).done();
    let first = events(folder.path(), "first.ndjson");
    assert!(first.lines().count() > 0);
    assert!(first == events(folder.path(), "second.ndjson"));
    // The leak of 18 April is told of, and marked as replayed.
    let alarm = first
        .lines()
        .map(|line| {
            serde_json::from_str::<serde_json::Value>(line).expect("one JSON document a line")
        })
        .find(|e| e["type"] == "borewake.alarm.v1" && e["data"]["finding"]["cause"] == "leak")
        .expect("the leak");
    assert_eq!(alarm["replay"], true);
    assert!(alarm["time"].as_str().expect("a time") >= "2031-04-18T06:00:00");
}
