//! The window against a broker and an outbox in memory, with connections lost at any moment.

use proptest::prelude::*;

use super::*;
use crate::record::OutgoingId;

fn outgoing(topic: &str, payload: String, sequence: u32) -> Outgoing {
    Outgoing {
        id: OutgoingId {
            subject: topic.to_owned(),
            occurrence: 1,
            sequence,
        },
        topic: topic.to_owned(),
        payload,
        retain: true,
    }
}

fn beat(payload: &str) -> Message {
    Message {
        topic: "watchkeeping".to_owned(),
        payload: payload.to_owned(),
        retain: true,
    }
}

/// An outbox with the retained set kept beside it, as the store does.
#[derive(Debug, Default)]
struct Box {
    rows: BTreeMap<i64, Outgoing>,
    retained: BTreeMap<String, Outgoing>,
    number: i64,
}

impl Box {
    fn put(&mut self, topic: &str, payload: String) {
        self.number += 1;
        let sequence = u32::try_from(self.number).unwrap();
        let out = outgoing(topic, payload, sequence);
        self.retained.insert(topic.to_owned(), out.clone());
        self.rows.insert(self.number, out);
    }
}

/// The wire and the broker behind it.
#[derive(Debug, Default)]
struct Broker {
    kept: BTreeMap<String, String>,
    received: BTreeSet<String>,
    /// Packets on the wire, in order, not yet taken by the broker.
    wire: VecDeque<(u16, Message)>,
    /// Taken, not yet acknowledged.
    owed: Vec<u16>,
    /// Handed to the library, not yet on the wire.
    library: VecDeque<Message>,
    packet: u16,
}

impl Broker {
    fn lose(&mut self) {
        self.wire.clear();
        self.owed.clear();
        self.library.clear();
        self.packet = 0;
    }

    fn take(&mut self) {
        let Some((packet, m)) = self.wire.pop_front() else {
            return;
        };
        self.received.insert(format!("{} {}", m.topic, m.payload));
        if m.retain {
            if m.payload.is_empty() {
                self.kept.remove(&m.topic);
            } else {
                self.kept.insert(m.topic, m.payload);
            }
        }
        self.owed.push(packet);
    }
}

struct World {
    window: Window,
    outbox: Box,
    broker: Broker,
    asks: VecDeque<Ask>,
}

impl World {
    fn new() -> Self {
        Self {
            window: Window::new(),
            outbox: Box::default(),
            broker: Broker::default(),
            asks: VecDeque::new(),
        }
    }

    fn connect(&mut self) {
        self.broker.lose();
        self.window.connected();
        let found: Vec<String> = self.broker.kept.keys().cloned().collect();
        for topic in found {
            self.window.found(topic);
        }
    }

    fn ask(&mut self) {
        self.asks.extend(self.window.ask());
    }

    fn answer(&mut self) {
        match self.asks.pop_front() {
            None => {}
            Some(Ask::Sent(numbers)) => {
                for n in numbers {
                    // A row sent twice may be told twice; numbers are never used again.
                    self.outbox.rows.remove(&n);
                }
                self.window.told();
            }
            Some(Ask::Rows {
                connection,
                after,
                limit,
            }) => {
                let rows = self
                    .outbox
                    .rows
                    .range(after + 1..)
                    .take(limit as usize)
                    .map(|(n, o)| (*n, o.clone()))
                    .collect();
                self.window.rows(connection, rows);
            }
            Some(Ask::Retained { connection }) => {
                let set = self.outbox.retained.values().cloned().collect();
                self.window.retained(connection, set);
            }
        }
    }

    fn hand(&mut self) {
        if let Some(m) = self.window.next() {
            self.window.hand();
            self.broker.library.push_back(m);
        }
    }

    fn wire(&mut self) {
        if let Some(m) = self.broker.library.pop_front() {
            self.broker.packet = self.broker.packet % RING + 1;
            let packet = self.broker.packet;
            self.window.assigned(packet).unwrap();
            self.broker.wire.push_back((packet, m));
        }
    }

    fn acknowledge(&mut self, which: usize) {
        if !self.broker.owed.is_empty() {
            let which = which % self.broker.owed.len();
            let packet = self.broker.owed.remove(which);
            self.window.acknowledged(packet);
        }
    }

