//! `borewake replay`: the same pipeline over logged data.

use std::path::PathBuf;
use std::time::Duration;

use anyhow::Context as _;
use clap::Args;
use tokio::sync::mpsc;

use super::progress;
use super::{Context, Exit, Failure};
use crate::config::{self, Site};
use crate::intake::log::LogReader;
use crate::keeper::play::Player;
use crate::keeper::{Happening, Keeper, KeeperSettings, Pace};
use crate::publish::ndjson::Ndjson;
use crate::record::Stamp;
use crate::store::{Store, StoreOptions};
use crate::watch::ground_file::GroundFile;

/// Plays logged data through the whole pipeline, never into the site's own store or outputs
#[derive(Debug, Args)]
#[command(after_help = "\
Example:
  borewake replay site.toml march.csv --events march.ndjson
  borewake replay site.toml march.csv --store played --speed 3600

The ground file is the site's own, as `borewake commission` made it.")]
pub(super) struct Replay {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// Logs: CSV in long form (time, channel, value) or wide (time, then a column a channel)
    #[arg(required = true, value_name = "LOG")]
    logs: Vec<PathBuf>,
    /// Writes every event to this file, one JSON document a line
    #[arg(long, value_name = "FILE")]
    events: Option<PathBuf>,
    /// Keeps the store of the replay in this folder, which must be new or empty
    #[arg(long, value_name = "FOLDER")]
    store: Option<PathBuf>,
    /// Times faster than the log's own clock; as fast as it goes where not given
    #[arg(long, value_name = "TIMES", value_parser = times)]
    speed: Option<f64>,
}

fn times(text: &str) -> Result<f64, String> {
    let value = text
        .parse()
        .ok()
        .filter(|v: &f64| v.is_finite() && *v > 0.0);
    value.ok_or_else(|| "give a number above zero, such as 60".into())
}

impl Replay {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        if let Some(folder) = &self.store
            && folder.read_dir().is_ok_and(|mut d| d.next().is_some())
        {
            return Err(Failure::wrong(anyhow::anyhow!(
                "--store {}: the folder is not empty; give a new one",
                folder.display()
            )));
        }
        let scratch = Scratch::new(self.store.clone()).map_err(Failure::unusable)?;
        let runtime = tokio::runtime::Builder::new_multi_thread()
            .worker_threads(1)
            .enable_all()
            .build()
            .map_err(Failure::unusable)?;
        runtime
            .block_on(self.play(&site, &scratch, context.json))
            .map_err(Failure::unusable)
    }

    async fn play(&self, site: &Site, scratch: &Scratch, json: bool) -> anyhow::Result<Exit> {
        let (mut player, mut told) =
            open_player(site, &site.store.folder, &scratch.folder, &self.logs).await?;
        let mut file = self
            .events
            .as_ref()
            .map(|path| Ndjson::create(path))
            .transpose()?;
        let bar = progress::bytes(player.log().total_bytes(), "replaying");
        let mut seen = 0_u64;
        let mut pace = Pacer::new(self.speed);
        while let Some(clock) = player.next().await? {
            bar.set_position(player.log().read_bytes());
            seen += tell(&mut told, file.as_mut(), json, &bar)?;
            pace.wait(clock).await;
        }
        bar.finish_and_clear();
        let rows = player.rows();
        for (channel, count) in player.log().unknown_channels() {
            eprintln!(
                "note: the log has a channel {channel} that the site file does not know ({count} rows passed over)"
            );
        }
        let clock = player.clock();
        player.stop().await?;
        seen += tell(&mut told, file.as_mut(), json, &bar)?;
        if let Some(file) = file {
            file.close()?;
        }
        let text = if json {
            serde_json::json!({ "readings": rows, "transitions": seen, "until": clock }).to_string()
        } else {
            format!("{rows} readings played up to {clock}, {seen} alarm transitions")
        };
        println!("{text}");
        Ok(Exit::Done)
    }
}

