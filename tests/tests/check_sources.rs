//! `check --sources`: talks to instruments and a broker, and prints what it decodes.

use std::time::Duration;

use borewake_tests::site::PIT;
use borewake_tests::{Broker, ModbusTcpServer, Publisher, Sdi12Line, borewake};

/// A site with a source of each kind that answers or speaks.
fn site(modbus: u16, sdi12: &str, broker: &str) -> String {
    format!(
        r#"
{PIT}[[source]]
name = "gateway"
kind = "modbus-tcp"
host = "127.0.0.1"
port = {modbus}
retries = 0
[[source.channel]]
id = "w1.flow"
kind = "rate"
unit = "m3/d"
unit_id = 3
register = {{ table = "holding", address = 102, type = "f32", order = "word-swapped" }}
[[source]]
name = "string"
kind = "sdi-12"
port = "{sdi12}"
retries = 0
[[source.channel]]
id = "p1.pressure"
kind = "pressure"
unit = "kPa"
address = "0"
command = "M"
reference = {{ from = "vented", to = "absolute", barometer = "site.baro" }}
[[source.channel]]
id = "p2.pressure"
kind = "pressure"
unit = "kPa"
address = "7"
command = "M"
[[source]]
name = "weather"
kind = "mqtt"
url = "{broker}"
[[source.channel]]
id = "site.baro"
kind = "barometer"
unit = "hPa"
topic = "weather/baro"
value = "/p"
"#
    )
}

#[tokio::test(flavor = "multi_thread", worker_threads = 3)]
async fn every_source_is_talked_to_and_wrong_orders_show() {
    let gateway = ModbusTcpServer::start().await;
    // 123.456 as CDAB: E9 79 42 F6 (computed).
    gateway.set(3, 102, 0xE979);
    gateway.set(3, 103, 0x42F6);
    let line = Sdi12Line::start();
    line.set('0', &[50.0, 9.5]);
    let broker = Broker::start();
    let folder = tempfile::tempdir().expect("a folder");
    let file = folder.path().join("site.toml");
    let text = site(gateway.port(), line.path(), &broker.url());
    std::fs::write(&file, text).expect("the site file");
    let mut weather = Publisher::new(broker.port(), "weather");
    let speaking = tokio::spawn(async move {
        loop {
            weather.publish("weather/baro", r#"{"p": 998.0}"#).await;
            tokio::time::sleep(Duration::from_millis(200)).await;
        }
    });
    let path = file.clone();
    let told = tokio::task::spawn_blocking(move || {
        borewake(&[
            "check".as_ref(),
            path.as_os_str(),
            "--sources".as_ref(),
            "--json".as_ref(),
        ])
    });
    let told = told.await.expect("the program ran");
    assert_eq!(told.code, Some(1), "sensor 7 is not there\n{}", told.stderr);
    let told = told.json();
    let channel =
        |source: usize, channel: usize| told["sources"][source]["channels"][channel].clone();
    let flow = channel(0, 0);
    assert_eq!(flow["where"], "device 3, holding 102 (in manuals 40103)");
    assert_eq!(flow["delivered"], "E979 42F6");
    let number = |value: &serde_json::Value| value.as_f64().expect("a number");
    assert!((number(&flow["raw"]) - 123.456).abs() < 1e-5);
    let orders = flow["orders"].as_object().expect("orders");
    assert_eq!(orders.len(), 4);
    assert!((number(&orders["word-swapped"]) - 123.456).abs() < 1e-5);
    // The same bytes read as ABCD, DCBA and BADC are absurd.
    for wrong in ["big", "little", "byte-swapped"] {
        let value = number(&orders[wrong]);
        assert!(value.abs() > 1e20, "{wrong}: {value}");
    }
    // The vented gauge has its atmosphere from the broker.
    let pressure = channel(1, 0);
    assert_eq!(number(&pressure["raw"]), 50.0);
    assert_eq!(number(&pressure["si_value"]), 149_800.0);
    assert_eq!(pressure["quality"], 1);
    assert_eq!(channel(1, 1)["why"], "sensor 7 does not answer");
    assert_eq!(
        told["sources"][1]["notes"][0],
        "sensor 0 says of itself: 14INVENTEDPIEZO 10"
    );
    assert_eq!(number(&channel(2, 0)["si_value"]), 99_800.0);
    speaking.abort();

    // Without the sensor that is not there, everything holds, and people are told in tables.
    line.set('7', &[1.0]);
    drop(broker);
    let text = borewake(&["check".as_ref(), file.as_os_str(), "--sources".as_ref()]);
    assert_eq!(text.code, Some(1), "the broker is gone");
    for told in [
        "gateway (modbus-tcp)",
        "as registers read",
        "word-swapped",
        "sensor 7 says",
    ] {
        assert!(text.stdout.contains(told), "{told}\n{}", text.stdout);
    }
}
