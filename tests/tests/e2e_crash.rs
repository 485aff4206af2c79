//! The daemon is killed at random instants while readings flow: nothing acknowledged is lost, and the alarms come out as
//! if nothing had happened.

use std::collections::BTreeSet;
use std::path::Path;
use std::time::Duration;

use borewake_tests::readings::{Dice, heard, instant};
use borewake_tests::site::{self, Site};
use borewake_tests::stored::{Step, Stored};
use borewake_tests::{Broker, Daemon, Publisher, until};
use rustix::process::Signal;

/// Kills of the daemon.
const KILLS: usize = 20;
/// Readings; about one in eight passes the limit of 6 MPa one way or the other.
const READINGS: u64 = 1500;

/// Instant \[s\] and pressure \[kPa\] of every reading.
fn readings() -> Vec<(u64, u64)> {
    let mut dice = Dice(20_310_301);
    let mut high = false;
    (0..READINGS)
        .map(|k| {
            if dice.within(0, 8) == 0 {
                high = !high;
            }
            (k * 10, if high { 6100 } else { 5800 } + dice.within(0, 90))
        })
        .collect()
}

/// Readings on disk, history of limit alarms, and alarms as they stand.
type Outcome = (
    Vec<(i64, Option<f64>)>,
    Vec<Step>,
    BTreeSet<(String, String, i64, i64)>,
);

async fn outcome(store: &Path) -> Outcome {
    let mut stored = Stored::open(store).await;
    assert_eq!(stored.integrity().await, "ok");
    let alarms = stored.alarms().await.into_iter();
    (
        stored.readings("o.pressure").await,
        stored.history("limit-").await,
        alarms.filter(|a| a.0.starts_with("limit-")).collect(),
    )
}

fn bench(broker: &Broker) -> Site {
    Site::new(&[
        &site::mqtt_source(&broker.url()),
        site::LIMIT,
        &site::mqtt_publish(&broker.url()),
    ])
}

async fn publish_all(mut publisher: Publisher, pause: Duration) {
    for (second, pressure) in readings() {
        let payload = format!("{{\"p\": {pressure}, \"t\": \"{}\"}}", instant(second));
        publisher.publish("pads/o/p", &payload).await;
        tokio::time::sleep(pause).await;
    }
}

/// Waits until all readings are on disk and all messages are out, then stops the daemon.
async fn finish(daemon: Daemon, store: &Path) {
    let mut stored = Stored::open(store).await;
    until("all readings on disk", async || {
        (stored.readings("o.pressure").await.len() as u64 > READINGS).then_some(())
    })
    .await;
    until("the outbox to drain", async || {
        (stored.waiting().await == 0).then_some(())
    })
    .await;
    assert_eq!(daemon.stop(Signal::TERM).code(), Some(0));
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn twenty_kills_lose_nothing_and_change_no_alarm() {
    let broker = Broker::start();
    let site = bench(&broker);
    let daemon = Daemon::start(&site.file()).await;
    let mut publisher = Publisher::new(broker.port(), "gauge-o");
    heard(&mut publisher, &site.store()).await;
    publish_all(publisher, Duration::ZERO).await;
    finish(daemon, &site.store()).await;
    let undisturbed = outcome(&site.store()).await;

    let broker = Broker::start();
    let site = bench(&broker);
    let mut daemon = Daemon::start(&site.file()).await;
    let mut publisher = Publisher::new(broker.port(), "gauge-o");
    heard(&mut publisher, &site.store()).await;
    let stream = tokio::spawn(publish_all(publisher, Duration::from_millis(7)));
    let mut dice = Dice(7);
    for _ in 0..KILLS {
        // From well within the start to well into the run.
        tokio::time::sleep(Duration::from_millis(dice.within(20, 900))).await;
        daemon.kill();
        daemon = Daemon::spawn(&site.file());
    }
    stream.await.expect("the stream ends");
    daemon.ready().await;
    finish(daemon, &site.store()).await;
    let killed = outcome(&site.store()).await;

    assert_eq!(undisturbed.0.len() as u64, READINGS + 1);
    assert!(undisturbed.1.len() > 100, "{} steps", undisturbed.1.len());
    assert_eq!(killed, undisturbed);
}
