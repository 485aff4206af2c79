//! `borewake run`: the daemon.

mod publishing;
mod upkeep;

use std::path::PathBuf;
use std::time::Duration;

use clap::Args;
use tokio::signal::unix::{SignalKind, signal};
use tokio::sync::{mpsc, watch};
use tracing::{error, info, warn};

use super::{Context, Exit, Failure};
use crate::config::{self, Site};
use crate::control;
use crate::intake::{self, clock::SystemClock};
use crate::keeper::{Happening, Keeper, KeeperSettings, Pace, Undelivered};
use crate::publish::http;
use crate::publish::ndjson::Ndjson;
use crate::record::{Delivery, Stamp};
use crate::store::Store;
use crate::watch::ground_file::GroundFile;

/// How often the wall clock is journalled.
const TICK: Duration = Duration::from_secs(60);
/// Longest wait of a reading for its group commit.
const GROUP: Duration = Duration::from_secs(1);
/// Readings that are committed without waiting for more.
const ROWS: usize = 256;
/// Deliveries held while nothing can be committed.
const HELD: usize = 4096;
/// How long to wait before a full disk is tried again.
const FULL: Duration = Duration::from_secs(5);
/// Longest wait for sources and publishers to end.
const STOP: Duration = Duration::from_secs(5);

/// What is said where no site file is given.
const BEGIN: &str = "`run` needs a site file, which says what there is to watch. To begin:
  borewake demo                   plays an invented site through the whole program
  borewake new site.toml          writes a commented file to fill in (wells, dewatering, embankment)
  borewake check site.toml        explains every mistake in it; --sources talks to every instrument
  borewake run site.toml          records from the first second; every gauge is blind as yet
  borewake commission site.toml   after some quiet weeks: calibrates, so that `run` can watch";

/// Watches a site until it is told to stop
#[derive(Debug, Args)]
#[command(after_help = "\
Example:
  borewake run site.toml

SIGTERM and SIGINT stop it in good order. Without a usable ground file it records, judges limits and publishes, and
says that every gauge is blind. It advises; it is no safety function.")]
pub(super) struct Run {
    /// The site file
    #[arg(value_name = "SITE")]
    site: Option<PathBuf>,
    /// Also writes every event to this file, one JSON document a line
    #[arg(long, value_name = "FILE")]
    events: Option<PathBuf>,
}

impl Run {
    pub(super) fn run(self, _context: &Context) -> Result<Exit, Failure> {
        let Some(path) = self.site else {
            return Err(Failure::wrong(anyhow::anyhow!("{BEGIN}")));
        };
        let site = config::load(&path)?;
        // Before any device is opened: a source that cannot start must not stop a daemon that runs already.
        if let Some(broker) = site.brokers().find(|b| b.tls) {
            return Err(Failure::wrong(anyhow::anyhow!(
                "{}: mqtts:// to {} is not in this build; use mqtt:// to a broker on this machine that bridges over TLS",
                path.display(),
                broker.host
            )));
        }
        exit_on_panic();
        let runtime = tokio::runtime::Builder::new_multi_thread()
            .worker_threads(2)
            .enable_all()
            .build()
            .map_err(Failure::unusable)?;
        let done = runtime
            .block_on(serve(site, self.events))
            .map_err(Failure::unusable);
        runtime.shutdown_timeout(STOP);
        done
    }
}

/// A panic anywhere ends the process with its own code, after the log has it: a daemon that has lost a thread
/// must not look alive. The service manager starts it again.
fn exit_on_panic() {
    let before = std::panic::take_hook();
    std::panic::set_hook(Box::new(move |info| {
        before(info);
        error!(%info, "panic; ending the process so that it is started again");
        std::process::exit(Exit::Panic.code().into());
    }));
}

