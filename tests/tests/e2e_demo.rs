//! The demonstration names every planted cause within what is asked of it, and raises no other alarm of the watch.

use borewake_tests::borewake_in;

#[test]
fn the_demonstration_finds_what_was_planted_and_nothing_else() {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let said = borewake_in(
        folder.path(),
        &["demo", "--json", "--listen", "127.0.0.1:0"],
    )
    .done();
    let last = said.stdout.lines().last().expect("a last line");
    let score: serde_json::Value = serde_json::from_str(last).expect("one JSON document a line");
    assert_eq!(score["holds"], true, "{score}");
    assert_eq!(score["alarms"], 3, "{score}");
    let pictures = std::fs::read_dir(folder.path().join("borewake-demo")).expect("pictures");
    assert!(pictures.count() >= 3);
}
