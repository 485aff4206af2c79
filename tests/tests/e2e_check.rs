//! `check`: what the tests and the demonstration stand on must hold, and every mistake is told at once.

use borewake_tests::site::{self, Site};
use borewake_tests::{borewake, root};

#[test]
fn the_invented_site_and_the_bench_of_these_tests_hold() {
    let demo = root().join("demo-data/site.toml");
    let _ = borewake(&["check".as_ref(), demo.as_os_str()]).done();
    let bench = Site::new(&[
        &site::modbus_source("/dev/ttyS0"),
        &site::mqtt_source("mqtt://127.0.0.1:1883"),
        site::LIMIT,
        &site::mqtt_publish("mqtt://127.0.0.1:1883"),
    ]);
    let _ = borewake(&["check".as_ref(), bench.file().as_os_str()]).done();
    let logger = Site::new(&[
        &site::modbus_source("/dev/ttyS0"),
        &site::text_source("/dev/ttyS1"),
    ]);
    let _ = borewake(&["check".as_ref(), logger.file().as_os_str()]).done();
}

#[test]
fn every_mistake_is_told_at_once_with_its_line() {
    let site = Site::new(&[
        &site::modbus_source("/dev/ttyS0"),
        "\n[[gauge]]\nname = \"X\"\nat = [\"1 m\", \"2 furlongs\"]\nlayer = \"clay\"\nchannel = \"x.pressure\"\nnoize = \"1 Pa\"\n",
    ]);
    let text = std::fs::read_to_string(site.file()).expect("the site file");
    let line = |key: &str| {
        1 + text
            .lines()
            .position(|l| l.contains(key))
            .expect("the line")
    };
    let output = borewake(&["check".as_ref(), site.file().as_os_str()]);
    assert_ne!(output.code, Some(0));
    let told = format!("{}{}", output.stdout, output.stderr);
    for key in ["furlongs", "clay", "noize", "\"x.pressure\""] {
        let place = format!("site.toml:{}:", line(key));
        assert!(told.contains(&place), "{place} {key}: {told}");
    }
    // An unknown key is told with the nearest known one.
    assert!(told.contains("noise"), "{told}");
}
