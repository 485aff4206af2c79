//! Rows a second of the store's commit, beside the same rows inserted one by one with a prepared statement, both
//! in transactions of 1000 rows flushed to disk, turn about in one run.
//!
//! `cargo run --release -p borewake --example insert_rate [rows]`

mod baseline;

use std::path::Path;
use std::time::{Duration, Instant};

use anyhow::{Context, Result, ensure};
use borewake::record::{ClockEpoch, ClockState, Delivery, DeviceStatus, Quality, Reading, Stamp};
use borewake::store::{Store, StoreOptions};

const BATCH: usize = 1000;
const ROUNDS: usize = 5;
const CHANNELS: usize = 16;

#[tokio::main]
async fn main() -> Result<()> {
    let rows = match std::env::args().nth(1) {
        Some(text) => text.parse().context("the number of rows")?,
        None => 200_000,
    };
    let batches = batches(rows);
    let mut ratios = Vec::new();
    println!("round  commit [rows/s]  prepared statement [rows/s]  ratio");
    for round in 1..=ROUNDS {
        let dir = tempfile::tempdir()?;
        let commit = commit(&dir.path().join("store"), batches.clone()).await?;
        let plain = baseline::insert(&dir.path().join("plain.sqlite"), &batches).await?;
        let rate = |time: Duration| rate(rows, time);
        let ratio = rate(commit) / rate(plain);
        println!(
            "{round:>5}  {:>15.0}  {:>27.0}  {ratio:>5.2}",
            rate(commit),
            rate(plain)
        );
        ratios.push(ratio);
    }
    ratios.sort_by(f64::total_cmp);
    let median = ratios.get(ROUNDS / 2).context("no round")?;
    println!("median ratio {median:.2} over {ROUNDS} rounds of {rows} rows");
    Ok(())
}

#[expect(clippy::cast_precision_loss, reason = "a count of rows fits 53 bits")]
fn rate(rows: usize, time: Duration) -> f64 {
    rows as f64 / time.as_secs_f64()
}

/// Invented readings: sixteen channels once a second, interleaved as they would arrive.
fn batches(rows: usize) -> Vec<Vec<Reading>> {
    let mut random = fastrand::Rng::with_seed(1);
    let all: Vec<Reading> = (0_i64..)
        .take(rows.div_ceil(CHANNELS))
        .flat_map(|second| {
            (0..CHANNELS).map(move |channel| (Stamp(second * Stamp::SECOND), channel))
        })
        .take(rows)
        .map(|(sampled, channel)| {
            let value = 2.5e6 + 1e5 * random.f64();
            Reading {
                channel: format!("gauge-{channel}.pressure").as_str().into(),
                sampled,
                received: sampled.plus(40_000),
                epoch: ClockEpoch(0),
                value: Some(value),
                raw: Some(value / 1e3),
                quality: Quality::Good,
                device: DeviceStatus::Normal,
                clock: ClockState::Foreign,
            }
        })
        .collect();
    all.chunks(BATCH).map(<[Reading]>::to_vec).collect()
}

/// The whole of a commit: keys checked, readings and journal entry stored, readings handed back.
async fn commit(folder: &Path, batches: Vec<Vec<Reading>>) -> Result<Duration> {
    let opened = Store::open(folder, StoreOptions::default()).await?;
    let begun = Instant::now();
    for readings in batches {
        let count = readings.len();
        let delivery = Delivery {
            source: "bench".into(),
            readings,
            rejected: Vec::new(),
            ack: None,
        };
        let committed = opened
            .store
            .commit(vec![delivery], Stamp(0))
            .await
            .map_err(|refused| refused.error)?;
        ensure!(committed.readings.len() == count, "rows were not new");
    }
    let time = begun.elapsed();
    opened.store.close().await?;
    Ok(time)
}
