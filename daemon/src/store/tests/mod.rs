//! Tests of the store as a whole, on real files.

mod apply;
mod commit;
mod journal;
mod killed;
mod opening;
mod statements;

use std::path::Path;

use tempfile::TempDir;

use super::{Opened, Store, StoreOptions};
use crate::record::{
    Acknowledgement, Alarm, AlarmId, AlarmKind, ClockEpoch, ClockState, Condition, Delivery,
    DeviceStatus, Latch, Outgoing, OutgoingId, Priority, Quality, Reading, Stamp, Step,
    Suppression, Transition, TransitionKind,
};

const TARGET: &str = "broker";

fn options() -> StoreOptions {
    StoreOptions {
        targets: vec![TARGET.to_owned()],
        low_water: 1,
        floor: 0,
        reserve: 0,
        ..StoreOptions::default()
    }
}

async fn open(folder: &Path) -> Opened {
    Store::open(folder, options()).await.unwrap()
}

async fn fresh() -> (TempDir, Store) {
    let dir = tempfile::tempdir().unwrap();
    let store = open(dir.path()).await.store;
    (dir, store)
}

fn reading(channel: &str, second: i64, value: f64) -> Reading {
    Reading {
        channel: channel.into(),
        sampled: Stamp(second * Stamp::SECOND),
        received: Stamp(second * Stamp::SECOND + 7),
        epoch: ClockEpoch(0),
        value: Some(value),
        raw: Some(value / 10.0),
        quality: Quality::Good,
        device: DeviceStatus::Normal,
        clock: ClockState::Foreign,
    }
}

fn delivery(readings: Vec<Reading>) -> Delivery {
    Delivery {
        source: "skid".into(),
        readings,
        rejected: Vec::new(),
        ack: None,
    }
}

fn alarm(id: &str, sequence: u32) -> Alarm {
    Alarm {
        id: AlarmId(id.to_owned()),
        kind: AlarmKind::Limit,
        occurrence: 1,
        sequence,
        condition: Condition::Present,
        acknowledgement: Acknowledgement::Unacknowledged,
        latch: Latch::None,
        suppression: Suppression::None,
        priority: Priority::High,
        since: Stamp(5),
        summary: "O-2 above 6.1 MPa".to_owned(),
        response: "reduce rate".to_owned(),
        finding: None,
    }
}

fn transition(id: &str, sequence: u32, recorded: i64) -> Transition {
    Transition {
        alarm: alarm(id, sequence),
        kind: TransitionKind::Raised,
        at: Stamp(5),
        recorded: Stamp(recorded),
        by: None,
        note: String::new(),
    }
}

fn message(id: &str, sequence: u32, payload: &str) -> Outgoing {
    Outgoing {
        id: OutgoingId {
            subject: id.to_owned(),
            occurrence: 1,
            sequence,
        },
        topic: format!("alarm/{id}"),
        payload: payload.to_owned(),
        retain: true,
    }
}

fn step(block: i64, log_mixture: f64) -> Step {
    Step {
        block,
        expectations: vec![None],
        departures: vec![Some(0.1 + 0.2)],
        blind: vec![None],
        log_mixture,
        log_threshold: 9.0,
        finding: None,
    }
}
