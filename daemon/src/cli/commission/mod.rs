//! `borewake commission`: calibrates on quiet history and writes the ground file.

use std::path::{Path, PathBuf};

use anyhow::{Context as _, ensure};
use borewake_model::commission::{Account, Calibration, Commissioned};
use borewake_model::ground::EdgeKind;
use clap::Args;
use serde_json::{Value, json};

mod changes;
mod doubts;
mod embankment;
mod figures;
mod grounds;
mod numbers;
mod page;

use super::progress;
use super::standing::history_of;
use super::table::{Align, Table};
use super::{Context, Exit, Failure, print};
use crate::config::{self, Site};
use crate::keeper::settings::block_plan;
use crate::record::{Block, Stamp};
use crate::store::{Reader, StoreError};
use crate::watch::blocks::BlockPlan;
use crate::watch::commissioning::{Stage, make};
use crate::watch::compare::Compare;
use crate::watch::ground_file::{GroundFile, Model};
use crate::watch::history::{History, LevelsKnown};

pub(super) use doubts::diffusivities;

/// Name of the report beside the ground file.
const REPORT: &str = "commission-report.html";

/// Fits transmissivity, storativity and skins to quiet history and writes the ground file and a report
#[derive(Debug, Args)]
#[command(after_help = "\
Example:
  borewake commission site.toml --from 2031-03-01T00:00:00Z --to 2031-04-15T00:00:00Z
  borewake commission site.toml --log march.csv april.csv
  borewake commission site.toml --compare leaky,edge
  borewake commission dam.toml --log 2029.csv 2030.csv      (an embankment: two years or more, with the pool's full range)

Choose weeks without leaks, tests or workovers and with the rates that the wells usually see. A running daemon
takes the new ground file at its next start.")]
pub(super) struct Commission {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// Logs to use in place of the store's own history
    #[arg(long, value_name = "LOG", num_args = 1..)]
    log: Vec<PathBuf>,
    /// First instant to use (RFC 3339); the first reading where not given
    #[arg(long, value_name = "INSTANT", value_parser = instant)]
    from: Option<Stamp>,
    /// First instant not to use (RFC 3339); after the last reading where not given
    #[arg(long, value_name = "INSTANT", value_parser = instant)]
    to: Option<Stamp>,
    /// Other grounds that history is asked about; takes some fits more
    #[arg(long, value_name = "GROUND", value_enum, value_delimiter = ',')]
    compare: Vec<Other>,
    /// The report to write (HTML); `commission-report.html` beside the ground file where not given
    #[arg(long, value_name = "FILE")]
    report: Option<PathBuf>,
}

/// A ground to compare with.
#[derive(Debug, Clone, Copy, clap::ValueEnum)]
enum Other {
    /// The lowest layer leaks to a bed at rest
    Leaky,
    /// The edge is of the two other kinds
    Edge,
}

impl Other {
    fn what(self) -> Compare {
        match self {
            Self::Leaky => Compare::Leaky,
            Self::Edge => Compare::Edge,
        }
    }
}

fn instant(text: &str) -> Result<Stamp, String> {
    Stamp::parse(text).map_err(|e| format!("{e}; write it as 2031-03-01T00:00:00Z"))
}

impl Commission {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        self.fits(&site).map_err(Failure::wrong)?;
        let history = if self.log.is_empty() {
            self.stored(&site)
        } else {
            history_of(&site, &self.log)
        };
        let history = history.map_err(Failure::unusable)?;
        let Some((first, last)) = history.span() else {
            return Err(Failure::unusable(anyhow::anyhow!(
                "no reading of this site's wells and gauges was found; give logs with --log, or let `borewake run` gather some weeks"
            )));
        };
        let plan = block_plan(&site);
        let from = self.from.unwrap_or(first);
        let to = self
            .to
            .unwrap_or_else(|| plan.start_of(plan.index_of(last) + 1));
        let known = history.levels_known(&plan).map_err(|channel| {
            Failure::unusable(anyhow::anyhow!(
                "{channel} was never read in this history, and without that level nothing can be learned; give logs that have it"
            ))
        })?;
        let (blocks, left_out) = from_known(history.blocks(&plan, from, to), &plan, known);
        let others: Vec<Compare> = self.compare.iter().map(|o| o.what()).collect();
        let (ground, account) =
            commission_site(&site, &blocks, &others, Stamp::now()).map_err(|why| {
                Failure::unusable(anyhow::Error::new(why).context(site.path.display().to_string()))
            })?;
        let path = ground
            .write(&site.store.folder)
            .map_err(Failure::unusable)?;
        let reach = super::reach::line(&site, &ground, &blocks).unwrap_or_default();
        let text = match (&ground.commissioned, &account) {
            (Model::Ground(commissioned), Some(account)) => {
                let found = Found {
                    site: &site,
                    history: &history,
                    blocks: &blocks,
                    made: ground.made,
                    commissioned,
                    account,
                    left_out: left_out.as_deref(),
                };
                let (report, shown) = self.report(&found, &path)?;
                if context.json {
                    format!("{:#}\n", found.json(&shown, &path, &report))
                } else {
                    format!(
                        "{}{}{reach}ground file   {}\nreport        {}\n",
                        summary(&site, &ground),
                        found.told(),
                        path.display(),
                        report.display()
                    )
                }
            }
            (Model::Embankment(embankment), _) if context.json => {
                let warnings: Vec<&String> = left_out.iter().collect();
                let document = json!({
                    "kind": "embankment",
                    "ground_file": path,
                    "report": null,
                    "calibration": embankment.calibration,
                    "told": [],
                    "warnings": warnings,
                });
                format!("{document:#}\n")
            }
            _ => {
                let left_out =
                    left_out.map_or_else(String::new, |why| format!("\nTo look at: {why}\n"));
                format!(
                    "{}{left_out}{reach}ground file   {}\n",
                    summary(&site, &ground),
                    path.display()
                )
            }
        };
        print(&text)?;
        Ok(Exit::Done)
    }

    /// Refuses what a site has not.
    fn fits(&self, site: &Site) -> anyhow::Result<()> {
        if site.embankment.is_some() {
            ensure!(
                self.compare.is_empty(),
                "--compare is for a field of wells: an embankment's gauges answer by themselves, and no other ground stands beside them; leave it out"
            );
            ensure!(
                self.report.is_none(),
                "--report is for a field of wells: of an embankment all is printed (--json for programs); leave it out"
            );
        }
        let edge = self.compare.iter().any(|o| o.what() == Compare::Edge);
        ensure!(
            !(edge && site.ground.edge.kind == EdgeKind::Driven),
            "--compare edge: the edge is driven by open water, and so known to be fixed; leave it out"
        );
        Ok(())
    }

    /// Writes the report; returns its path and what it shows of mesh and changes of rate.
    fn report(&self, found: &Found<'_>, ground: &Path) -> Result<(PathBuf, page::Shown), Failure> {
        let path = self
            .report
            .clone()
            .unwrap_or_else(|| found.site.store.folder.join(REPORT));
        let written = || {
            let shown = page::Shown::of(found)?;
            std::fs::write(&path, page::page(found, &shown))?;
            anyhow::Ok(shown)
        };
        let shown = written().with_context(|| {
            format!(
                "the ground file {} is written and can be used, but the report {} is not",
                ground.display(),
                path.display()
            )
        });
        Ok((path.clone(), shown.map_err(Failure::unusable)?))
    }

    fn stored(&self, site: &Site) -> anyhow::Result<History> {
        let runtime = tokio::runtime::Builder::new_current_thread()
            .enable_all()
            .build()?;
        runtime.block_on(async {
            let reader = match Reader::open(&site.store.folder).await {
                Ok(reader) => reader,
                Err(StoreError::Missing { .. }) => return Ok(History::default()),
                Err(e) => return Err(e.into()),
            };
            let mut history = History::default();
            let from = self.from.unwrap_or(Stamp(i64::MIN));
            let to = self.to.unwrap_or(Stamp(i64::MAX));
            history.add(
                reader
                    .readings_between(&block_plan(site).channels(), from, to)
                    .await?,
            );
            Ok(history)
        })
    }
}

