//! Commissioning: histories that are refused by name, and figures that no ground is known to have.

use std::fs;
use std::path::Path;

use borewake_tests::{borewake_in, root};
use tempfile::TempDir;

/// A copy of the invented site with its first eight days; `change` may spoil each row of the log (its cells), `site` the file.
fn copy(site: impl Fn(String) -> String, change: impl Fn(usize, &mut Vec<String>)) -> TempDir {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let from = root().join("demo-data");
    let text = fs::read_to_string(from.join("site.toml")).expect("the site file");
    fs::write(folder.path().join("site.toml"), site(text)).expect("the site file");
    let log = fs::read_to_string(from.join("log.csv")).expect("the log");
    let rows = log
        .lines()
        .take_while(|row| row.starts_with("time") || *row < "2031-03-09");
    let mut head = Vec::new();
    let rows: Vec<String> = rows
        .enumerate()
        .map(|(number, row)| {
            let mut cells: Vec<String> = row.split(',').map(str::to_owned).collect();
            if number == 0 {
                head.clone_from(&cells);
            } else {
                change(number, &mut cells);
            }
            cells.join(",")
        })
        .collect();
    fs::write(folder.path().join("log.csv"), rows.join("\n")).expect("a log");
    folder
}

/// Column of a channel in the log.
fn column(channel: &str) -> usize {
    let log = fs::read_to_string(root().join("demo-data/log.csv")).expect("the log");
    let head = log.lines().next().expect("a head");
    let found = head.split(',').position(|cell| cell == channel);
    found.expect("the channel's column")
}

fn refused(folder: &Path) -> String {
    let output = borewake_in(folder, &["commission", "site.toml", "--log", "log.csv"]);
    assert_eq!(output.code, Some(3), "{output:?}");
    output.stderr
}

#[test]
fn histories_that_tell_nothing_are_refused_by_name() {
    let rates: Vec<usize> = ["q1.rate", "q2.rate", "q3.rate"].map(column).to_vec();
    let steady = copy(
        |text| text,
        |_, cells| {
            for &rate in &rates {
                "200".clone_into(&mut cells[rate]);
            }
        },
    );
    let told = refused(steady.path());
    assert!(
        told.contains("the rate of Q-1, Q-2 and Q-3 never changes"),
        "{told}"
    );
    let gauge = column("m2.pressure");
    let silent = copy(|text| text, |_, cells| cells[gauge].clear());
    let told = refused(silent.path());
    assert!(told.contains("no usable reading of M-2"), "{told}");
}

#[test]
fn a_diffusivity_that_no_aquifer_has_is_told_of_by_check() {
    let slow = |text: String| {
        text.replace(
            "compressibility = \"7.0e-10 /Pa\"",
            "compressibility = \"7.0e-6 /Pa\"",
        )
    };
    let folder = copy(slow, |_, _| {});
    let told = borewake_in(folder.path(), &["check", "site.toml"]).done();
    assert!(told.stdout.contains("diffusivity T/S"), "{}", told.stdout);
    let folder = copy(|text| text, |_, _| {});
    let told = borewake_in(folder.path(), &["check", "site.toml"]).done();
    assert!(!told.stdout.contains("diffusivity T/S"), "{}", told.stdout);
}
