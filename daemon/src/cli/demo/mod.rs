//! `borewake demo`: an invented site through the whole program, on embedded defaults and a temporary store.

mod pictures;
mod score;
mod truth;

use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use anyhow::Context as _;
use clap::Args;
use tokio::sync::mpsc;
use tokio::task::JoinHandle;

use self::score::Score;
use self::truth::Truth;
use super::commission::{commission_site, summary};
use super::progress;
use super::replay::{Scratch, open_player, transition_line};
use super::{Context, Exit, Failure};
use crate::config::{self, Site};
use crate::control::Ask;
use crate::control::tokens::{Scope, Tokens};
use crate::intake::log::LogReader;
use crate::keeper::Happening;
use crate::keeper::play::Player;
use crate::keeper::settings::block_plan;
use crate::publish::http;
use crate::record::{Alarm, AlarmKind, Command, CommandKind, Condition, Reply, Stamp};
use crate::watch::history::History;

/// The invented site's file.
const SITE: &str = include_str!("../../../../demo-data/site.toml");
/// Its log.
const LOG: &[u8] = include_bytes!("../../../../demo-data/log.csv");
/// What was planted in it.
const TRUTH: &str = include_str!("../../../../demo-data/truth.json");

/// Sample time between an alarm of the watch and the operator's adoption of its finding \[µs\].
const ADOPT_AFTER: i64 = 7 * 24 * 3600 * Stamp::SECOND;

/// Plays an invented site through the whole program on a temporary store
#[derive(Debug, Args)]
#[command(after_help = "\
Example:
  borewake demo
  borewake demo --stay

The site, its log and its troubles are invented. It is calibrated on 40 quiet days, then 60 days are played with a leak
that grows, a gauge that jumps and a neighbour that starts. Every finding is adopted seven days after it was raised.")]
pub(super) struct Demo {
    /// Folder for a picture (SVG) of every affected gauge
    #[arg(long, value_name = "FOLDER", default_value = "borewake-demo")]
    out: PathBuf,
    /// Where the page is served meanwhile
    #[arg(long, value_name = "ADDRESS", default_value = "127.0.0.1:8070")]
    listen: SocketAddr,
    /// Goes on serving the page when all is played, until Ctrl-C
    #[arg(long)]
    stay: bool,
}

impl Demo {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let runtime = tokio::runtime::Builder::new_multi_thread()
            .worker_threads(1)
            .enable_all()
            .build()
            .map_err(Failure::unusable)?;
        runtime
            .block_on(self.play(context.json))
            .map_err(Failure::unusable)
    }

    async fn play(&self, json: bool) -> anyhow::Result<Exit> {
        let scratch = Scratch::new(None)?;
        let site_file = scratch.folder.join("site.toml");
        let log_file = scratch.folder.join("log.csv");
        std::fs::write(&site_file, SITE)?;
        std::fs::write(&log_file, LOG)?;
        let site = config::load(&site_file)?;
        let truth: Truth = serde_json::from_str(TRUTH).context("the demo's own truth")?;
        say(
            json,
            &format!("{}: everything about this site is invented.\n", site.name),
        );
        say(json, "Calibrating on the quiet days ...");
        let blocks = quiet_blocks(&site, &log_file, &truth)?;
        let (ground, _) = commission_site(&site, &blocks, &[], truth.commission.to)?;
        ground.write(&site.store.folder)?;
        say(json, &summary(&site, &ground));
        say(json, "Playing the log ...");
        let store = scratch.folder.join("played");
        let (mut player, told) =
            open_player(&site, &site.store.folder, &store, &[log_file]).await?;
        let (page, asked) = self.serve(&site, &mut player, json).await?;
        let mut stage = Stage {
            player,
            json,
            score: Score::new(truth),
            adopt: None,
            asked,
        };
        stage.play(told).await?;
        let written = pictures::draw(&site, &store, &stage.score, &self.out).await?;
        let score = &stage.score;
        if json {
            println!("{}", score.json());
        } else {
            println!("\n{}", score.table(&site));
            for path in written {
                println!("picture   {}", path.display());
            }
            println!("\n{}", crate::alarm::NOTICE);
        }
        let exit = if score.holds() {
            Exit::Done
        } else {
            Exit::DoesNotHold
        };
        if self.stay && page.is_some() {
            say(json, "\nThe page stays until Ctrl-C.");
            stage.stay().await?;
        }
        if let Some(page) = page {
            page.abort();
        }
        stage.player.stop().await?;
        Ok(exit)
    }

    /// Serves the page beside the play, where the address is free, and tells of a token to try it with.
    async fn serve(
        &self,
        site: &Site,
        player: &mut Player,
        json: bool,
    ) -> anyhow::Result<(Option<JoinHandle<()>>, mpsc::Receiver<Ask>)> {
        let (commands, asked) = mpsc::channel(16);
        let listening = match http::bind(self.listen).await {
            Ok(listening) => listening,
            Err(why) => {
                eprintln!("note: there is no page: {why}");
                return Ok((None, asked));
            }
        };
        let keeper = player.keeper();
        let reader = keeper.store().reader().clone();
        let mut tokens = Tokens::default();
        let token = tokens.make("demo visitor", Scope::Operate, Stamp::now(), None)?;
        tokens.write(reader.folder())?;
        say(
            json,
            &format!(
                "The page is at http://{}/ ; to acknowledge there, sign with {token}",
                listening.address
            ),
        );
        let behind = http::Behind {
            site: Arc::new(site.clone()),
            reader,
            commands,
            snapshots: keeper.snapshots(),
            replay: true,
        };
        let page = tokio::spawn(http::serve(listening, behind, std::future::pending()));
        Ok((Some(page), asked))
    }
}

