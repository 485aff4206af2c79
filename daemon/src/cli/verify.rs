//! `borewake verify`: the store's integrity, and that what is stored gives the stored alarms.

use std::collections::BTreeMap;
use std::path::PathBuf;

use clap::Args;
use serde_json::json;

use super::progress;
use super::{Context, Exit, Failure, print};
use crate::alarm::Desk;
use crate::config::{self, Site};
use crate::keeper::settings::block_plan;
use crate::keeper::{KeeperSettings, Pace, saved};
use crate::record::{Adoption, Alarm, AlarmId, AlarmKind, EntryKind};
use crate::store::{Reader, StoreError};
use crate::watch::ground_file::GroundFile;
use crate::watch::rerun::{Comparison, compare};

/// Checks the store, and that a re-run of what is stored gives the stored alarms
#[derive(Debug, Args)]
#[command(after_help = "\
Example:
  borewake verify site.toml

Ends with 0 where all holds and with 1 where something does not. It may run beside the daemon; what the daemon writes
meanwhile is left for the next time.")]
pub(super) struct Verify {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// The store to verify, such as one kept by `replay --store`; the site's own where not given
    #[arg(long, value_name = "FOLDER")]
    store: Option<PathBuf>,
}

/// What was found.
struct Report {
    integrity: Vec<String>,
    watch: Result<Comparison, String>,
    alarms: Alarms,
}

/// What became of the alarms.
struct Alarms {
    /// Those that come out otherwise, in words.
    wrong: Vec<String>,
    /// Journal entries gone through.
    entries: i64,
    /// Alarms that were not compared, because raw readings they rest on are gone.
    passed_over: usize,
}

impl Verify {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        let folder = self
            .store
            .clone()
            .unwrap_or_else(|| site.store.folder.clone());
        let runtime = tokio::runtime::Builder::new_multi_thread()
            .worker_threads(1)
            .enable_all()
            .build()
            .map_err(Failure::unusable)?;
        let report = runtime
            .block_on(async {
                let reader = Reader::open(&folder).await?;
                examine(&site, &reader).await
            })
            .map_err(|e: anyhow::Error| Failure::unusable(e))?;
        print(&if context.json {
            report.json()
        } else {
            report.text()
        })?;
        Ok(if report.holds() {
            Exit::Done
        } else {
            Exit::DoesNotHold
        })
    }
}

async fn examine(site: &Site, reader: &Reader) -> anyhow::Result<Report> {
    let integrity = reader
        .verify_integrity()
        .await?
        .iter()
        .map(ToString::to_string)
        .collect();
    let (position, saved) = match reader.restore().await? {
        Some((position, bytes)) => (position, postcard::from_bytes::<saved::Saved>(&bytes)?),
        None => (0, saved::Saved::default()),
    };
    let watch = match GroundFile::read(&site.store.folder, &site.ground_digest()) {
        Ok(ground) if lacks_readings(site, reader, &ground).await? => Err(
            "not re-run: raw readings since the end of commissioning were dropped, as `keep_raw` and `max_size` ask"
                .to_owned(),
        ),
        Ok(ground) => again(site, reader, &ground, &saved.adoptions).await,
        Err(why) => Err(format!("not re-run: {why}")),
    };
    let alarms = desk_again(site, reader, position).await?;
    Ok(Report {
        integrity,
        watch,
        alarms,
    })
}

/// Whether raw readings that a re-run from the end of commissioning needs may have been dropped.
async fn lacks_readings(
    site: &Site,
    reader: &Reader,
    ground: &GroundFile,
) -> Result<bool, StoreError> {
    let first = block_plan(site).start_of(ground.last_block.saturating_add(1));
    let oldest = reader.first_sample().await?;
    Ok(reader.raw_readings_dropped().await? && oldest.is_none_or(|oldest| oldest > first))
}

async fn again(
    site: &Site,
    reader: &Reader,
    ground: &GroundFile,
    adoptions: &[Adoption],
) -> Result<Comparison, String> {
    let bar = progress::share("running the watch again");
    let mut show = |done: i64, of: i64| {
        bar.set_position(u64::try_from(done.saturating_mul(1000) / of.max(1)).unwrap_or(0));
    };
    let result = compare(reader, &block_plan(site), ground, adoptions, &mut show).await;
    bar.finish_and_clear();
    result.map_err(|e| e.to_string())
}

