//! The `sdi-12` source over a pty, from the site file's own defaults on.

use std::path::Path;
use std::sync::Arc;

use borewake::config;
use borewake::intake::clock::SystemClock;
use borewake::intake::{Conversions, Surroundings, start};
use borewake::record::{ClockEpoch, Quality};
use borewake_tests::site::PIT;
use borewake_tests::{PATIENCE, Sdi12Line};
use tokio::sync::watch;

/// A site with two sensors on a line, and one that is not there.
fn site(port: &str) -> config::Site {
    let text = format!(
        r#"
{PIT}[[source]]
name = "flow"
kind = "log"
[[source.channel]]
id = "w1.flow"
kind = "rate"
unit = "m3/d"
[[source]]
name = "string"
kind = "sdi-12"
port = "{port}"
every = "1 s"
retries = 1
[[source.channel]]
id = "p1.pressure"
kind = "pressure"
unit = "kPa"
address = "0"
command = "M"
[[source.channel]]
id = "p1.temperature"
kind = "temperature"
unit = "degC"
address = "0"
command = "M"
value = 2
[[source.channel]]
id = "p2.pressure"
kind = "pressure"
unit = "kPa"
address = "1"
command = "C"
[[source.channel]]
id = "p3.pressure"
kind = "pressure"
unit = "kPa"
address = "3"
command = "C"
"#
    );
    config::read(&text, Path::new("site.toml")).expect("the site holds")
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn sensors_give_their_values_and_the_missing_one_a_gap() {
    let line = Sdi12Line::start();
    line.set('0', &[376.75, 9.5]);
    line.set('1', &[101.325]);
    let site = site(line.path());
    let (stop, shutdown) = watch::channel(false);
    let around = Surroundings {
        site: "pit".to_owned(),
        clock: Arc::new(SystemClock::new(ClockEpoch(1))),
        conversions: Arc::new(Conversions::from(&site)),
        shutdown,
    };
    let source = site.source(&"string".into()).expect("the source");
    let mut handle = start(source, &around)
        .expect("a source")
        .expect("one with a task");
    // The third sensor is not there: the first round says so, and the rest go on.
    let delivery = tokio::time::timeout(PATIENCE, handle.deliveries.recv())
        .await
        .expect("a delivery in time")
        .expect("the source runs");
    let mut found: Vec<_> = delivery
        .readings
        .iter()
        .map(|r| (&*r.channel.0, r.raw, r.value, r.quality))
        .collect();
    found.sort_by_key(|f| f.0);
    assert_eq!(
        found,
        [
            ("p1.pressure", Some(376.75), Some(376_750.0), Quality::Good),
            ("p1.temperature", Some(9.5), Some(9.5), Quality::Good),
            ("p2.pressure", Some(101.325), Some(101_325.0), Quality::Good),
            ("p3.pressure", None, None, Quality::Missing),
        ]
    );
    assert!(delivery.rejected.is_empty());
    assert_eq!(
        handle.state.borrow().state,
        "connected, but sensor 3 does not answer"
    );
    stop.send(true).expect("the source listens");
    handle.task.await.expect("the source ends");
}