    /// Lets everything run until nothing moves.
    fn settle(&mut self) {
        for _ in 0..20_000 {
            self.ask();
            self.answer();
            self.hand();
            self.wire();
            self.broker.take();
            self.acknowledge(0);
            let quiet = self.asks.is_empty() && self.window.open() == 0;
            if quiet
                && self.window.next().is_none()
                && self.window.idle()
                && !self.window.asked
                && self.window.stage == Stage::Steady
                && !self.window.more
            {
                return;
            }
        }
        panic!("it never settles");
    }
}

#[test]
fn rows_go_only_when_acknowledged() {
    let mut w = World::new();
    w.outbox.put("alarm/a", "1".into());
    w.connect();
    for _ in 0..4 {
        w.ask();
        w.answer();
        w.hand();
        w.wire();
    }
    w.broker.take();
    assert_eq!(
        w.outbox.rows.len(),
        1,
        "the broker has it, but did not say so"
    );
    // The connection breaks before the acknowledgement: sent again.
    w.connect();
    w.settle();
    assert!(w.outbox.rows.is_empty());
    assert_eq!(w.broker.kept["alarm/a"], "1");
}

#[test]
fn a_thousand_rows_need_no_more_than_the_window() {
    let mut w = World::new();
    for i in 0..1000 {
        w.outbox.put(&format!("alarm/{}", i % 7), i.to_string());
    }
    w.connect();
    let mut most = 0;
    for _ in 0..200 {
        w.ask();
        w.answer();
        w.hand();
        w.wire();
        most = most.max(w.window.open());
    }
    assert_eq!(most, OPEN);
    w.settle();
    assert!(w.outbox.rows.is_empty());
}

#[test]
fn one_slow_acknowledgement_never_lets_a_packet_id_come_round() {
    let mut w = World::new();
    for i in 0..500 {
        w.outbox.put("alarm/a", i.to_string());
    }
    w.connect();
    // Acknowledge all but the first packet for as long as the window lets anything out.
    for _ in 0..2000 {
        w.ask();
        w.answer();
        w.hand();
        w.wire();
        w.broker.take();
        if w.broker.owed.len() > 1 {
            w.acknowledge(1);
        }
    }
    assert!(
        w.window.next().is_none(),
        "the first one holds the rest back"
    );
    w.settle();
    assert!(w.outbox.rows.is_empty());
}

#[test]
fn what_the_broker_should_not_keep_is_cleared() {
    let mut w = World::new();
    // Left behind by a store that is gone; and one that is cleared by a row.
    w.broker.kept.insert("alarm/ghost".into(), "old".into());
    w.broker.kept.insert("alarm/a".into(), "old".into());
    w.broker.kept.insert("alarm/b".into(), "old".into());
    w.outbox.put("alarm/a", "new".into());
    w.outbox.put("alarm/b", String::new());
    w.connect();
    w.settle();
    assert_eq!(
        w.broker.kept.into_iter().collect::<Vec<_>>(),
        [("alarm/a".to_owned(), "new".to_owned())]
    );
}

#[test]
fn heartbeat_goes_first_and_only_the_latest_value_goes() {
    let mut w = World::new();
    w.outbox.put("alarm/a", "1".into());
    w.window
        .latest("gauge/O-1/expectation".into(), "old".into());
    w.window
        .latest("gauge/O-1/expectation".into(), "new".into());
    w.window.beat(beat("beat"));
    assert!(w.window.next().is_none(), "not connected");
    w.connect();
    w.ask();
    w.answer();
    let mut order = Vec::new();
    while let Some(m) = w.window.next() {
        w.window.hand();
        order.push(m.payload);
    }
    assert_eq!(order, ["beat", "1", "new"]);
}

#[test]
fn a_stop_waits_for_what_is_open_and_sends_the_farewell_last() {
    let mut w = World::new();
    assert!(w.window.idle(), "not connected: nothing to wait for");
    for i in 0..3 {
        w.outbox.put("alarm/a", i.to_string());
    }
    w.connect();
    w.ask();
    w.answer();
    w.hand();
    w.wire();
    w.window.close(beat("bye"));
    assert!(!w.window.idle());
    w.hand();
    w.wire();
    assert!(w.window.next().is_none(), "no more rows");
    w.broker.take();
    w.broker.take();
    w.acknowledge(0);
    w.acknowledge(0);
    w.ask();
    assert!(!w.window.idle(), "the outbox must hear of it");
    w.answer();
    assert!(w.window.idle());
    assert_eq!(w.outbox.rows.len(), 2);
    assert_eq!(w.broker.kept["watchkeeping"], "bye");
}