/// Of the blocks of a history those in which all levels are known, and what people are told of the rest.
fn from_known(
    blocks: Vec<Block>,
    plan: &BlockPlan,
    known: Option<LevelsKnown>,
) -> (Vec<Block>, Option<String>) {
    let Some(known) = known else {
        return (blocks, None);
    };
    let all = blocks.len();
    let mut kept = blocks;
    kept.retain(|block| plan.start_of(block.index) >= known.from);
    let dropped = all - kept.len();
    let why = (dropped > 0).then(|| {
        format!(
            "{dropped} blocks at the start of this history are left out: {} was first read at {}, and before that its level is not known.",
            known.channel, known.read
        )
    });
    (kept, why)
}

/// Makes a ground file, with a progress bar.
pub(super) fn commission_site(
    site: &Site,
    blocks: &[crate::record::Block],
    others: &[Compare],
    made: Stamp,
) -> Result<(GroundFile, Option<Account>), borewake_model::ModelError> {
    let first = if site.embankment.is_some() {
        Stage::Calibrate
    } else {
        Stage::Discretise
    };
    let bar = progress::share(first.words());
    let mut show = |stage: Stage, share: f64| {
        bar.set_message(stage.words());
        #[expect(
            clippy::cast_possible_truncation,
            clippy::cast_sign_loss,
            reason = "a share of a thousand"
        )]
        bar.set_position((share.clamp(0.0, 1.0) * 1000.0) as u64);
    };
    let ground = make(site, blocks, others, made, &mut show);
    bar.finish_and_clear();
    ground
}