/// Takes a fresh desk through the whole journal and compares its alarms with the stored ones.
///
/// The daemon may go on meanwhile: then the desk follows it until both stand at the same entry.
async fn desk_again(site: &Site, reader: &Reader, mut position: i64) -> Result<Alarms, StoreError> {
    let settings = KeeperSettings::of(site, Pace::Lockstep, false);
    let mut desk = Desk::new(settings.alarms);
    let mut again: BTreeMap<AlarmId, Alarm> = BTreeMap::new();
    let mut seq = 0;
    let mut stored = loop {
        while seq < position {
            let entries = reader
                .entries_after(seq, (position - seq).min(1000))
                .await?;
            let Some(last) = entries.last().map(|e| e.seq) else {
                break;
            };
            for entry in &entries {
                let readings = match entry.kind {
                    EntryKind::Batch { .. } => reader.readings_of(entry.seq).await?,
                    _ => Vec::new(),
                };
                for transition in desk.entry(entry, &readings).transitions {
                    again.insert(transition.alarm.id.clone(), transition.alarm);
                }
            }
            seq = last;
        }
        let stored = reader.alarms().await?;
        let now = reader.restore().await?.map_or(0, |(position, _)| position);
        if now == position {
            break stored;
        }
        position = now;
    };
    // Without all raw readings only the watch's own alarms, which rest on what was said of blocks, can be worked out.
    let thinned = reader.raw_readings_dropped().await?;
    let mut passed_over = 0;
    if thinned {
        let rests_on_readings = |alarm: &Alarm| alarm.kind != AlarmKind::Watch;
        passed_over = stored.iter().filter(|a| rests_on_readings(a)).count();
        stored.retain(|a| !rests_on_readings(a));
        again.retain(|_, a| !rests_on_readings(a));
    }
    let mut wrong = Vec::new();
    for alarm in &stored {
        match again.get(&alarm.id) {
            Some(same) if same == alarm => {}
            Some(other) => wrong.push(format!(
                "{}: stored as {} (occurrence {}), the journal gives {} (occurrence {})",
                alarm.id,
                alarm.state().name(),
                alarm.occurrence,
                other.state().name(),
                other.occurrence
            )),
            None => wrong.push(format!(
                "{}: stored, but the journal does not give it",
                alarm.id
            )),
        }
    }
    for alarm in again.values() {
        if !stored.iter().any(|a| a.id == alarm.id) {
            wrong.push(format!(
                "{}: the journal gives it, but it is not stored",
                alarm.id
            ));
        }
    }
    Ok(Alarms {
        wrong,
        entries: position,
        passed_over,
    })
}

impl Report {
    fn holds(&self) -> bool {
        let watch = self.watch.as_ref().map_or(true, |c| c.differing.is_empty());
        self.integrity.is_empty() && self.alarms.wrong.is_empty() && watch
    }

    fn text(&self) -> String {
        let mut text = String::new();
        let mut part = |title: &str, fine: String, wrong: &[String]| {
            if wrong.is_empty() {
                text += &format!("{title:<12}{fine}\n");
            } else {
                text += &format!("{title:<12}DOES NOT HOLD\n");
                for line in wrong.iter().take(20) {
                    text += &format!("            {line}\n");
                }
            }
        };
        part("integrity", "sound".into(), &self.integrity);
        part(
            "alarms",
            match self.alarms.passed_over {
                0 => format!("as {} journal entries give them", self.alarms.entries),
                n => format!(
                    "those of the watch are as {} journal entries give them; {n} others are not compared, because raw readings were dropped",
                    self.alarms.entries
                ),
            },
            &self.alarms.wrong,
        );
        match &self.watch {
            Ok(c) => {
                let differing: Vec<String> = c
                    .differing
                    .iter()
                    .map(|b| format!("block {b} comes out otherwise"))
                    .collect();
                let fine = format!(
                    "{} blocks come out the same, {} not compared",
                    c.compared, c.passed_over
                );
                part("watch", fine, &differing);
            }
            Err(why) => part("watch", why.clone(), &[]),
        }
        text
    }

    fn json(&self) -> String {
        let watch = match &self.watch {
            Ok(c) => {
                json!({ "compared": c.compared, "differing": c.differing, "not_compared": c.passed_over })
            }
            Err(why) => json!({ "not_run": why }),
        };
        let document = json!({
            "holds": self.holds(), "integrity": self.integrity, "alarms": self.alarms.wrong,
            "alarms_not_compared": self.alarms.passed_over, "journal_entries": self.alarms.entries, "watch": watch,
        });
        format!("{document:#}\n")
    }
}
