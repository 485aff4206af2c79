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
        "  name        transmissivity m3/(Pa s)  storativity m/Pa  diffusivity m2/s  anisotropy  leakance below m/(Pa s)",
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
    let mesh = &document["mesh"];
    assert!(mesh["quality"]["least_angle"].as_f64().unwrap() > 15.0);
    assert!(mesh["spread"]["sizes"].as_f64().unwrap() < 1e-3);
}

#[test]
fn the_mesh_is_told_and_a_ground_without_one_names_the_place() {
    let told = text(&check(&["check", "full.toml"]).stdout);
    for piece in [
        "\nMesh\n",
        " nodes in one layer\n",
        "least angle ",
        "steepest grading ",
        "moves them by ",
    ] {
        assert!(told.contains(piece), "{piece}\n--\n{told}");
    }
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("site.toml");
    let crossing = "[[barrier]]\nname = \"cross fault\"\nline = [[\"1 km\", \"0 m\"], [\"2 km\", \"0 m\"]]\nconductance = \"0 m3/(Pa s m)\"\n\n[[barrier]]";
    let full = include_str!("sites/full.toml").replacen("[[barrier]]", crossing, 1);
    std::fs::write(&path, full).unwrap();
    let output = check(&["check", path.to_str().unwrap()]);
    assert_eq!(output.status.code(), Some(1));
    let told = text(&output.stdout);
    for piece in [
        "cannot be meshed near x = 14",
        "barrier cross fault and barrier east fault cross",
        "does not hold",
    ] {
        assert!(told.contains(piece), "{piece}\n--\n{told}");
    }
    let output = check(&["check", "--json", path.to_str().unwrap()]);
    let document: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(document["holds"], false);
    assert!(document["mesh"]["place_m"][0].as_f64().unwrap() > 1400.0);
}

#[test]
fn what_cannot_be_meshed_is_named_with_its_mend() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("site.toml");
    let full = include_str!("sites/full.toml");
    for (from, to, told) in [
        (
            "at = [\"310 m\", \"-480 m\"]",
            "at = [\"1.5 km\", \"0.25 km\"]",
            "barrier east fault passes through gauge O-2; move the barrier or the point",
        ),
        (
            "at = [\"2.4 km\", \"-0.8 km\"]",
            "at = [\"40 km\", \"-0.8 km\"]",
            "neighbour old quarry well lies outside the edge; give the edge a distance above",
        ),
        (
            "line = [[\"1.4 km\", \"-2 km\"], [\"1.6 km\", \"2.5 km\"]]",
            "line = [[\"90 km\", \"-2 km\"], [\"90 km\", \"2.5 km\"]]",
            "barrier east fault lies outside the edge; remove it",
        ),
    ] {
        assert_eq!(full.matches(from).count(), 1, "{from}");
        std::fs::write(&path, full.replace(from, to)).unwrap();
        let output = check(&["check", path.to_str().unwrap()]);
        assert_eq!(output.status.code(), Some(1), "{told}");
        let found = text(&output.stdout);
        assert!(found.contains(told), "{told}\n--\n{found}");
    }
}

#[test]
fn a_river_and_a_fracture_are_meshed_and_told() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("site.toml");
    let river = "[[stage]]\nname = \"river\"\nline = [[\"0.9 km\", \"-30 km\"], [\"1.1 km\", \"0 km\"], [\"0.9 km\", \"30 km\"]]\nconductance = \"1e-10 m3/(Pa s m)\"\nchannel = \"o2.pressure\"\n\n[[barrier]]";
    let site = include_str!("sites/full.toml")
        .replacen("[[barrier]]", river, 1)
        .replacen(
            "at = [\"0 m\", \"0 m\"]",
            "trace = [[\"-120 m\", \"0 m\"], [\"80 m\", \"40 m\"]]",
            1,
        );
    std::fs::write(&path, site).unwrap();
    let output = check(&["check", path.to_str().unwrap()]);
    let told = text(&output.stdout);
    assert_eq!(output.status.code(), Some(0), "{told}");
    for piece in ["Stages\n", "river", "o2.pressure", "least angle "] {
        assert!(told.contains(piece), "{piece}\n--\n{told}");
    }
}
