//! `borewake check` as its users meet it.

#![allow(clippy::unwrap_used, reason = "a test says what it expects")]

use std::path::Path;
use std::process::{Command, Output};

fn check(arguments: &[&str]) -> Output {
    let sites = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/sites");
    Command::new(env!("CARGO_BIN_EXE_borewake"))
        .current_dir(sites)
        .args(arguments)
        .output()
        .unwrap()
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8(bytes.to_vec()).unwrap()
}

#[test]
fn a_site_that_holds_is_summed_up() {
    let output = check(&["check", "full.toml"]);
    assert_eq!(output.status.code(), Some(0));
    let told = text(&output.stdout);
    for line in [
        "Sorrel Flat (sorrel-flat)",
        "  name        transmissivity m3/(Pa s)  storativity m/Pa  diffusivity m2/s  leakance below m/(Pa s)",
        "  O-2      310     -480  -        lower sand  o2.pressure  absolute   downhole       120             2",
        "  skid          modbus-rtu         1  /dev/ttyUSB0 19200 8E1, every 1 s",
        "  limit-O-2-above  above       6100          0.48   30 s  high      initials and date",
        "full.toml holds.",
    ] {
        assert!(told.lines().any(|l| l == line), "{line}\n--\n{told}");
    }
}

#[test]
fn mistakes_end_with_one_and_a_missing_file_with_two() {
    let output = check(&["check", "ten_mistakes.toml"]);
    assert_eq!(output.status.code(), Some(1));
    assert!(text(&output.stdout).starts_with("ten_mistakes.toml: 10 mistakes\n"));
    let output = check(&["check", "nowhere.toml"]);
    assert_eq!(output.status.code(), Some(2));
    assert_eq!(text(&output.stdout), "");
    let told = text(&output.stderr);
    assert!(
        told.starts_with("borewake: nowhere.toml cannot be read: "),
        "{told}"
    );
    assert_eq!(check(&["chekc"]).status.code(), Some(2));
    assert_eq!(check(&["--help"]).status.code(), Some(0));
}

#[test]
fn json_is_one_document() {
    let output = check(&["check", "--json", "ten_mistakes.toml"]);
    let document: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(document["holds"], false);
    let mistakes = document["mistakes"].as_array().unwrap();
    assert_eq!(
        (mistakes.len(), &mistakes[0]["line"]),
        (10, &serde_json::json!(2))
    );
    let output = check(&["--json", "check", "full.toml"]);
    let document: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(document["holds"], true);
    assert_eq!(document["site"]["gauges"][0]["channel"], "o2.pressure");
    assert_eq!(document["model"]["usable"], false);
}