async fn serve(site: Site, events_file: Option<PathBuf>) -> anyhow::Result<Exit> {
    let mut terminate = signal(SignalKind::terminate())?;
    let mut interrupt = signal(SignalKind::interrupt())?;
    for secret in site.secrets() {
        secret.read()?;
    }
    for note in &site.notes {
        warn!(line = note.line, key = %note.key, "{}", note.text);
    }
    let opened = Store::open(&site.store.folder, publishing::store_options(&site)).await?;
    let store = opened.store;
    let epoch = store.advance_clock().await?;
    let ground = GroundFile::read(&site.store.folder, &site.ground_digest());
    let settings = KeeperSettings::of(&site, Pace::Live, false);
    let mut others = Vec::new();
    let events = match events_file {
        Some(path) => {
            let (events, told) = mpsc::unbounded_channel();
            others.push(tokio::spawn(follow(Ndjson::append(&path)?, told)));
            Some(events)
        }
        None => None,
    };
    let mut keeper = Keeper::open(settings, store.clone(), ground, Stamp::now(), events).await?;
    // Sources stop first, so that what they have handed over still goes all the way; then the rest.
    let (stop, stopped) = watch::channel(false);
    let (stop_rest, rest_stopped) = watch::channel(false);
    let around = intake::Surroundings {
        site: site.id.clone(),
        clock: std::sync::Arc::new(SystemClock::new(epoch)),
        conversions: std::sync::Arc::new(intake::Conversions::from(&site)),
        shutdown: stopped.clone(),
    };
    let mut sources = Vec::new();
    for source in &site.sources {
        sources.extend(intake::start(source, &around)?);
    }
    let acks = intake::Acks::of(&sources);
    let states: Vec<_> = sources
        .iter()
        .map(|s| (s.name.to_string(), s.state.clone()))
        .collect();
    let tasks: Vec<_> = sources
        .iter_mut()
        .map(|s| std::mem::replace(&mut s.task, tokio::spawn(async {})))
        .collect();
    let mut merge = intake::Merge::new(
        sources
            .into_iter()
            .map(|s| (s.name, s.deliveries, s.window)),
    );

    let (commands_in, mut commands) = mpsc::channel(16);
    let control = control::Server::bind(&site.store.folder)?;
    if let Some(listen) = site.http.listen {
        let behind = http::Behind {
            site: std::sync::Arc::new(site.clone()),
            reader: store.reader().clone(),
            commands: commands_in.clone(),
            snapshots: keeper.snapshots(),
            replay: false,
        };
        let stop = until(rest_stopped.clone());
        others.push(tokio::spawn(http::serve_when_free(listen, behind, stop)));
    }
    others.push(tokio::spawn(
        control.serve(commands_in, until(rest_stopped.clone())),
    ));
    others.extend(publishing::start(
        &site,
        &store,
        &keeper.snapshots(),
        &keeper.latest(),
        &rest_stopped,
    )?);
    others.push(tokio::spawn(upkeep::keep_bounds(
        site.clone(),
        store.clone(),
        until(rest_stopped),
    )));

    info!(site = %site.id, "running");
    // Not at once: blocks that ended while the daemon was down wait for what senders kept back meanwhile.
    let mut tick = tokio::time::interval_at(tokio::time::Instant::now() + TICK, TICK);
    tick.set_missed_tick_behavior(tokio::time::MissedTickBehavior::Skip);
    let mut batch = Vec::new();
    let mut appraiser = intake::Appraiser::new(&site);
    let needed: Vec<_> = appraiser.companions().cloned().collect();
    for channel in needed {
        let last = store.reader().last_usable_before(&channel, Stamp::now());
        if let Some(last) = last.await? {
            appraiser.recall(&last);
        }
    }
    // Deliveries of the batch that have passed the appraiser.
    let mut appraised = 0;
    let mut due = None;
    let mut listening = true;
    loop {
        let timer = async move {
            match due {
                Some(at) => tokio::time::sleep_until(at).await,
                None => std::future::pending().await,
            }
        };
        let mut now = false;
        tokio::select! {
            _ = terminate.recv() => break,
            _ = interrupt.recv() => break,
            // Nothing more is taken while the disk is full: sources hold back, or count gaps.
            open = merge.turn(&mut batch), if listening && batch.len() < HELD => {
                listening = open;
                appraiser.appraise(batch.get_mut(appraised..).unwrap_or_default());
                appraised = batch.len();
                due.get_or_insert_with(|| tokio::time::Instant::now() + GROUP);
                let rows: usize = batch.iter().map(|d| d.readings.len()).sum();
                now = rows >= ROWS || merge.full().next().is_some();
            }
            () = timer => now = true,
            Some(answer) = keeper.answer() => keeper.answered(answer, Stamp::now()).await?,
            Some((command, reply)) = commands.recv() => {
                keeper.sources(states.iter().map(|(name, view)| (name.clone(), view.borrow().clone())));
                let answer = keeper.person(command, Stamp::now()).await?;
                let _ = reply.send(answer);
            }
            _ = tick.tick() => {
                keeper.sources(states.iter().map(|(name, view)| (name.clone(), view.borrow().clone())));
                keeper.tick(Stamp::now()).await?;
            }
        }
        if now {
            due = match commit(&mut keeper, &mut batch, &acks).await? {
                Committed::All => None,
                Committed::NoSpace => Some(tokio::time::Instant::now() + FULL),
            };
            appraised = batch.len();
        }
    }
    info!("stopping");
    // Commands that were not taken yet are refused.
    drop(commands);
    stop.send_replace(true);
    let ended = tokio::time::timeout(STOP, async { while merge.turn(&mut batch).await {} }).await;
    if ended.is_err() {
        warn!("a source did not end in time; what it had not handed over stays with its sender");
    }
    appraiser.appraise(batch.get_mut(appraised..).unwrap_or_default());
    if commit(&mut keeper, &mut batch, &acks).await? == Committed::NoSpace {
        warn!("the disk is full; what was not committed stays unacknowledged with its senders");
    }
    keeper.stop(Stamp::now()).await?;
    stop_rest.send_replace(true);
    for task in tasks.into_iter().chain(others) {
        if tokio::time::timeout(STOP, task).await.is_err() {
            warn!("a task did not end in time");
        }
    }
    store.close().await?;
    info!("stopped");
    Ok(Exit::Done)
}