#[test]
fn what_can_never_be_sent_does_not_hold_up_the_rest() {
    let mut w = World::new();
    w.outbox.put("alarm/#", "1".into());
    w.outbox.put("alarm/a", "2".into());
    w.connect();
    w.ask();
    w.answer();
    w.window.refuse();
    assert_eq!(w.window.next().unwrap().payload, "2");
    assert_eq!(w.window.ask(), Some(Ask::Sent(vec![1])));
}

#[test]
fn a_client_that_makes_up_packets_is_not_trusted() {
    let mut window = Window::new();
    window.connected();
    assert_eq!(window.assigned(1), Err(Confused::NotHanded(1)));
    window.beat(beat(""));
    window.hand();
    window.beat(beat(""));
    window.hand();
    assert_eq!(window.assigned(1), Ok(()));
    assert_eq!(window.assigned(1), Err(Confused::Reused(1)));
    // An acknowledgement of nothing changes nothing.
    window.acknowledged(77);
    assert!(window.done.is_empty());
}

#[test]
fn answers_to_an_earlier_connection_are_passed_over() {
    let mut w = World::new();
    w.outbox.put("alarm/a", "1".into());
    w.connect();
    w.ask();
    w.connect();
    w.answer();
    assert!(w.window.next().is_none());
    w.settle();
    assert!(w.outbox.rows.is_empty());
}

#[derive(Debug, Clone)]
enum Act {
    Put(u8, bool),
    Ask,
    Answer,
    Hand(u8),
    Wire(u8),
    Take(u8),
    Acknowledge(u8),
    Lose,
    Connect,
}

fn act() -> impl Strategy<Value = Act> {
    prop_oneof![
        6 => (0_u8..4, any::<bool>()).prop_map(|(t, clear)| Act::Put(t, clear)),
        4 => Just(Act::Ask),
        4 => Just(Act::Answer),
        6 => (1_u8..40).prop_map(Act::Hand),
        6 => (1_u8..40).prop_map(Act::Wire),
        6 => (1_u8..40).prop_map(Act::Take),
        6 => any::<u8>().prop_map(Act::Acknowledge),
        1 => Just(Act::Lose),
        2 => Just(Act::Connect),
    ]
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(256))]
    /// Whatever is lost and in whatever order the broker acknowledges: in the end every row was received, the outbox
    /// is empty, and the broker keeps exactly what the store says.
    #[test]
    fn nothing_is_lost_and_the_broker_keeps_the_truth(story in prop::collection::vec(act(), 0..300)) {
        let mut w = World::new();
        let mut wanted = BTreeSet::new();
        for act in story {
            match act {
                Act::Put(topic, clear) => {
                    let payload = if clear { String::new() } else { w.outbox.number.to_string() };
                    let topic = format!("alarm/{topic}");
                    wanted.insert(format!("{topic} {payload}"));
                    w.outbox.put(&topic, payload);
                    w.window.changed();
                }
                Act::Ask => w.ask(),
                Act::Answer => w.answer(),
                Act::Hand(n) => (0..n).for_each(|_| w.hand()),
                Act::Wire(n) => (0..n).for_each(|_| w.wire()),
                Act::Take(n) => (0..n).for_each(|_| w.broker.take()),
                Act::Acknowledge(n) => w.acknowledge(n.into()),
                Act::Lose => {
                    w.broker.lose();
                    w.window.disconnected();
                }
                Act::Connect => w.connect(),
            }
        }
        w.connect();
        w.settle();
        prop_assert!(w.outbox.rows.is_empty());
        prop_assert!(wanted.is_subset(&w.broker.received));
        let due: BTreeMap<String, String> = w
            .outbox
            .retained
            .into_iter()
            .filter(|(_, o)| !o.payload.is_empty())
            .map(|(t, o)| (t, o.payload))
            .collect();
        prop_assert_eq!(w.broker.kept, due);
    }
}
