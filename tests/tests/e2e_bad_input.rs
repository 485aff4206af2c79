//! Bad input costs that input alone; a wrong site file stops the daemon before it touches anything.

use std::collections::BTreeMap;

use borewake_tests::readings::{PROBE, heard, instant};
use borewake_tests::site::{self, Site};
use borewake_tests::stored::Stored;
use borewake_tests::{Broker, Daemon, ModbusServer, Publisher, TextDevice, borewake, until};
use rustix::process::Signal;

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_wrong_site_file_stops_run_before_any_device_is_opened() {
    let device = ModbusServer::start();
    let site = Site::new(&[
        &site::modbus_source(device.path()),
        "\n[[gauge]]\nname = \"X\"\nat = [\"1 m\", \"2 furlongs\"]\nlayer = \"clay\"\nchannel = \"x.pressure\"\nnoize = \"1 Pa\"\n",
    ]);
    let output = borewake(&["run".as_ref(), site.file().as_os_str()]);
    assert_eq!(output.code, Some(2), "{output:#?}");
    // All at once, each with its place and value.
    for mistake in ["furlongs", "clay", "noize", "noise", "x.pressure"] {
        assert!(output.stderr.contains(mistake), "{mistake}: {output:#?}");
    }
    assert_eq!(device.requests(), 0);
    assert!(!site.store().exists());
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn without_a_ground_file_run_records_and_says_what_is_missing() {
    let device = ModbusServer::start();
    device.set_f32(3, 100, 400.0);
    device.set_f32(3, 200, 15_000.0);
    let site = Site::new(&[&site::modbus_source(device.path())]);
    let daemon = Daemon::start(&site.file()).await;
    let mut stored = Stored::open(&site.store()).await;
    until("readings on disk", async || {
        (stored.readings("w.pressure").await.len() >= 3).then_some(())
    })
    .await;
    let listed = borewake(&["alarms".as_ref(), site.file().as_os_str()]).done();
    assert!(listed.stdout.contains("borewake commission"), "{listed:#?}");
    assert_eq!(daemon.stop(Signal::TERM).code(), Some(0));
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_ground_file_that_is_rubbish_does_not_stop_the_recording() {
    let device = ModbusServer::start();
    device.set_f32(3, 100, 400.0);
    device.set_f32(3, 200, 15_000.0);
    let site = Site::new(&[&site::modbus_source(device.path())]);
    std::fs::create_dir_all(site.store()).expect("a folder");
    std::fs::write(site.store().join("ground.bin"), b"no ground at all").expect("a file");
    let daemon = Daemon::start(&site.file()).await;
    let mut stored = Stored::open(&site.store()).await;
    until("readings on disk", async || {
        (stored.readings("w.pressure").await.len() >= 3).then_some(())
    })
    .await;
    assert_eq!(daemon.stop(Signal::TERM).code(), Some(0));
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn what_cannot_be_read_is_kept_with_its_reason_and_costs_nothing_else() {
    let broker = Broker::start();
    let site = Site::new(&[&site::mqtt_source(&broker.url())]);
    let daemon = Daemon::start(&site.file()).await;
    let mut publisher = Publisher::new(broker.port(), "gauge-o");
    heard(&mut publisher, &site.store()).await;
    let good = |second, p: f64| format!("{{\"p\": {p}, \"t\": \"{}\"}}", instant(second));
    for payload in [
        good(10, 5000.0),
        "no JSON at all".into(),
        "{\"q\": 1}".into(),
        format!("{{\"p\": \"NaN\", \"t\": \"{}\"}}", instant(20)),
        "{\"p\": 5000, \"t\": \"yesterday\"}".into(),
        "{\"p\": 5000, \"t\": \"2999-01-01T00:00:00Z\"}".into(),
        good(30, 5001.0),
        good(10, 5000.0),
        good(10, 4000.0),
        good(5, 4999.0),
    ] {
        publisher.publish("pads/o/p", &payload).await;
    }
    publisher.publish("pads/o/p", &good(40, 5002.0)).await;
    let mut stored = Stored::open(&site.store()).await;
    until("the last good reading", async || {
        (stored.readings("o.pressure").await.last()?.1 == Some(5_002_000.0)).then_some(())
    })
    .await;
    let values: Vec<_> = stored.readings("o.pressure").await;
    let values: Vec<_> = values.iter().filter_map(|r| r.1).collect();
    assert_eq!(values, [PROBE, 4_999e3, 5_000e3, 5_001e3, 5_002e3]);
    let mut reasons = BTreeMap::new();
    for (reason, _) in stored.rejected().await {
        *reasons.entry(reason).or_insert(0) += 1;
    }
    let wanted = [
        ("conflict", 1),
        ("not-a-number", 1),
        ("payload", 2),
        ("time", 2),
    ];
    assert_eq!(reasons, wanted.map(|(r, n)| (r.to_owned(), n)).into());
    assert_eq!(daemon.stop(Signal::TERM).code(), Some(0));
}

/// A line as the logger writes it, with its checksum.
fn line(second: u64, pressure: &str) -> String {
    let text = format!("O={pressure} {}", instant(second));
    let sum = text.bytes().fold(0, |sum, byte| sum ^ byte);
    format!("{text}*{sum:02X}\r\n")
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_line_that_cannot_be_read_costs_that_line() {
    let mut logger = TextDevice::start();
    let site = Site::new(&[&site::text_source(logger.path())]);
    let daemon = Daemon::start(&site.file()).await;
    let mut stored = Stored::open(&site.store()).await;
    // The first line after an open may be the tail of one; so may the device's.
    until("the line to be heard", async || {
        logger.send(line(0, "5000").as_bytes()).await;
        (!stored.readings("o.pressure").await.is_empty()).then_some(())
    })
    .await;
    let before = stored.rejected().await.len();
    logger.send(line(10, "5001").as_bytes()).await;
    logger
        .send(line(20, "5002").replace("5002", "5003").as_bytes())
        .await;
    logger.send(b"\xff\xfe\x00 noise on the wire\r\n").await;
    logger.send(line(30, "nan").as_bytes()).await;
    logger.send(line(40, "5004").as_bytes()).await;
    until("the last good line", async || {
        (stored.readings("o.pressure").await.last()?.1 == Some(5_004_000.0)).then_some(())
    })
    .await;
    let values = stored.readings("o.pressure").await;
    let values: Vec<_> = values.iter().filter_map(|r| r.1).collect();
    assert_eq!(values, [5_000e3, 5_001e3, 5_004e3]);
    let rejected = stored.rejected().await;
    let reasons: Vec<_> = rejected[before..].iter().map(|r| r.0.as_str()).collect();
    assert_eq!(reasons.len(), 3, "{rejected:?}");
    assert_eq!(reasons[0], "checksum", "{rejected:?}");
    assert_eq!(reasons[2], "not-a-number", "{rejected:?}");
    assert_eq!(daemon.stop(Signal::TERM).code(), Some(0));
}
