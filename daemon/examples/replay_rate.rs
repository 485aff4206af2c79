//! Readings a second of a whole replay (store, limits, model, alarms), beside inserting the same rows into SQLite with a
//! prepared statement in batches of 1000, in one run.
//!
//! `cargo run --release -p borewake --example replay_rate -- SITE LOG...`, after `borewake commission SITE`.

mod baseline;

use std::path::PathBuf;
use std::time::Instant;

use anyhow::{Context, Result, bail};
use borewake::config;
use borewake::intake::log::LogReader;
use borewake::keeper::play::Player;
use borewake::keeper::{Keeper, KeeperSettings, Pace};
use borewake::record::Reading;
use borewake::store::{Store, StoreOptions};
use borewake::watch::ground_file::GroundFile;

const BATCH: usize = 1000;

#[tokio::main]
async fn main() -> Result<()> {
    let mut arguments = std::env::args_os().skip(1).map(PathBuf::from);
    let Some(site) = arguments.next() else {
        bail!("give a site file and its logs");
    };
    let logs: Vec<PathBuf> = arguments.collect();
    let site = config::load(&site)?;
    let channels = || {
        site.channels
            .iter()
            .map(|(id, c)| (id.clone(), c.conversion))
    };
    let dir = tempfile::tempdir()?;

    let mut reader = LogReader::open(&logs, channels())?;
    let mut rows: Vec<Reading> = Vec::new();
    while let Some(delivery) = reader.next_delivery()? {
        rows.extend(delivery.readings);
    }
    let count = rows.len();
    let batches: Vec<Vec<Reading>> = rows.chunks(BATCH).map(<[Reading]>::to_vec).collect();
    let plain = baseline::insert(&dir.path().join("plain.sqlite"), &batches).await?;

    let ground = GroundFile::read(&site.store.folder, &site.ground_digest())
        .context("commission the site first")?;
    let begun = Instant::now();
    let log = LogReader::open(&logs, channels())?;
    let start = log.next_instant().unwrap_or_default();
    let store = Store::open(&dir.path().join("store"), StoreOptions::scratch())
        .await?
        .store;
    let settings = KeeperSettings::of(&site, Pace::Lockstep, true);
    let keeper = Keeper::open(settings, store, Ok(ground), start, None).await?;
    let mut player = Player::new(keeper, log);
    while player.next().await?.is_some() {}
    player.stop().await?;
    let replay = begun.elapsed();

    #[expect(clippy::cast_precision_loss, reason = "a count of rows fits 53 bits")]
    let rate = |time: std::time::Duration| count as f64 / time.as_secs_f64();
    println!(
        "{count} readings: replay {:.0} a second, prepared statement {:.0} a second, ratio {:.3}",
        rate(replay),
        rate(plain),
        rate(replay) / rate(plain)
    );
    Ok(())
}
