//! A store in which the watch has judged for weeks: what it said is invented, all that follows from it is the program's.

use std::path::Path;

use borewake::record::{
    Cause, EntryKind, Expectation, Finding, Place, Size, SizeUnit, Stamp, Step, Subject, Weighed,
};
use borewake::store::{Store, StoreOptions};

const HOUR: i64 = 3600 * Stamp::SECOND;

/// Blocks judged.
pub const BLOCKS: i64 = 24 * 45;
/// Blocks since the leak began.
pub const SINCE: i64 = 24 * 6;

/// Writes 45 days of judged hours into a store's folder, up to the last full hour; a leak in the last six days where asked.
///
/// # Panics
/// The store cannot be written.
pub async fn watched(folder: &Path, leak: bool) {
    let store = Store::open(folder, StoreOptions::scratch())
        .await
        .expect("a new store")
        .store;
    let end = Stamp::now().0.div_euclid(HOUR);
    let steps: Vec<_> = (end - BLOCKS..end)
        .map(|block| EntryKind::Judged {
            step: Box::new(step(block, block - (end - SINCE), leak)),
            rerun: None,
        })
        .collect();
    for piece in steps.chunks(200) {
        store
            .append_all(piece.to_vec(), Stamp::now())
            .await
            .expect("steps are journalled");
    }
    store.close().await.expect("the store closes");
}

#[expect(clippy::cast_precision_loss, reason = "small counts")]
fn step(block: i64, age: i64, leak: bool) -> Step {
    // A little wave in place of noise: the same each time.
    let wave = |k: f64| (block as f64 * k).sin() * 40.0;
    let sunk = if leak && age > 0 {
        -14.0 * age as f64
    } else {
        0.0
    };
    let expected = |mean: f64| Some(Expectation { mean, sd: 45.0 });
    let base = 15.2e6 + (block as f64 / 37.0).sin() * 60_000.0;
    Step {
        block,
        expectations: vec![expected(base), expected(14.9e6)],
        departures: vec![Some(wave(2.3) + 0.5 * sunk), Some(wave(1.7) + sunk)],
        blind: vec![None, None],
        log_mixture: if leak && age > 24 { 31.5 } else { -2.0 },
        log_threshold: 11.2,
        finding: (leak && age > 24).then(|| finding(block, age)),
    }
}

#[expect(clippy::cast_precision_loss, reason = "small counts")]
fn finding(block: i64, age: i64) -> Finding {
    let weighed = |cause, probability, subject| Weighed {
        cause,
        probability,
        subject: Some(subject),
        log_evidence: 34.0,
    };
    Finding {
        block,
        causes: vec![
            weighed(Cause::Leak, 0.87, Subject::Place),
            weighed(Cause::MeterScale, 0.09, Subject::Well(0)),
            weighed(Cause::GaugeDrift, 0.03, Subject::Gauge(1)),
        ],
        named: true,
        onset: Stamp((block - age) * HOUR).seconds(),
        onset_sd: 7200.0,
        size: Some(Size {
            value: 18.0 / 86_400.0,
            sd: 2.1 / 86_400.0,
            unit: SizeUnit::CubicMetrePerSecond,
        }),
        place: Some(Place {
            x: 310.0,
            y: -120.0,
            layer: 0,
            radius_90: 90.0,
        }),
        gauges: vec![(1, -14.0 * age as f64, 45.0), (0, -7.0 * age as f64, 45.0)],
        log_mixture: 31.5,
        log_threshold: 11.2,
    }
}

/// The `[http]` table for a port.
#[must_use]
pub fn http(port: u16) -> String {
    format!("\n[http]\nlisten = \"127.0.0.1:{port}\"\n")
}

/// Makes a token for a site and gives its text.
///
/// # Panics
/// The program refuses.
#[must_use]
pub fn token(site: &Path, name: &str, scope: &str) -> String {
    let made = crate::borewake(&[
        "token".as_ref(),
        site.as_os_str(),
        "make".as_ref(),
        name.as_ref(),
        "--scope".as_ref(),
        scope.as_ref(),
        "--json".as_ref(),
    ])
    .done()
    .json();
    made["token"].as_str().expect("a token").to_owned()
}
