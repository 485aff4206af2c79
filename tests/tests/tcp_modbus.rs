//! The `modbus-tcp` source against a general library's server.

use std::collections::BTreeMap;
use std::sync::Arc;
use std::time::Duration;

use borewake::config::{
    ByteOrder, Conversion, ModbusChannel, ModbusTcpSource, Register, RegisterNumber, RegisterTable,
    SourceConfig, SourceSettings,
};
use borewake::intake::clock::SystemClock;
use borewake::intake::{Conversions, SourceHandle, Surroundings, start};
use borewake::record::{ClockEpoch, Delivery, DeviceStatus, Quality, Reading, RejectReason};
use borewake_tests::{ModbusTcpServer, PATIENCE, until};
use tokio::sync::watch;
use tokio_modbus::ExceptionCode;

fn channel(id: &str, unit_id: u8, register: Register) -> ModbusChannel {
    ModbusChannel {
        id: id.into(),
        unit_id,
        register,
    }
}

fn holding(address: u16, number: RegisterNumber, order: ByteOrder) -> Register {
    Register {
        table: RegisterTable::Holding,
        address,
        number,
        order,
    }
}

fn float(id: &str, unit_id: u8, address: u16) -> ModbusChannel {
    let register = holding(address, RegisterNumber::F32, ByteOrder::Big);
    channel(id, unit_id, register)
}

/// A running source, and what stops it.
fn run(
    port: u16,
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
    let settings = SourceSettings {
        name: "gateway".into(),
        config: SourceConfig::ModbusTcp(ModbusTcpSource {
            host: "127.0.0.1".to_owned(),
            port,
            every: Duration::from_millis(20),
            timeout,
            retries: 1,
            channels,
        }),
    };
    let handle = start(&settings, &around)
        .expect("a source")
        .expect("one with a task");
    (handle, stop)
}

async fn next(handle: &mut SourceHandle) -> Delivery {
    tokio::time::timeout(PATIENCE, handle.deliveries.recv())
        .await
        .expect("a delivery in time")
        .expect("the source runs")
}

fn by_channel(readings: Vec<Reading>) -> BTreeMap<String, Reading> {
    let named = |r: Reading| (r.channel.to_string(), r);
    readings.into_iter().map(named).collect()
}

/// Several units on one line, every type and order, neighbours asked for together.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn units_types_and_orders_are_read_and_neighbours_together() {
    let device = ModbusTcpServer::start().await;
    // 123.456 as IEEE 754 single precision is 42 F6 E9 79 (computed).
    let words = [
        [0x42F6, 0xE979],
        [0xE979, 0x42F6],
        [0xF642, 0x79E9],
        [0x79E9, 0xF642],
    ];
    let orders = [
        ByteOrder::Big,
        ByteOrder::WordSwapped,
        ByteOrder::ByteSwapped,
        ByteOrder::Little,
    ];
    let mut channels = Vec::new();
    let mut address = 100;
    for (order, registers) in orders.into_iter().zip(words) {
        let register = holding(address, RegisterNumber::F32, order);
        channels.push(channel(&format!("{order:?}"), 3, register));
        for register in registers {
            device.set(3, address, register);
            address += 1;
        }
    }
    device.set(3, address, 0xFFFE);
    let of = |number| holding(address, number, ByteOrder::Big);
    channels.push(channel("i16", 3, of(RegisterNumber::I16)));
    channels.push(channel("u16", 3, of(RegisterNumber::U16)));
    // A total of 2^33 on another device.
    for (offset, register) in [0, 2, 0, 0].into_iter().enumerate() {
        device.set(7, 40 + offset as u16, register);
    }
    let total = holding(40, RegisterNumber::U64, ByteOrder::Big);
    channels.push(channel("total", 7, total));
    let (mut handle, _stop) = run(device.port(), Duration::from_secs(2), channels);
    let last = by_channel(next(&mut handle).await.readings);
    for order in orders {
        let read = last[&format!("{order:?}")].raw;
        assert_eq!(read, Some(f64::from(123.456_f32)), "{order:?}");
    }
    assert_eq!(last["i16"].raw, Some(-2.0));
    assert_eq!(last["u16"].raw, Some(65_534.0));
    assert_eq!(last["total"].raw, Some(8_589_934_592.0));
    assert_eq!(last["total"].value, Some(8_589_934_592_000.0));
    assert_eq!(device.longest(), 9, "nine neighbours in one request");
    assert_eq!(handle.state.borrow().state, "connected");
}

