//! The publisher against a real broker that ends in mid-stream, with and without warning.

use std::collections::{BTreeMap, BTreeSet};
use std::sync::{Arc, Mutex};
use std::time::Duration;

use borewake::publish::mqtt::{
    Feeds, Latest, MqttSettings, OutboxError, OutboxSource, PublishStatus, publish,
};
use borewake::record::{Outgoing, OutgoingId, Snapshot};
use borewake_tests::{Broker, Collector, Publisher, collect, until};
use tokio::sync::{oneshot, watch};
use tokio::task::JoinHandle;

/// What a store keeps for one target, in memory.
#[derive(Debug, Default)]
struct Rows {
    rows: BTreeMap<i64, Outgoing>,
    retained: BTreeMap<String, Outgoing>,
    number: i64,
}

/// The outbox both ends share: the test puts, the publisher takes.
#[derive(Debug, Clone, Default)]
struct Outbox(Arc<Mutex<Rows>>);

impl Outbox {
    fn put(&self, topic: &str, payload: &str) -> i64 {
        let mut rows = self.0.lock().expect("no test thread panicked");
        rows.number += 1;
        let number = rows.number;
        let outgoing = Outgoing {
            id: OutgoingId {
                subject: topic.to_owned(),
                occurrence: 1,
                sequence: u32::try_from(number).expect("a small number"),
            },
            topic: topic.to_owned(),
            payload: payload.to_owned(),
            retain: true,
        };
        rows.retained.insert(topic.to_owned(), outgoing.clone());
        rows.rows.insert(number, outgoing);
        number
    }

    fn waiting(&self) -> usize {
        self.0.lock().expect("no test thread panicked").rows.len()
    }

    /// What the broker should keep: topic and payload.
    fn due(&self) -> BTreeMap<String, String> {
        let rows = self.0.lock().expect("no test thread panicked");
        rows.retained
            .values()
            .filter(|o| !o.payload.is_empty())
            .map(|o| (format!("{ROOT}/{}", o.topic), o.payload.clone()))
            .collect()
    }
}

impl OutboxSource for Outbox {
    async fn next(&mut self, after: i64, limit: u32) -> Result<Vec<(i64, Outgoing)>, OutboxError> {
        let rows = self.0.lock().expect("no test thread panicked");
        let found = rows.rows.range(after + 1..).take(limit as usize);
        Ok(found.map(|(n, o)| (*n, o.clone())).collect())
    }

    async fn sent(&mut self, numbers: &[i64]) -> Result<(), OutboxError> {
        let mut rows = self.0.lock().expect("no test thread panicked");
        for number in numbers {
            rows.rows.remove(number);
        }
        Ok(())
    }

    async fn retained(&mut self) -> Result<Vec<Outgoing>, OutboxError> {
        let rows = self.0.lock().expect("no test thread panicked");
        Ok(rows.retained.values().cloned().collect())
    }
}

const ROOT: &str = "borewake/sorrel-flat";

/// A running publisher.
struct Running {
    outbox: Outbox,
    rows: watch::Sender<i64>,
    latest: watch::Sender<Latest>,
    _snapshot: watch::Sender<Arc<Snapshot>>,
    status: watch::Receiver<PublishStatus>,
    stop: oneshot::Sender<()>,
    task: JoinHandle<()>,
}

impl Running {
    fn start(port: u16, outbox: &Outbox) -> Self {
        let mut settings = MqttSettings::new("127.0.0.1", port, "borewake", "sorrel-flat");
        settings.heartbeat = Duration::from_millis(500);
        assert_eq!(settings.root, ROOT);
        let (rows, rows_changed) = watch::channel(0);
        let (latest, latest_changed) = watch::channel(Latest::default());
        let (snapshot, snapshots) = watch::channel(Arc::new(Snapshot {
            site: "sorrel-flat".to_owned(),
            ..Snapshot::default()
        }));
        let (report, status) = watch::channel(PublishStatus::default());
        let (stop, stopped) = oneshot::channel();
        let feeds = Feeds {
            rows: rows_changed,
            snapshot: snapshots,
            latest: latest_changed,
        };
        let source = outbox.clone();
        let task = tokio::spawn(async move {
            let stop = async {
                let _ = stopped.await;
            };
            publish(settings, source, feeds, report, stop)
                .await
                .expect("settings that can be used");
        });
        Self {
            outbox: outbox.clone(),
            rows,
            latest,
            _snapshot: snapshot,
            status,
            stop,
            task,
        }
    }

