//! The rig itself: what the other tests lean on must hold without the program.

use std::time::Duration;

use borewake_tests::collect::retained;
use borewake_tests::{Broker, Collector, ModbusServer, Publisher, until};
use tokio_modbus::prelude::{Reader as _, Slave, rtu};

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_confirmed_message_reaches_a_subscriber_over_a_kill_of_the_broker() {
    let mut broker = Broker::start();
    let collector = Collector::start(broker.port(), "reader", "t/#").await;
    let mut publisher = Publisher::new(broker.port(), "writer");
    for k in 0..5 {
        publisher.publish("t/a", &k.to_string()).await;
    }
    broker.kill();
    let late = tokio::spawn(async move {
        for k in 5..10 {
            publisher.publish("t/a", &k.to_string()).await;
        }
    });
    broker.restart();
    late.await.expect("all confirmed");
    until("all messages", async || {
        let seen = collector.all();
        (0..10)
            .all(|k| seen.iter().any(|m| m.payload == k.to_string()))
            .then_some(())
    })
    .await;
    assert_eq!(retained(broker.port(), "t/#").await, []);
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn the_device_answers_over_its_pty_and_answers_late_when_told() {
    let device = ModbusServer::start();
    device.set_f32(3, 100, 400.0);
    let port = tokio_serial::SerialStream::open(&tokio_serial::new(device.path(), 19_200))
        .expect("the near end opens");
    let mut master = rtu::attach_slave(port, Slave(3));
    let words = master
        .read_holding_registers(100, 2)
        .await
        .expect("a reply")
        .expect("no exception");
    assert_eq!(words, [0x43c8, 0]);
    assert!(
        master
            .read_holding_registers(7, 1)
            .await
            .expect("a reply")
            .is_err()
    );
    device.set_delay(Duration::from_secs(3600));
    let late = master.read_holding_registers(100, 2);
    assert!(
        tokio::time::timeout(Duration::from_millis(100), late)
            .await
            .is_err()
    );
    assert_eq!(device.requests(), 3);
}