/// A refusal is no value: settings at fault are told, a busy device is asked again, a device that is broken says so.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn exceptions_are_readings_without_a_value_and_never_zero() {
    let device = ModbusTcpServer::start().await;
    device.set_f32(1, 0, 1.5);
    device.refuse_next([
        ExceptionCode::ServerDeviceBusy,
        ExceptionCode::MemoryParityError,
    ]);
    let channels = vec![float("here", 1, 0), float("nowhere", 1, 500)];
    let (mut handle, _stop) = run(device.port(), Duration::from_secs(2), channels);
    let first = next(&mut handle).await;
    assert_eq!(
        first.rejected.iter().map(|r| r.reason).collect::<Vec<_>>(),
        [RejectReason::DeviceError; 2]
    );
    assert!(first.rejected[0].detail.contains("memory parity error"));
    assert!(first.rejected[1].detail.contains("illegal data address"));
    assert!(first.rejected[1].detail.contains("mend unit_id"));
    let first = by_channel(first.readings);
    assert_eq!(
        (first["here"].value, first["here"].quality),
        (None, Quality::Missing)
    );
    assert_eq!(first["here"].device, DeviceStatus::Failure);
    assert_eq!(
        (first["nowhere"].value, first["nowhere"].device),
        (None, DeviceStatus::Normal)
    );
    let second = next(&mut handle).await;
    assert!(
        second.rejected.is_empty(),
        "what does not exist is left alone"
    );
    let second = by_channel(second.readings);
    assert_eq!(second["here"].value, Some(1500.0));
}

/// A server that is late by up to twice the timeout costs readings, and never gives one channel the value of another.
#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn random_delays_never_make_a_wrong_value() {
    let device = ModbusTcpServer::start().await;
    let timeout = Duration::from_millis(30);
    let mut due = BTreeMap::new();
    let mut channels = Vec::new();
    for (unit, address, value) in [
        (1, 100, 11.0),
        (1, 200, 12.0),
        (1, 300, 13.0),
        (2, 100, 21.0),
        (2, 200, 22.0),
    ] {
        let id = format!("{unit}.{address}");
        device.set_f32(unit, address, value);
        channels.push(float(&id, unit, address));
        due.insert(id, f64::from(value));
    }
    // Half of the answers come at once, the rest up to twice the timeout late, in no order.
    let mut seed = 20_311_u64;
    let delays = std::iter::repeat_with(|| {
        seed = seed.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1);
        let share = (seed >> 33) as f64 / (1_u64 << 31) as f64;
        timeout.mul_f64((4.0 * share - 2.0).max(0.0))
    });
    device.delay_next(delays.take(120));
    let (mut handle, _stop) = run(device.port(), timeout, channels);
    let (mut right, mut missing) = (0, 0);
    while device.delays_left() > 0 || right < 25 {
        for reading in next(&mut handle).await.readings {
            match reading.raw {
                Some(raw) => {
                    assert_eq!(raw, due[&*reading.channel.0], "{reading:?}");
                    right += 1;
                }
                None => missing += 1,
            }
        }
    }
    assert!(missing > 0, "the delays were felt");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_server_killed_and_started_again_is_found_again() {
    let device = ModbusTcpServer::start().await;
    let port = device.port();
    device.set_f32(1, 0, 1.0);
    let (mut handle, stop) = run(port, Duration::from_millis(500), vec![float("a", 1, 0)]);
    while next(&mut handle)
        .await
        .readings
        .iter()
        .all(|r| r.raw != Some(1.0))
    {}
    drop(device);
    until("the source to notice", async || {
        let state = handle.state.borrow().state.clone();
        state.starts_with("waiting").then_some(())
    })
    .await;
    let device = ModbusTcpServer::on(port).await;
    device.set_f32(1, 0, 2.0);
    while next(&mut handle)
        .await
        .readings
        .iter()
        .all(|r| r.raw != Some(2.0))
    {}
    assert!(handle.state.borrow().reconnects >= 1);
    stop.send(true).expect("the source listens");
    handle.task.await.expect("the source ends");
    assert_eq!(handle.state.borrow().state, "stopped");
}
