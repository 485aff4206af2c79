//! A log without a time that can be read is no quiet record.

use borewake_tests::{borewake, root};

#[test]
fn times_without_a_zone_are_told_and_nothing_is_played() {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let log = folder.path().join("log.csv");
    let rows = "time,q1.rate,q1.pressure\n2031-03-01 00:00:00,386.7,18035.47\n";
    std::fs::write(&log, rows).expect("the log");
    let site = root().join("demo-data/site.toml");
    let said = borewake(&["replay".as_ref(), site.as_os_str(), log.as_os_str()]);
    assert_eq!(said.code, Some(3), "{said:?}");
    assert!(said.stderr.contains("log.csv"), "{said:?}");
    assert!(said.stderr.contains("with its zone"), "{said:?}");
}
