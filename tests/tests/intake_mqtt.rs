//! The `mqtt` source against a real broker that is stopped and started again in mid-stream.

use std::collections::BTreeMap;
use std::sync::Arc;
use std::time::Duration;

use borewake::config::{
    Conversion, MqttChannel, MqttEndpoint, MqttSource, SourceConfig, SourceSettings, TopicPattern,
};
use borewake::intake::clock::SystemClock;
use borewake::intake::{Acks, Conversions, IntakeError, Merge, SourceHandle, Surroundings, start};
use borewake::record::{ClockEpoch, Delivery, RejectReason, Stamp};
use borewake_tests::{Broker, PATIENCE, Publisher, until};
use tokio::sync::watch;

fn surroundings() -> (Surroundings, watch::Sender<bool>) {
    let one = Conversion {
        scale: 1.0,
        offset: 0.0,
    };
    let (stop, shutdown) = watch::channel(false);
    let pattern = TopicPattern::parse("{gauge}.pressure").expect("a pattern");
    let around = Surroundings {
        site: "test".to_owned(),
        clock: Arc::new(SystemClock::new(ClockEpoch(1))),
        conversions: Arc::new(Conversions::new::<Conversion, _>([], [(pattern, one)])),
        shutdown,
    };
    (around, stop)
}

fn settings(port: u16, tls: bool) -> SourceSettings {
    let pattern = |text| TopicPattern::parse(text).expect("a pattern");
    SourceSettings {
        name: "field".into(),
        config: SourceConfig::Mqtt(MqttSource {
            endpoint: MqttEndpoint {
                host: "127.0.0.1".to_owned(),
                port,
                tls,
                user: None,
                password: None,
                client_id: None,
            },
            channels: vec![MqttChannel {
                id: pattern("{gauge}.pressure"),
                topic: pattern("pads/{gauge}/p"),
                value: Some("/p".to_owned()),
                time: Some("/t".to_owned()),
            }],
        }),
    }
}

fn run(port: u16) -> (SourceHandle, watch::Sender<bool>) {
    let (around, stop) = surroundings();
    let handle = start(&settings(port, false), &around);
    (handle.expect("a source").expect("one with a task"), stop)
}

async fn stop(handle: SourceHandle, stop: watch::Sender<bool>) {
    stop.send(true).expect("the source listens");
    handle.task.await.expect("the source ends");
}

async fn connected(handle: &SourceHandle) {
    until("the connection", async || {
        (handle.state.borrow().state == "connected").then_some(())
    })
    .await;
}

/// Sends a first message and waits until it comes: from then on the broker keeps messages for the source's session.
async fn subscribed(handle: &mut SourceHandle, publisher: &mut Publisher) {
    connected(handle).await;
    loop {
        publisher.publish("pads/first/p", &message(0)).await;
        let wait = tokio::time::timeout(Duration::from_millis(200), handle.deliveries.recv());
        if let Ok(delivery) = wait.await {
            let delivery = delivery.expect("the source runs");
            handle
                .acks
                .send(delivery.ack.expect("QoS 1"))
                .expect("the source listens");
            break;
        }
    }
    // Earlier ones of these may still be on their way.
    while handle.window.waiting() > 0 {
        let wait = tokio::time::timeout(Duration::from_millis(50), handle.deliveries.recv());
        if let Ok(Some(delivery)) = wait.await {
            handle
                .acks
                .send(delivery.ack.expect("QoS 1"))
                .expect("the source listens");
        }
    }
}

async fn next(handle: &mut SourceHandle) -> Delivery {
    tokio::time::timeout(PATIENCE, handle.deliveries.recv())
        .await
        .expect("a delivery in time")
        .expect("the source runs")
}

fn message(k: u32) -> String {
    format!("{{\"t\": {}, \"p\": {k}}}", 1_700_000_000 + k)
}

fn number(delivery: &Delivery) -> u32 {
    delivery.readings[0].raw.expect("a number") as u32
}

/// What a store does: keeps each key once, and acknowledges after each commit.
#[derive(Default)]
struct Kept {
    rows: BTreeMap<(String, Stamp), f64>,
    duplicates: u32,
}

