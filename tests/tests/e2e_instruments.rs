//! Instruments through the running daemon, a restart, and a replay of what was exported.

use borewake_tests::site::Site;
use borewake_tests::stored::Stored;
use borewake_tests::{Daemon, ModbusTcpServer, borewake_in, until};
use rustix::process::Signal;

/// Well pressure as 4 to 20 mA of a vented gauge, and the barometer of another device.
fn sources(loops: u16, weather: u16) -> String {
    format!(
        r#"
[[source]]
name = "loops"
kind = "modbus-tcp"
host = "127.0.0.1"
port = {loops}
every = "300 ms"
[[source.channel]]
id = "w.pressure"
kind = "pressure"
unit = "kPa"
unit_id = 1
register = {{ table = "holding", address = 0, type = "f32" }}
convert = {{ kind = "current-loop", low = "0 kPa", high = "400 kPa" }}
reference = {{ from = "vented", to = "absolute", barometer = "site.baro" }}
[[source.channel]]
id = "o.pressure"
kind = "pressure"
unit = "kPa"
unit_id = 1
register = {{ table = "holding", address = 10, type = "f32" }}
convert = {{ kind = "current-loop", low = "0 kPa", high = "400 kPa" }}
[[source]]
name = "weather"
kind = "modbus-tcp"
host = "127.0.0.1"
port = {weather}
every = "300 ms"
[[source.channel]]
id = "site.baro"
kind = "barometer"
unit = "hPa"
unit_id = 1
register = {{ table = "input", address = 0, type = "f32" }}
"#
    )
}

async fn values(site: &Site, channel: &str) -> Vec<Option<f64>> {
    let readings = Stored::open(&site.store()).await.readings(channel).await;
    readings.into_iter().map(|(_, value)| value).collect()
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn values_are_the_same_live_after_a_restart_and_replayed() {
    let loops = ModbusTcpServer::start().await;
    let weather = ModbusTcpServer::start().await;
    loops.set_f32(1, 0, 12.0);
    // A broken wire.
    loops.set_f32(1, 10, 0.02);
    weather.set_f32(1, 0, 1000.0);
    let site = Site::new(&[&sources(loops.port(), weather.port())]);
    let due = Some(300_000.0);
    let mut daemon = Daemon::start(&site.file()).await;
    until("absolute pressures", async || {
        let found = values(&site, "w.pressure").await;
        (found.iter().filter(|v| **v == due).count() >= 3).then_some(())
    })
    .await;
    daemon.kill();

    // The barometer is gone when the daemon comes back: what it said last still holds.
    drop(weather);
    let before = values(&site, "w.pressure").await.len();
    daemon = Daemon::start(&site.file()).await;
    until("pressures after the restart", async || {
        (values(&site, "w.pressure").await.len() >= before + 3).then_some(())
    })
    .await;
    assert!(daemon.stop(Signal::TERM).success());
    let live = values(&site, "w.pressure").await;
    assert!(live.iter().skip(before).all(|v| *v == due), "{live:?}");
    assert!(
        values(&site, "o.pressure")
            .await
            .iter()
            .all(Option::is_none)
    );

    // What was delivered is exported, and comes out the same when it is replayed.
    let run = |arguments: &[&str]| borewake_in(site.folder(), arguments).done();
    let log = run(&["export", "site.toml", "--what", "readings"]).stdout;
    std::fs::write(site.folder().join("log.csv"), log).expect("the log");
    let _ = run(&["replay", "site.toml", "log.csv", "--store", "played"]);
    let played = site.folder().join("played");
    let replayed = Stored::open(&played).await.readings("w.pressure").await;
    let replayed: Vec<_> = replayed.into_iter().map(|(_, value)| value).collect();
    assert_eq!(replayed, live);
}