/// Log evidence from which a barrier is more than the scatter of fits of an uneven ground, which is some ten.
const SURE: f64 = 20.0;

/// A barrier that history asks for and the site file does not tell of.
fn suspect(calibration: &Calibration) -> Option<String> {
    let suspect = calibration.suspect?;
    let told = if suspect.log_evidence >= SURE {
        "This history asks for a barrier that the site file does not tell of"
    } else {
        "A barrier that the site file does not tell of would explain this history a little better, which is no proof: fits of uneven grounds differ by as much. It would lie"
    };
    Some(format!(
        "{told}: {:.0} m from the middle of the array, {:.0} degrees from east, counter-clockwise (log evidence {:.0}). \
         The watch reports it if what follows bears it out; if you know of it, declare it with [[barrier]] and commission again.",
        suspect.distance,
        suspect.azimuth.to_degrees().rem_euclid(360.0),
        suspect.log_evidence
    ))
}

/// The calibration for people.
pub(super) fn summary(site: &Site, ground: &GroundFile) -> String {
    match &ground.commissioned {
        Model::Ground(ground) => ground_summary(site, ground),
        Model::Embankment(commissioned) => embankment::summary(site, commissioned),
    }
}

fn ground_summary(site: &Site, commissioned: &Commissioned) -> String {
    use std::fmt::Write as _;
    let calibration = &commissioned.calibration;
    let plan = block_plan(site);
    let mut text = String::new();
    let (first, last) = calibration.blocks;
    let _ = writeln!(text, "site          {} ({})", site.name, site.id);
    let _ = writeln!(
        text,
        "history       {} to {}, {} blocks",
        plan.start_of(first),
        plan.start_of(last + 1),
        last + 1 - first
    );
    text += &numbers::numbers(commissioned);
    let mut table = Table::new(&[
        ("figure", Align::Left),
        ("site file", Align::Right),
        ("fitted", Align::Right),
        ("95 % interval", Align::Right),
        ("unit", Align::Left),
        ("fitted, SI", Align::Right),
        ("", Align::Left),
    ]);
    for row in figures::rows(site, calibration) {
        let show = |si| row.shown(site.units, si);
        let (fitted, interval, si) = match row.fitted {
            Some([fitted, low, high]) => (
                show(fitted),
                format!("{} to {}", show(low), show(high)),
                row.si(fitted),
            ),
            None => (String::new(), figures::NOT_SEEN.to_owned(), String::new()),
        };
        table.row([
            row.name.clone(),
            show(row.described),
            fitted,
            interval,
            row.unit(site.units).to_owned(),
            si,
            row.si_unit().to_owned(),
        ]);
    }
    let _ = write!(text, "\n{}", table.text(0));
    let _ = writeln!(
        text,
        "\n{:<28} {:>14} {:>14} {:>14}",
        "gauge", "noise", "left (1 = all)", "lag-1 of left"
    );
    for ((gauge, noise), (sd, lag)) in site
        .ground
        .gauges
        .iter()
        .zip(&calibration.noise)
        .zip(&calibration.left)
    {
        let _ = writeln!(
            text,
            "{:<28} {:>11.1} Pa {sd:>14.2} {lag:>14.2}",
            gauge.name, noise
        );
    }
    let [conduction, storage] = calibration.priors.patch;
    let _ = writeln!(
        text,
        "\nThe ground varies by {:.0} % in transmissivity and {:.0} % in storativity from patch to patch.",
        100.0 * conduction,
        100.0 * storage
    );
    if let Some(barrier) = suspect(calibration) {
        let _ = writeln!(text, "{barrier}");
    }
    let _ = writeln!(
        text,
        "\nA leak that was already flowing in this history is part of the calibration and cannot be seen.\n"
    );
    text
}