impl Kept {
    fn commit(&mut self, deliveries: &mut Vec<Delivery>, acks: &Acks) {
        for delivery in deliveries.drain(..) {
            for reading in &delivery.readings {
                let key = (reading.channel.to_string(), reading.sampled);
                let value = reading.value.expect("a number");
                match self.rows.insert(key, value) {
                    None => {}
                    Some(before) => {
                        assert_eq!(before, value, "the same key never has another value");
                        self.duplicates += 1;
                    }
                }
            }
            acks.committed(&delivery.source, delivery.ack.expect("QoS 1"));
        }
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn every_message_is_kept_once_over_restarts_of_the_broker() {
    const MESSAGES: u32 = 400;
    let mut broker = Broker::start();
    let port = broker.port();
    let (mut handle, halt) = run(port);
    let mut publisher = Publisher::new(port, "writer");
    subscribed(&mut handle, &mut publisher).await;
    let writer = tokio::spawn(async move {
        for k in 1..=MESSAGES {
            publisher
                .publish(&format!("pads/g{}/p", k % 3), &message(k))
                .await;
        }
    });
    let acks = Acks::of([&handle]);
    let window = Arc::clone(&handle.window);
    let SourceHandle {
        name,
        deliveries,
        state,
        task,
        ..
    } = handle;
    let mut merge = Merge::new([(name, deliveries, Arc::clone(&window))]);
    let mut kept = Kept::default();
    let mut batch = Vec::new();
    let mut breaks = [60_usize, 150, 280].iter().peekable();
    while kept.rows.len() < MESSAGES as usize {
        let turn = tokio::time::timeout(PATIENCE, merge.turn(&mut batch));
        assert!(turn.await.expect("a delivery in time"), "the source runs");
        if breaks.next_if(|&&at| kept.rows.len() >= at).is_some() {
            // What is in hand is committed after the break: its acknowledgements belong to a connection that is gone.
            broker.stop();
            broker.restart();
        }
        kept.commit(&mut batch, &acks);
    }
    writer.await.expect("all published");
    let due: BTreeMap<_, _> = (1..=MESSAGES)
        .map(|k| {
            let sampled = Stamp::from_seconds(f64::from(1_700_000_000 + k));
            ((format!("g{}.pressure", k % 3), sampled), f64::from(k))
        })
        .collect();
    assert!(kept.rows == due, "each message once, and nothing else");
    assert!(state.borrow().reconnects >= 3);

    // Repetitions may still come; once all are acknowledged, the broker has nothing left for this session.
    until("the last acknowledgements", async || {
        let more = tokio::time::timeout(Duration::from_millis(100), merge.turn(&mut batch))
            .await
            .is_ok();
        kept.commit(&mut batch, &acks);
        (!more && window.waiting() == 0).then_some(())
    })
    .await;
    halt.send(true).expect("the source listens");
    task.await.expect("the source ends");
    let (mut handle, _halt) = run(port);
    connected(&handle).await;
    Publisher::new(port, "another")
        .publish("pads/last/p", &message(9999))
        .await;
    assert_eq!(
        number(&next(&mut handle).await),
        9999,
        "nothing was left behind"
    );
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_broker_is_held_back_until_its_messages_are_on_disk() {
    let broker = Broker::start();
    let (mut handle, _halt) = run(broker.port());
    let mut publisher = Publisher::new(broker.port(), "writer");
    subscribed(&mut handle, &mut publisher).await;
    for k in 1..=60 {
        publisher.publish("pads/a/p", &message(k)).await;
    }
    until("the window to fill", async || {
        handle.window.is_full().then_some(())
    })
    .await;
    tokio::time::sleep(Duration::from_millis(300)).await;
    assert_eq!(
        handle.deliveries.len(),
        20,
        "what Mosquitto sends without an acknowledgement"
    );
    for k in 1..=60 {
        let delivery = next(&mut handle).await;
        assert_eq!(number(&delivery), k);
        handle
            .acks
            .send(delivery.ack.expect("QoS 1"))
            .expect("the source listens");
    }
}

/// Packet numbers begin again with each connection: a late acknowledgement must not be taken for another message's.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn acknowledgements_of_an_earlier_connection_are_dropped() {
    let mut broker = Broker::start();
    let (mut handle, halt) = run(broker.port());
    let mut publisher = Publisher::new(broker.port(), "writer");
    subscribed(&mut handle, &mut publisher).await;
    for k in 1..=5 {
        publisher.publish("pads/a/p", &message(k)).await;
    }
    let mut earlier = Vec::new();
    for k in 1..=5 {
        let delivery = next(&mut handle).await;
        assert_eq!(number(&delivery), k);
        earlier.push(delivery.ack.expect("QoS 1"));
    }
    broker.stop();
    broker.restart();
    let mut again = Vec::new();
    for k in 1..=5 {
        let delivery = next(&mut handle).await;
        assert_eq!(
            number(&delivery),
            k,
            "what was not acknowledged comes again"
        );
        again.push(delivery.ack.expect("QoS 1"));
    }
    for token in earlier.iter().chain(&again[..3]) {
        handle.acks.send(*token).expect("the source listens");
    }
    until("three acknowledgements", async || {
        (handle.window.waiting() == 2).then_some(())
    })
    .await;
    drop(std::mem::replace(
        &mut handle.acks,
        tokio::sync::mpsc::unbounded_channel().0,
    ));
    stop(handle, halt).await;
    let (mut handle, _halt) = run(broker.port());
    let left = [
        number(&next(&mut handle).await),
        number(&next(&mut handle).await),
    ];
    assert_eq!(left, [4, 5]);
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn what_does_not_fit_is_refused_and_acknowledged_like_the_rest() {
    let broker = Broker::start();
    let (mut handle, _halt) = run(broker.port());
    let mut publisher = Publisher::new(broker.port(), "writer");
    subscribed(&mut handle, &mut publisher).await;
    for payload in [
        "{\"p\": 1",
        "{\"p\": \"NaN\", \"t\": 0}",
        "{\"p\": 1, \"t\": 9e9}",
    ] {
        publisher.publish("pads/a/p", payload).await;
    }
    for reason in [
        RejectReason::Payload,
        RejectReason::NotANumber,
        RejectReason::Time,
    ] {
        let delivery = next(&mut handle).await;
        assert_eq!(
            (delivery.readings.len(), delivery.rejected[0].reason),
            (0, reason)
        );
        assert_eq!(delivery.rejected[0].channel, Some("a.pressure".into()));
        assert!(delivery.ack.is_some());
    }
    let counts = handle.state.borrow().rejected.clone();
    assert_eq!(counts.values().sum::<u64>(), 3);
}

#[test]
fn tls_is_refused_with_its_mend() {
    let (around, _stop) = surroundings();
    let started = start(&settings(8883, true), &around).map(|_| ());
    let error = started.expect_err("no TLS here");
    assert!(matches!(error, IntakeError::Tls(_)));
    assert!(error.to_string().contains("mqtt://"), "{error}");
}
