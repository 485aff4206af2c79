//! The `text-line` source over a pty.

use std::fs::File;
use std::os::unix::fs::OpenOptionsExt as _;
use std::sync::Arc;
use std::time::Duration;

use borewake::config::{
    Checksum, Conversion, Parity, Separator, SerialSettings, SourceConfig, SourceSettings,
    TextChannel, TextLineSource,
};
use borewake::intake::clock::SystemClock;
use borewake::intake::{Conversions, SourceHandle, Surroundings, start};
use borewake::record::{ClockEpoch, Delivery, RejectReason};
use borewake_tests::until;
use tokio::io::AsyncWriteExt as _;
use tokio::sync::watch;
use tokio_serial::{SerialPort as _, SerialStream};

/// The far end of a pty, and the path of its near end, held open.
fn pty() -> (SerialStream, String, File) {
    let (far, near) = SerialStream::pair().expect("a pty pair");
    let path = near.name().expect("a name");
    // O_NOCTTY of Linux: a plain file that does not lock the source out.
    let held = File::options()
        .read(true)
        .write(true)
        .custom_flags(0o400)
        .open(&path);
    (far, path, held.expect("the near end opens"))
}

fn run(path: &str) -> (SourceHandle, watch::Sender<bool>) {
    let one = Conversion {
        scale: 1.0,
        offset: 0.0,
    };
    let (stop, shutdown) = watch::channel(false);
    let ids = ["p", "q"];
    let around = Surroundings {
        site: "test".to_owned(),
        clock: Arc::new(SystemClock::new(ClockEpoch(1))),
        conversions: Arc::new(Conversions::new::<_, Conversion>(
            ids.map(|id| (id.into(), one)),
            [],
        )),
        shutdown,
    };
    let channel = |(id, field): (&str, usize)| TextChannel {
        id: id.into(),
        field: Some(field),
        prefix: None,
    };
    let source = TextLineSource {
        serial: SerialSettings {
            port: path.into(),
            baud: 9600,
            data_bits: 8,
            parity: Parity::None,
            stop_bits: 1,
        },
        separator: Separator::CommaOrBlank,
        time_field: None,
        checksum: Checksum::None,
        max_line: 40,
        channels: [("p", 1), ("q", 2)].map(channel).to_vec(),
    };
    let settings = SourceSettings {
        name: "pit".into(),
        config: SourceConfig::TextLine(source),
    };
    let handle = start(&settings, &around)
        .expect("a source")
        .expect("one with a task");
    (handle, stop)
}

async fn connected(handle: &SourceHandle) {
    until("the source to open its port", async || {
        (handle.state.borrow().state == "connected").then_some(())
    })
    .await;
}

async fn next(handle: &mut SourceHandle) -> Delivery {
    tokio::time::timeout(borewake_tests::PATIENCE, handle.deliveries.recv())
        .await
        .expect("a delivery in time")
        .expect("the source runs")
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn lines_become_readings_and_rubbish_is_refused_alone() {
    let (mut far, path, _held) = pty();
    let (mut handle, stop) = run(&path);
    connected(&handle).await;
    // The source came in the middle of "12.5,3": what is left of it would be a wrong number.
    far.write_all(b"2.5,3\r\n7.5, 8\r\n")
        .await
        .expect("written");
    let first = next(&mut handle).await;
    let raws: Vec<_> = first.readings.iter().map(|r| r.raw).collect();
    assert_eq!(raws, [Some(7.5), Some(8.0)]);
    far.write_all(b"\xff\xfe\r\n1,nan\r\n")
        .await
        .expect("written");
    far.write_all(&[b'9'; 100]).await.expect("written");
    // In pieces, as a slow line brings them.
    for piece in [&b"\r\n4."[..], b"5\t-", b"1e3\n"] {
        far.write_all(piece).await.expect("written");
        tokio::time::sleep(Duration::from_millis(5)).await;
    }
    let mut reasons = Vec::new();
    let last = loop {
        let delivery = next(&mut handle).await;
        reasons.extend(
            delivery
                .rejected
                .iter()
                .map(|r| (r.reason, r.raw.chars().take(8).collect::<String>())),
        );
        if delivery.readings.len() == 2 {
            break delivery;
        }
    };
    assert_eq!(last.readings[1].value, Some(-1000.0));
    let due = [
        (RejectReason::Malformed, "\\xFF\\xFE"),
        (RejectReason::NotANumber, "1,nan"),
        (RejectReason::Malformed, "99999999"),
    ];
    assert_eq!(reasons, due.map(|(reason, raw)| (reason, raw.to_owned())));
    assert_eq!(handle.state.borrow().rejected["malformed"], 2);
    stop.send(true).expect("the source listens");
    handle.task.await.expect("the source ends");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_lost_port_is_opened_again() {
    let folder = tempfile::tempdir().expect("a folder");
    let link = folder.path().join("adapter");
    let (far, path, held) = pty();
    std::os::unix::fs::symlink(&path, &link).expect("a link");
    let (mut handle, _stop) = run(&link.to_string_lossy());
    connected(&handle).await;
    drop((far, held));
    until("the source to notice", async || {
        handle
            .state
            .borrow()
            .state
            .starts_with("waiting")
            .then_some(())
    })
    .await;
    let (mut far, path, _held) = pty();
    std::fs::remove_file(&link).expect("the old link");
    std::os::unix::fs::symlink(&path, &link).expect("a new link");
    connected(&handle).await;
    far.write_all(b"rest\n1,2\n").await.expect("written");
    assert_eq!(next(&mut handle).await.readings.len(), 2);
    assert!(handle.state.borrow().reconnects >= 1);
}