fn say(json: bool, text: &str) {
    if !json {
        println!("{text}");
    }
}

fn quiet_blocks(
    site: &Site,
    log: &Path,
    truth: &Truth,
) -> anyhow::Result<Vec<crate::record::Block>> {
    let mut reader = LogReader::of_site(&[log.to_path_buf()], site)?;
    let mut history = History::default();
    while let Some(delivery) = reader.next_delivery()? {
        history.add(delivery.readings);
    }
    Ok(history.blocks(
        &block_plan(site),
        truth.commission.from,
        truth.commission.to,
    ))
}

/// The play: the log goes on, alarms are told, and an invented operator answers them.
struct Stage {
    player: Player,
    json: bool,
    score: Score,
    /// The alarm to be adopted next, and when.
    adopt: Option<(Alarm, Stamp)>,
    /// What people ask on the page.
    asked: mpsc::Receiver<Ask>,
}

impl Stage {
    async fn play(&mut self, mut told: mpsc::UnboundedReceiver<Happening>) -> anyhow::Result<()> {
        let bar = progress::bytes(self.player.log().total_bytes(), "playing");
        while let Some(clock) = self.player.next().await? {
            bar.set_position(self.player.log().read_bytes());
            self.take(&mut told, &bar);
            while let Ok(ask) = self.asked.try_recv() {
                self.hear(ask, clock).await?;
            }
            if let Some((alarm, due)) = self.adopt.clone()
                && clock >= due
            {
                self.adopt = None;
                self.answer(alarm, clock).await?;
                self.take(&mut told, &bar);
            }
        }
        bar.finish_and_clear();
        Ok(())
    }

    /// Answers the page until the process is ended.
    async fn stay(&mut self) -> anyhow::Result<()> {
        let clock = self.player.clock();
        while let Some(ask) = self.asked.recv().await {
            self.hear(ask, clock).await?;
        }
        Ok(())
    }

    async fn hear(&mut self, (command, back): Ask, clock: Stamp) -> anyhow::Result<()> {
        let reply = self.player.keeper().person(command, clock).await?;
        // Whoever asked may be gone.
        let _ = back.send(reply);
        Ok(())
    }

    fn take(
        &mut self,
        told: &mut mpsc::UnboundedReceiver<Happening>,
        bar: &indicatif::ProgressBar,
    ) {
        while let Ok(happening) = told.try_recv() {
            if self.json {
                bar.suspend(|| println!("{}", happening.event));
            } else {
                bar.suspend(|| println!("{}", transition_line(&happening.transition)));
            }
            let alarm = &happening.transition.alarm;
            if alarm.kind == AlarmKind::Watch {
                self.adopt = match (&self.adopt, alarm.condition) {
                    (Some((held, due)), Condition::Present)
                        if held.occurrence == alarm.occurrence =>
                    {
                        Some((alarm.clone(), *due))
                    }
                    (_, Condition::Present) => {
                        Some((alarm.clone(), happening.transition.at.plus(ADOPT_AFTER)))
                    }
                    (_, Condition::Absent) => None,
                };
            }
            self.score.take(&happening.transition);
        }
    }

    async fn answer(&mut self, alarm: Alarm, clock: Stamp) -> anyhow::Result<()> {
        let command = Command {
            by: "demo operator (invented)".into(),
            note: "checked on site; taken into the model".into(),
            kind: CommandKind::Adopt {
                alarm: alarm.id,
                occurrence: alarm.occurrence,
                adoption: None,
            },
        };
        if let Reply::Refused { why } = self.player.keeper().person(command, clock).await? {
            anyhow::bail!("the finding could not be adopted: {why}");
        }
        Ok(())
    }
}