    fn put(&self, topic: &str, payload: &str) {
        let number = self.outbox.put(topic, payload);
        self.rows.send_replace(number);
    }

    async fn drained(&self) {
        let outbox = self.outbox.clone();
        until("an empty outbox", async || {
            (outbox.waiting() == 0).then_some(())
        })
        .await;
    }

    async fn stop(self) {
        self.stop.send(()).expect("the publisher runs");
        self.task.await.expect("the publisher ends");
    }
}

/// The alarm topics the broker keeps.
async fn kept(port: u16) -> BTreeMap<String, String> {
    collect::retained(port, &format!("{ROOT}/alarm/#"))
        .await
        .into_iter()
        .map(|m| (m.topic, m.payload))
        .collect()
}

/// Puts rows over eleven topics, every ninth of them a clear, and ends the broker now and then.
async fn stream(running: &Running, from: u32, to: u32, mut end: impl FnMut()) {
    for k in from..to {
        let payload = if k % 9 == 0 {
            String::new()
        } else {
            format!("row {k}")
        };
        running.put(&format!("alarm/{}", k % 11), &payload);
        if k % 250 == 150 {
            // Every end falls into a running stream.
            until("the connection", async || {
                running.status.borrow().connected.then_some(())
            })
            .await;
        }
        if k % 10 == 5 {
            tokio::time::sleep(Duration::from_millis(2)).await;
        }
        if k % 250 == 200 {
            end();
        }
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_thousand_messages_survive_restarts_of_the_broker() {
    let mut broker = Broker::start();
    let port = broker.port();
    let collector = Collector::start(port, "dashboard", &format!("{ROOT}/alarm/#")).await;
    let running = Running::start(port, &Outbox::default());
    stream(&running, 0, 1000, || {
        broker.stop();
        broker.restart();
    })
    .await;
    running.drained().await;
    let wanted: BTreeSet<String> = (0..1000)
        .filter(|k| k % 9 != 0)
        .map(|k| format!("row {k}"))
        .collect();
    until("every message at the far end", async || {
        let seen: BTreeSet<String> = collector.all().into_iter().map(|m| m.payload).collect();
        wanted.is_subset(&seen).then_some(())
    })
    .await;
    assert_eq!(kept(port).await, running.outbox.due());
    let status = running.status.borrow().clone();
    assert!(status.connections >= 5, "{status:?}");
    running.stop().await;
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_broker_that_is_killed_and_forgets_is_told_the_whole_retained_set() {
    let mut broker = Broker::start();
    let port = broker.port();
    let running = Running::start(port, &Outbox::default());
    stream(&running, 0, 1000, || broker.restart()).await;
    running.drained().await;
    // What Mosquitto confirmed just before it was killed it may have forgotten: only the next connection mends that.
    broker.restart();
    let connections = running.status.borrow().connections;
    let status = running.status.clone();
    until("another connection", async || {
        let s = status.borrow();
        (s.connected && s.connections > connections).then_some(())
    })
    .await;
    let due = running.outbox.due();
    until("the retained set", async || {
        (kept(port).await == due).then_some(())
    })
    .await;
    running.stop().await;
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn what_an_earlier_store_left_at_the_broker_is_cleared() {
    let broker = Broker::start();
    let port = broker.port();
    let first = Running::start(port, &Outbox::default());
    first.put("alarm/ghost", "left behind");
    first.put("alarm/both", "old");
    first.drained().await;
    first.stop().await;
    // A new store knows nothing of the ghost.
    let outbox = Outbox::default();
    outbox.put("alarm/both", "new");
    let second = Running::start(port, &outbox);
    second.drained().await;
    let due = outbox.due();
    until("the ghost to go", async || {
        (kept(port).await == due).then_some(())
    })
    .await;
    second.stop().await;
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn watchkeeping_says_online_beats_and_says_goodbye() {
    let broker = Broker::start();
    let port = broker.port();
    let topic = format!("{ROOT}/watchkeeping");
    let collector = Collector::start(port, "watcher", &topic).await;
    let running = Running::start(port, &Outbox::default());
    let says = |online: bool| move |m: &collect::Message| m.json()["online"] == online;
    collector.wait_for("the first heartbeat", says(true)).await;
    until("more heartbeats", async || {
        (collector.all().len() >= 3).then_some(())
    })
    .await;
    running.stop().await;
    collector.wait_for("the farewell", says(false)).await;
    let kept = collect::retained(port, &topic).await;
    assert_eq!(kept.len(), 1);
    assert_eq!(kept[0].json()["data"]["online"], false);

    // Without a goodbye the last will speaks.
    let running = Running::start(port, &Outbox::default());
    let before = collector.all().len();
    until("a heartbeat", async || {
        (collector.all().len() > before).then_some(())
    })
    .await;
    let before = collector.all().len();
    running.task.abort();
    until("the last will", async || {
        let all = collector.all();
        all[before..].iter().any(says(false)).then_some(())
    })
    .await;
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn expectations_go_out_and_are_not_kept() {
    let broker = Broker::start();
    let port = broker.port();
    let filter = format!("{ROOT}/gauge/#");
    let collector = Collector::start(port, "plot", &filter).await;
    let running = Running::start(port, &Outbox::default());
    let latest: Vec<(String, String)> = (0..100)
        .map(|k| (format!("gauge/O-{k}/expectation"), "{}".to_owned()))
        .collect();
    running.latest.send_replace(Arc::new(latest));
    until("all of them", async || {
        (collector.all().len() == 100).then_some(())
    })
    .await;
    // What can never be sent is put aside, and the rest goes on.
    running.put("alarm/+", "a wildcard is no topic");
    running.put("alarm/a", "after it");
    running.drained().await;
    assert_eq!(running.status.borrow().refused, 1);
    assert!(collect::retained(port, &filter).await.is_empty());
    running.stop().await;
}

/// Others on the broker are left alone.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn topics_of_other_sites_are_not_touched() {
    let broker = Broker::start();
    let port = broker.port();
    let other = Running::start(port, &Outbox::default());
    other.put("alarm/a", "mine");
    other.drained().await;
    other.stop().await;
    let mut settings = MqttSettings::new("127.0.0.1", port, "borewake", "other-site");
    settings.heartbeat = Duration::from_secs(1);
    let (_rows, rows) = watch::channel(0);
    let (_latest, latest) = watch::channel(Latest::default());
    let (_snapshot, snapshot) = watch::channel(Arc::new(Snapshot::default()));
    let (report, status) = watch::channel(PublishStatus::default());
    let feeds = Feeds {
        rows,
        snapshot,
        latest,
    };
    let (stop, stopped) = oneshot::channel();
    let task = tokio::spawn(publish(settings, Outbox::default(), feeds, report, async {
        let _ = stopped.await;
    }));
    until("two confirmed heartbeats", async || {
        (status.borrow().confirmed >= 2).then_some(())
    })
    .await;
    Publisher::new(port, "bystander").publish("x", "y").await;
    stop.send(()).expect("the publisher runs");
    task.await
        .expect("it ends")
        .expect("settings that can be used");
    assert_eq!(kept(port).await.len(), 1);
}
