//! The `modbus-rtu` source against a general library's server on the far end of a pty.

use std::collections::BTreeMap;
use std::os::unix::fs::symlink;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::Duration;

use borewake::config::{
    ByteOrder, Conversion, ModbusChannel, ModbusRtuSource, Parity, Register, RegisterNumber,
    RegisterTable, SerialSettings, SourceConfig, SourceSettings,
};
use borewake::intake::clock::SystemClock;
use borewake::intake::{Conversions, SourceHandle, Surroundings, start};
use borewake::record::{ClockEpoch, Delivery, Quality, RejectReason};
use borewake_tests::{ModbusServer, until};
use tokio::sync::watch;

fn channel(id: &str, unit_id: u8, address: u16) -> ModbusChannel {
    ModbusChannel {
        id: id.into(),
        unit_id,
        register: Register {
            table: RegisterTable::Holding,
            address,
            number: RegisterNumber::F32,
            order: ByteOrder::Big,
        },
    }
}

/// A running source, and what stops it.
fn run(
    port: PathBuf,
    timeout: Duration,
    channels: Vec<ModbusChannel>,
) -> (SourceHandle, watch::Sender<bool>) {
    let kilo = Conversion {
        scale: 1e3,
        offset: 0.0,
    };
    let (stop, shutdown) = watch::channel(false);
    let around = Surroundings {
        site: "test".to_owned(),
        clock: Arc::new(SystemClock::new(ClockEpoch(5))),
        conversions: Arc::new(Conversions::new::<_, Conversion>(
            channels.iter().map(|c| (c.id.clone(), kilo)),
            [],
        )),
        shutdown,
    };
    let source = ModbusRtuSource {
        serial: SerialSettings {
            port,
            baud: 19_200,
            data_bits: 8,
            parity: Parity::None,
            stop_bits: 1,
        },
        every: Duration::from_millis(20),
        timeout,
        retries: 1,
        channels,
    };
    let settings = SourceSettings {
        name: "skid".into(),
        config: SourceConfig::ModbusRtu(source),
    };
    let handle = start(&settings, &around)
        .expect("a source")
        .expect("one with a task");
    (handle, stop)
}

async fn next(handle: &mut SourceHandle) -> Delivery {
    tokio::time::timeout(borewake_tests::PATIENCE, handle.deliveries.recv())
        .await
        .expect("a delivery in time")
        .expect("the source runs")
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_register_the_device_does_not_have_costs_its_own_channel_only() {
    let device = ModbusServer::start();
    device.set_f32(3, 100, 101.5);
    device.set_f32(3, 102, -2.25);
    // The third touches the others and is asked for with them, which the device refuses as a whole.
    let channels = vec![
        channel("a", 3, 100),
        channel("b", 3, 102),
        channel("c", 3, 104),
    ];
    let (mut handle, stop) = run(device.path().into(), Duration::from_secs(1), channels);
    let mut refused = Vec::new();
    let mut last = BTreeMap::new();
    while last
        .get("a")
        .is_none_or(|r: &borewake::record::Reading| r.value.is_none())
        || refused.is_empty()
    {
        let delivery = next(&mut handle).await;
        refused.extend(delivery.rejected);
        last.extend(
            delivery
                .readings
                .into_iter()
                .map(|r| (r.channel.to_string(), r)),
        );
    }
    assert_eq!(
        (last["a"].raw, last["a"].value),
        (Some(101.5), Some(101_500.0))
    );
    assert_eq!(
        (last["b"].value, last["b"].quality),
        (Some(-2250.0), Quality::Good)
    );
    assert_eq!(
        (last["c"].value, last["c"].quality),
        (None, Quality::Missing),
        "never 0"
    );
    assert_eq!(last["a"].epoch, ClockEpoch(5));
    assert_eq!(
        (refused.len(), refused[0].reason),
        (1, RejectReason::DeviceError)
    );
    assert_eq!(refused[0].channel, Some("c".into()));
    assert!(
        refused[0].detail.contains("illegal data address"),
        "{}",
        refused[0].detail
    );
    assert_eq!(handle.state.borrow().state, "connected");
    stop.send(true).expect("the source listens");
    handle.task.await.expect("the source ends");
    assert_eq!(handle.state.borrow().state, "stopped");
}

/// A device that is late by up to twice the timeout costs readings, and never gives one channel the value of another.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_late_answer_is_never_taken_for_the_next() {
    let device = ModbusServer::start();
    let timeout = Duration::from_millis(40);
    let mut due = BTreeMap::new();
    let mut channels = Vec::new();
    // Blocks of the same length, apart, on two devices: every answer would fit every question but for the device.
    for (unit, address, value) in [
        (1, 100, 11.0),
        (1, 200, 12.0),
        (1, 300, 13.0),
        (2, 100, 21.0),
        (2, 200, 22.0),
    ] {
        let id = format!("{unit}.{address}");
        device.set_f32(unit, address, value);
        channels.push(channel(&id, unit, address));
        due.insert(id, f64::from(value));
    }
    let (mut handle, _stop) = run(device.path().into(), timeout, channels);
    let (mut right, mut missing) = (0, 0);
    // Shares of the timeout: on time, late, very late, far too late for listening to help.
    let mut shares = [0.0, 0.0, 1.3, 0.0, 1.9, 0.2, 3.7, 0.0, 0.0, 2.4]
        .iter()
        .cycle();
    while right < 25 || missing < 10 {
        device.set_delay(timeout.mul_f64(*shares.next().expect("a cycle")));
        let Ok(delivery) = tokio::time::timeout(timeout * 3, handle.deliveries.recv()).await else {
            continue;
        };
        for reading in delivery.expect("the source runs").readings {
            match reading.raw {
                Some(raw) => {
                    assert_eq!(raw, due[&*reading.channel.0], "{reading:?}");
                    right += 1;
                }
                None => missing += 1,
            }
        }
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn an_adapter_pulled_and_put_back_is_found_again() {
    let folder = tempfile::tempdir().expect("a folder");
    let link = folder.path().join("adapter");
    let plug = |device: &ModbusServer, link: &Path| {
        let _ = std::fs::remove_file(link);
        symlink(device.path(), link).expect("a link");
    };
    let device = ModbusServer::start();
    device.set_f32(1, 0, 1.0);
    plug(&device, &link);
    let (mut handle, _stop) = run(
        link.clone(),
        Duration::from_millis(200),
        vec![channel("a", 1, 0)],
    );
    while next(&mut handle)
        .await
        .readings
        .iter()
        .all(|r| r.raw != Some(1.0))
    {}
    drop(device);
    until("the source to notice", async || {
        handle
            .state
            .borrow()
            .state
            .starts_with("waiting")
            .then_some(())
    })
    .await;
    let device = ModbusServer::start();
    device.set_f32(1, 0, 2.0);
    plug(&device, &link);
    while next(&mut handle)
        .await
        .readings
        .iter()
        .all(|r| r.raw != Some(2.0))
    {}
    assert!(handle.state.borrow().reconnects >= 1);
}