/// A player over logs with a store of its own in `folder` and the ground file of `ground_folder`, and what happens in it.
///
/// # Errors
/// A log or the store cannot be used.
pub(super) async fn open_player(
    site: &Site,
    ground_folder: &std::path::Path,
    folder: &std::path::Path,
    logs: &[PathBuf],
) -> anyhow::Result<(Player, mpsc::UnboundedReceiver<Happening>)> {
    let log = LogReader::of_site(logs, site)?;
    let Some(start) = log.next_instant() else {
        let names: Vec<String> = logs.iter().map(|l| l.display().to_string()).collect();
        anyhow::bail!(
            "{}: no row has a time that can be read; write it with its zone, as 2031-03-01T00:00:00Z",
            names.join(", ")
        );
    };
    let ground = GroundFile::read(ground_folder, &site.ground_digest());
    if let Err(why) = &ground {
        eprintln!(
            "note: {why}; limits are judged, the watch is blind. Make it with: {}",
            site.commission_command()
        );
    }
    let store = Store::open(folder, StoreOptions::scratch())
        .await
        .context("the store of the replay")?
        .store;
    let settings = KeeperSettings::of(site, Pace::Lockstep, true);
    let (events, told) = mpsc::unbounded_channel();
    let keeper = Keeper::open(settings, store, ground, start, Some(events)).await?;
    Ok((Player::new(keeper, log), told))
}

/// Writes and prints what has happened since the last call.
fn tell(
    told: &mut mpsc::UnboundedReceiver<Happening>,
    mut file: Option<&mut Ndjson>,
    json: bool,
    bar: &indicatif::ProgressBar,
) -> anyhow::Result<u64> {
    let mut count = 0;
    while let Ok(happening) = told.try_recv() {
        count += 1;
        if let Some(file) = &mut file {
            file.write(&happening.event)?;
        }
        if !json {
            bar.suspend(|| println!("{}", transition_line(&happening.transition)));
        }
    }
    Ok(count)
}

/// Keeps a replay from running faster than asked.
struct Pacer {
    speed: Option<f64>,
    start: Option<(tokio::time::Instant, Stamp)>,
}

impl Pacer {
    fn new(speed: Option<f64>) -> Self {
        Self { speed, start: None }
    }

    async fn wait(&mut self, clock: Stamp) {
        let Some(speed) = self.speed else { return };
        let (began, first) = *self
            .start
            .get_or_insert_with(|| (tokio::time::Instant::now(), clock));
        let due = Duration::try_from_secs_f64((clock.seconds() - first.seconds()) / speed)
            .unwrap_or_default();
        tokio::time::sleep_until(began + due).await;
    }
}

/// The folder of a replay's store: the one asked for, or one that goes when the replay ends.
pub(super) struct Scratch {
    /// Where.
    pub(super) folder: PathBuf,
    temporary: bool,
}

impl Scratch {
    pub(super) fn new(asked: Option<PathBuf>) -> anyhow::Result<Self> {
        if let Some(folder) = asked {
            return Ok(Self {
                folder,
                temporary: false,
            });
        }
        let name = format!("borewake-{}-{:08x}", std::process::id(), fastrand::u32(..));
        let folder = std::env::temp_dir().join(name);
        super::interrupt::scratch(&folder);
        std::fs::create_dir(&folder).with_context(|| folder.display().to_string())?;
        Ok(Self {
            folder,
            temporary: true,
        })
    }
}

impl Drop for Scratch {
    fn drop(&mut self) {
        if self.temporary {
            let _ = std::fs::remove_dir_all(&self.folder);
        }
    }
}

/// One line for people about a transition.
pub(super) fn transition_line(transition: &crate::record::Transition) -> String {
    let alarm = &transition.alarm;
    let kind = serde_json::to_value(transition.kind)
        .ok()
        .and_then(|v| v.as_str().map(str::to_owned));
    format!(
        "{}  {:<12} {:<22} {}",
        transition.at,
        kind.unwrap_or_default(),
        alarm.state().name(),
        alarm.summary
    )
}
