//! `borewake forecast`: expected pressure under planned rates, and the time to each limit.

mod plan;
mod told;

use std::path::{Path, PathBuf};

use anyhow::Context as _;
use borewake_model::forecast::{Bound, Forecast, Horizon, RatePlan};
use borewake_model::units::Dimension;
use clap::Args;

use self::told::Told;
use super::standing::{Present, present};
use super::{Context, Exit, Failure, print};
use crate::config::{self, Side, Site};
use crate::keeper::settings::block_plan;

/// Time looked at where nothing else is asked for \[s\].
const USUAL: f64 = 30.0 * 86_400.0;
/// Time looked at beyond a plan's last row \[s\].
const BEYOND: f64 = 10.0 * 86_400.0;
/// Longest time looked at \[s\].
const LONGEST: f64 = 366.0 * 86_400.0;

/// Forecasts pressure under planned rates, with bands, and the time to each limit
#[derive(Debug, Args)]
#[command(after_help = "\
Examples:
  borewake forecast site.toml --plan plan.csv
  borewake forecast site.toml --plan plan.csv --for \"60 d\" --svg ahead.svg --csv ahead.csv
  borewake forecast site.toml --log april.csv

The plan is CSV, long or wide; a rate holds until the well's next row, and injection is positive:
  time,well,rate [m3/d]              time,I-1 [m3/d],I-2 [m3/d]
  2031-05-01T00:00:00Z,I-1,450       2031-05-01T00:00:00Z,450,
  2031-05-08T00:00:00Z,I-1,0         2031-05-08T00:00:00Z,0,300
Wells that are not in it keep their last rate. The store is read beside a running daemon, or without one.")]
pub(super) struct ForecastVerb {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// Planned rates; without a plan every well keeps its last rate
    #[arg(long, value_name = "PLAN.csv")]
    plan: Option<PathBuf>,
    /// Logs to use in place of the store's readings
    #[arg(long, value_name = "LOG", num_args = 1..)]
    log: Vec<PathBuf>,
    /// How far to look, such as "30 d" [default: 30 d, or 10 d beyond the plan's last row]
    #[arg(long = "for", value_name = "TIME", value_parser = time)]
    span: Option<f64>,
    /// Writes a picture of every gauge, with limits and rates
    #[arg(long, value_name = "FILE")]
    svg: Option<PathBuf>,
    /// Writes mean and band of every gauge in every block
    #[arg(long, value_name = "FILE")]
    csv: Option<PathBuf>,
}

fn time(text: &str) -> Result<f64, String> {
    let value = Dimension::Time.parse(text).map_err(|e| e.to_string())?;
    if value > 0.0 && value <= LONGEST {
        Ok(value)
    } else {
        Err("give a time above zero and up to a year, such as \"30 d\"".to_owned())
    }
}

impl ForecastVerb {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        let wells: Vec<String> = site.wells.iter().map(|w| w.name.clone()).collect();
        let plan = match &self.plan {
            Some(path) => plan::read(path, &wells, site.units).map_err(Failure::wrong)?,
            None => RatePlan {
                wells: vec![Vec::new(); wells.len()],
            },
        };
        let present = present(&site, &self.log)?;
        let forecast = self
            .look(&site, &present, &plan)
            .map_err(Failure::unusable)?;
        let told = Told::new(&site, &present, &plan, &forecast);
        if let Some(path) = &self.svg {
            written(path, &told.picture())?;
        }
        if let Some(path) = &self.csv {
            written(path, &told.sheet())?;
        }
        print(&if context.json {
            told.json()
        } else {
            told.text(&[&self.svg, &self.csv])
        })?;
        Ok(Exit::Done)
    }

    fn look(&self, site: &Site, present: &Present, plan: &RatePlan) -> anyhow::Result<Forecast> {
        let watch = &present.standing.watch;
        let blocks = block_plan(site);
        let next = watch
            .next_block()
            .context("the watch has seen no block to go on from")?;
        let start = blocks.start_of(next).seconds();
        let last_row = plan.wells.iter().flatten().map(|(at, _)| *at);
        let planned = last_row.fold(0.0, f64::max) - start + BEYOND;
        let span = self.span.unwrap_or_else(|| planned.clamp(USUAL, LONGEST));
        #[expect(
            clippy::cast_possible_truncation,
            clippy::cast_sign_loss,
            reason = "at most a year of blocks of a minute or longer"
        )]
        let count = (span / blocks.seconds()).ceil().max(1.0) as usize;
        let limits: Vec<Bound> = site
            .limits
            .iter()
            .map(|limit| Bound {
                gauge: limit.gauge,
                above: limit.side == Side::Above,
                value: limit.value,
            })
            .collect();
        // As gauges were last read, so they will be.
        let whole = present.standing.recent.iter().rev();
        let mut whole = whole.filter(|b| b.gauges.iter().all(Option::is_some));
        let horizon = Horizon {
            blocks: count,
            instants: whole.next().map(|b| b.instants.clone()).unwrap_or_default(),
        };
        Ok(watch.forecast(plan, &horizon, &limits)?)
    }
}

/// Writes a file.
pub(super) fn written(path: &Path, text: &str) -> Result<(), Failure> {
    std::fs::write(path, text)
        .with_context(|| path.display().to_string())
        .map_err(Failure::unusable)
}