/// What a reader must look at first.
fn warnings(found: &Found<'_>) -> Vec<String> {
    let calibration = &found.commissioned.calibration;
    let mut warnings = doubts::diffusivities(found.site, &calibration.factors);
    warnings.extend(doubts::unlikely(found.site, calibration, found.account));
    warnings.extend(suspect(calibration));
    warnings.extend(grounds::untried(found));
    warnings.extend(found.left_out.map(str::to_owned));
    warnings
}

/// All that commissioning found.
struct Found<'a> {
    site: &'a Site,
    history: &'a History,
    blocks: &'a [crate::record::Block],
    made: Stamp,
    commissioned: &'a Commissioned,
    account: &'a Account,
    /// What of the history was left out, and why.
    left_out: Option<&'a str>,
}

impl Found<'_> {
    /// What history could tell, for people.
    fn told(&self) -> String {
        let mut text = String::from("What history could tell\n");
        for sentence in figures::told(self.site, self.account) {
            text += &format!("  {sentence}\n");
        }
        text += "\n";
        if self.account.tried.len() > 1 {
            text += &format!(
                "{}{}\n\n",
                grounds::table(self).text(0),
                grounds::choice(self)
            );
        }
        for warning in warnings(self) {
            text += &format!("To look at: {warning}\n");
        }
        text
    }

    /// All of it as one document.
    fn json(&self, shown: &page::Shown, path: &std::path::Path, report: &std::path::Path) -> Value {
        let calibration = &self.commissioned.calibration;
        let rows = figures::rows(self.site, calibration);
        json!({
            "kind": "ground",
            "ground_file": path,
            "report": report,
            "calibration": calibration,
            "certificate": self.commissioned.reduced.certificate,
            "figures": figures::rows_json(&rows, self.site.units),
            "told": figures::told(self.site, self.account),
            "warnings": warnings(self),
            "grounds": grounds::json(self),
            "account": self.account,
            "mesh": { "quality": shown.quality, "spread": shown.spread },
            "changes": shown.changes_json(self.site),
            "channels": shown.channels_json(),
        })
    }
}
