//! Brings the watch of a site to the present, for the verbs that look ahead.

use std::path::PathBuf;

use super::{Failure, progress};
use crate::config::Site;
use crate::intake::log::LogReader;
use crate::keeper::opening::fingerprint;
use crate::keeper::saved::Saved;
use crate::keeper::settings::block_plan;
use crate::record::{AlarmKind, Condition};
use crate::store::{Reader, StoreError};
use crate::watch::ground_file::GroundFile;
use crate::watch::history::History;
use crate::watch::standing::{Standing, at_commissioning, from_logs, from_store};

/// A site's ground file, its watch at the present, and what must be said of them.
pub(super) struct Present {
    pub(super) ground: GroundFile,
    pub(super) standing: Standing,
    pub(super) notes: Vec<String>,
}

/// From the store beside a running daemon, or from logs.
pub(super) fn present(site: &Site, logs: &[PathBuf]) -> Result<Present, Failure> {
    let ground = GroundFile::read(&site.store.folder, &site.ground_digest()).map_err(|why| {
        Failure::unusable(anyhow::anyhow!(
            "{why}; make it with: {}",
            site.commission_command()
        ))
    })?;
    let made = if logs.is_empty() {
        let runtime = tokio::runtime::Builder::new_current_thread()
            .enable_all()
            .build()
            .map_err(Failure::unusable)?;
        runtime.block_on(stored(site, &ground))
    } else {
        logged(site, &ground, logs)
    };
    let (standing, notes) = made.map_err(Failure::unusable)?;
    Ok(Present {
        ground,
        standing,
        notes,
    })
}

async fn stored(site: &Site, ground: &GroundFile) -> anyhow::Result<(Standing, Vec<String>)> {
    let reader = match Reader::open(&site.store.folder).await {
        Ok(reader) => reader,
        Err(StoreError::Missing { .. }) => {
            let standing = Standing {
                watch: at_commissioning(ground)?,
                recent: Vec::new(),
            };
            let note =
                "There is no store yet: the present is the end of the commissioning history.";
            return Ok((standing, vec![note.to_owned()]));
        }
        Err(why) => return Err(why.into()),
    };
    let saved: Saved = match reader.restore().await? {
        Some((_, bytes)) => postcard::from_bytes(&bytes)?,
        None => Saved::default(),
    };
    // Checkpoints that a re-run is due to replace do not hold.
    let from = saved
        .due
        .iter()
        .chain(&saved.running)
        .map(|due| due.from)
        .fold(i64::MAX, i64::min);
    let mut notes = Vec::new();
    for alarm in reader.alarms().await? {
        if alarm.kind == AlarmKind::Watch && alarm.condition == Condition::Present {
            notes.push(format!(
                "{} stands and is not in the model, which takes part of it for something else: adopt it first.",
                alarm.summary
            ));
        }
    }
    let bar = progress::share("bringing the watch up to date");
    let standing = from_store(
        &reader,
        &block_plan(site),
        ground,
        &saved.adoptions,
        (from, &fingerprint(Some(&ground.digest()?))),
        &mut |done, of| bar.set_position(thousandths(done, of)),
    )
    .await?;
    bar.finish_and_clear();
    reader.close().await;
    Ok((standing, notes))
}

/// What logs hold, with a progress bar.
pub(super) fn history_of(site: &Site, logs: &[PathBuf]) -> anyhow::Result<History> {
    let mut log = LogReader::of_site(logs, site)?;
    let bar = progress::bytes(log.total_bytes(), "reading logs");
    let mut history = History::default();
    while let Some(delivery) = log.next_delivery()? {
        history.add(delivery.readings);
        bar.set_position(log.read_bytes());
    }
    bar.finish_and_clear();
    Ok(history)
}

fn logged(
    site: &Site,
    ground: &GroundFile,
    logs: &[PathBuf],
) -> anyhow::Result<(Standing, Vec<String>)> {
    let history = history_of(site, logs)?;
    let bar = progress::share("bringing the watch up to date");
    let standing = from_logs(&history, &block_plan(site), ground, &mut |done, of| {
        bar.set_position(thousandths(done, of));
    })?;
    bar.finish_and_clear();
    let notes = vec![
        "Logs are only learned from: whether something happened in them is for `borewake replay` to say."
            .to_owned(),
    ];
    Ok((standing, notes))
}

fn thousandths(done: i64, of: i64) -> u64 {
    u64::try_from(done.saturating_mul(1000) / of.max(1)).unwrap_or(0)
}