/// Commits what has gathered, then tells the sources.
///
/// A full disk is waited for: what was refused stays in the batch, unacknowledged, and is tried again.
async fn commit(
    keeper: &mut Keeper,
    batch: &mut Vec<Delivery>,
    acks: &intake::Acks,
) -> anyhow::Result<Committed> {
    if batch.is_empty() {
        return Ok(Committed::All);
    }
    match keeper.deliver(std::mem::take(batch), Stamp::now()).await {
        Ok(tokens) => {
            for (source, token) in tokens {
                acks.committed(&source, token);
            }
            Ok(Committed::All)
        }
        Err(Undelivered::Refused(refused)) if refused.error.is_space() => {
            *batch = refused.deliveries;
            Ok(Committed::NoSpace)
        }
        Err(why) => Err(why.into()),
    }
}

/// Whether a commit could be made.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Committed {
    /// It was.
    All,
    /// The disk is too full for readings.
    NoSpace,
}

/// Completes when the daemon stops.
async fn until(mut stopped: watch::Receiver<bool>) {
    let _ = stopped.wait_for(|stop| *stop).await;
}

/// Writes every event to a file until the keeper ends.
async fn follow(mut file: Ndjson, mut told: mpsc::UnboundedReceiver<Happening>) {
    while let Some(happening) = told.recv().await {
        if let Err(why) = file.write(&happening.event) {
            error!(%why, "events are no longer written to the file");
            return;
        }
    }
    if let Err(why) = file.close() {
        error!(%why, "the file of events could not be closed");
    }
}
