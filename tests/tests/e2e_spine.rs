//! From a gauge on a wire and a gauge on a broker to an alarm on a broker, through the real program.

use std::time::Duration;

use borewake_tests::collect::retained;
use borewake_tests::readings::{heard, now_plus};
use borewake_tests::site::{self, Site};
use borewake_tests::stored::Stored;
use borewake_tests::{Broker, Collector, Daemon, ModbusServer, Publisher, borewake, until};
use rustix::process::Signal;

const M3_PER_DAY: f64 = 1.0 / 86_400.0;

fn payload(kilopascal: f64, time: &str) -> String {
    format!("{{\"p\": {kilopascal}, \"t\": \"{time}\"}}")
}

fn close(value: Option<f64>, wanted: f64) -> bool {
    value.is_some_and(|v| (v / wanted - 1.0).abs() < 1e-6)
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_limit_passed_on_one_broker_is_an_alarm_on_it_over_a_restart_of_the_broker() {
    let mut broker = Broker::start();
    let device = ModbusServer::start();
    device.set_f32(3, 100, 400.0);
    device.set_f32(3, 200, 15_000.0);
    let site = Site::new(&[
        &site::modbus_source(device.path()),
        &site::mqtt_source(&broker.url()),
        site::LIMIT,
        &site::mqtt_publish(&broker.url()),
    ]);
    let alarms = Collector::start(broker.port(), "alarms", "borewake/bench/alarm/#").await;
    let daemon = Daemon::start(&site.file()).await;
    let mut gauge = Publisher::new(broker.port(), "gauge-o");

    heard(&mut gauge, &site.store()).await;
    // Below, then above.
    gauge
        .publish("pads/o/p", &payload(5500.0, &now_plus(-40)))
        .await;
    gauge
        .publish("pads/o/p", &payload(6200.0, &now_plus(-39)))
        .await;
    let limit = "borewake/bench/alarm/limit-O-above";
    let raised = alarms
        .wait_for("the alarm", |m| m.topic == limit)
        .await
        .json();
    assert_eq!(raised["specversion"], "1.0", "{raised:#}");
    assert_eq!(raised["type"], "borewake.alarm.v1", "{raised:#}");
    assert_eq!(raised["subject"], "limit-O-above", "{raised:#}");
    assert_eq!(raised["data"]["state"], "unacknowledged", "{raised:#}");
    assert_eq!(raised["data"]["priority"], "high", "{raised:#}");

    // The broker dies while readings flow and while an acknowledgement waits to be told.
    broker.kill();
    let port = broker.port();
    let stream = tokio::spawn(async move {
        for k in 0..30_i32 {
            let time = now_plus(i64::from(k) - 38);
            gauge
                .publish("pads/o/p", &payload(6200.0 + f64::from(k), &time))
                .await;
        }
        gauge
    });
    let _ = borewake(&[
        "alarms".as_ref(),
        site.file().as_os_str(),
        "acknowledge".as_ref(),
        "limit-O-above".as_ref(),
        "--by".as_ref(),
        "tests".as_ref(),
    ])
    .done();
    tokio::time::sleep(Duration::from_millis(500)).await;
    broker.restart();
    let mut gauge = stream.await.expect("the stream ends");
    let acknowledged = alarms
        .wait_for("the acknowledgement", |m| {
            m.topic == limit && m.json()["data"]["state"] == "acknowledged"
        })
        .await
        .json();
    assert_eq!(acknowledged["data"]["transition"], "acknowledged");

    // All that the broker took is on disk, the device's readings too.
    let mut stored = Stored::open(&site.store()).await;
    let mut count = async || (stored.readings("o.pressure").await.len() == 33).then_some(());
    until("all readings of the broker on disk", &mut count).await;
    let kept = stored.readings("w.rate").await;
    assert!(!kept.is_empty() && kept.iter().all(|r| close(r.1, 400.0 * M3_PER_DAY)));

    // A newcomer finds the alarm kept by the broker, as it stands.
    let standing = retained(port, "borewake/bench/alarm/limit-O-above").await;
    assert_eq!(standing.len(), 1, "{standing:#?}");
    assert_eq!(standing[0].json()["data"]["state"], "acknowledged");

    // Back below: normal, and nothing is kept any more.
    gauge
        .publish("pads/o/p", &payload(5400.0, &now_plus(0)))
        .await;
    alarms
        .wait_for("the return", |m| {
            m.topic == limit && m.json()["data"]["state"] == "normal"
        })
        .await;
    until("the retained alarm to be cleared", async || {
        retained(port, limit).await.is_empty().then_some(())
    })
    .await;
    assert_eq!(daemon.stop(Signal::TERM).code(), Some(0));
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_late_answer_is_never_taken_for_the_next() {
    let device = ModbusServer::start();
    device.set_f32(3, 100, 400.0);
    device.set_f32(3, 200, 15_000.0);
    let site = Site::new(&[&site::modbus_source(device.path())]);
    let daemon = Daemon::start(&site.file()).await;
    let mut stored = Stored::open(&site.store()).await;

    // Around the timeout of 150 ms: in time, just late, late by more than a request. A device that is silent for several
    // scans is asked less often, so there is an answer in time between any two late ones.
    for delay in [140, 160, 180, 230, 310, 170] {
        for delay in [delay, 0] {
            device.set_delay(Duration::from_millis(delay));
            let before = device.requests();
            until("some requests", async || {
                (device.requests() >= before + 2).then_some(())
            })
            .await;
        }
    }
    let before = stored.readings("w.pressure").await.len();
    until("readings after the line has settled", async || {
        (stored.readings("w.pressure").await.len() > before + 2).then_some(())
    })
    .await;
    for (channel, wanted) in [("w.rate", 400.0 * M3_PER_DAY), ("w.pressure", 1.5e7)] {
        for (at, value) in stored.readings(channel).await {
            assert!(
                value.is_none() || close(value, wanted),
                "{channel} at {at}: {value:?}"
            );
        }
    }
    assert_eq!(daemon.stop(Signal::INT).code(), Some(0));
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_broker_tells_of_a_daemon_that_died() {
    let broker = Broker::start();
    let site = Site::new(&[&site::mqtt_publish(&broker.url())]);
    let watchkeeping = Collector::start(broker.port(), "w", "borewake/bench/watchkeeping").await;
    let daemon = Daemon::start(&site.file()).await;
    let alive = watchkeeping.wait_for("a heartbeat", |_| true).await;
    assert_eq!(alive.json()["data"]["online"], true);
    daemon.kill();
    watchkeeping
        .wait_for("the last will", |m| m.json()["data"]["online"] == false)
        .await;
}
