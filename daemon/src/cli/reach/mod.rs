//! `borewake reach`: the smallest leak that would be noticed, by place and by time since it began.

mod told;

use std::path::PathBuf;

use anyhow::Context as _;
use borewake_model::commission::Places;
use borewake_model::ground::Point;
use borewake_model::units::{Dimension, nearest};
use borewake_model::watch::{AddedGauge, Reach};
use clap::Args;

use self::told::{Added, Told};
use super::forecast::written;
use super::standing::{Present, present};
use super::{Context, Exit, Failure, print, progress};
use crate::config::{self, Site};
use crate::keeper::settings::block_plan;
use crate::record::Block;
use crate::watch::ground_file::GroundFile;
use crate::watch::standing::at_commissioning;

const HOUR: f64 = 3_600.0;
const DAY: f64 = 86_400.0;
/// Delays of the table \[s\].
const DELAYS: [f64; 6] = [HOUR, 6.0 * HOUR, DAY, 3.0 * DAY, 10.0 * DAY, 30.0 * DAY];
/// Time in which an added gauge learns before the leak begins \[s\].
const LEARNING: f64 = 30.0 * DAY;

/// Tells the smallest leak that would be noticed with 90 % probability, by place and by time since it began
#[derive(Debug, Args)]
#[command(after_help = "\
Examples:
  borewake reach site.toml
  borewake reach site.toml --after \"10 d\" --svg reach.svg --csv reach.csv
  borewake reach site.toml --gauge-at \"310 m,-480 m\" --noise \"50 Pa\"

It takes the ground file, what the watch has learned since, and the rates of the last 30 days as the pattern of those to come,
every gauge delivering. A leak is constant from its beginning. The store is read beside a running daemon, or without one.")]
pub(super) struct ReachVerb {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// Logs to use in place of the store's readings
    #[arg(long, value_name = "LOG", num_args = 1..)]
    log: Vec<PathBuf>,
    /// Time since the leak began that the map shows
    #[arg(long, value_name = "TIME", default_value = "3 d", value_parser = time)]
    after: f64,
    /// Writes the map
    #[arg(long, value_name = "FILE")]
    svg: Option<PathBuf>,
    /// Writes every place
    #[arg(long, value_name = "FILE")]
    csv: Option<PathBuf>,
    /// What a further gauge here would gain: metres or feet east and north of the site's origin
    #[arg(long, value_name = "EAST,NORTH", value_parser = point, allow_hyphen_values = true)]
    gauge_at: Option<Point>,
    /// Its layer; the first where not given
    #[arg(long, value_name = "LAYER", requires = "gauge_at")]
    layer: Option<String>,
    /// Noise of its block means
    #[arg(long, value_name = "PRESSURE", default_value = "100 Pa", value_parser = pressure)]
    noise: f64,
}

fn time(text: &str) -> Result<f64, String> {
    let value = Dimension::Time.parse(text).map_err(|e| e.to_string())?;
    if value > 0.0 && value <= 90.0 * DAY {
        Ok(value)
    } else {
        Err("give a time above zero and up to 90 d, such as \"3 d\"".to_owned())
    }
}

fn pressure(text: &str) -> Result<f64, String> {
    let value = Dimension::Pressure.parse(text).map_err(|e| e.to_string())?;
    if value > 0.0 {
        Ok(value)
    } else {
        Err("a noise is above zero, such as \"100 Pa\"".to_owned())
    }
}

fn point(text: &str) -> Result<Point, String> {
    let (east, north) = text
        .split_once(',')
        .ok_or("give east and north, such as \"310 m,-480 m\"")?;
    let length = |text: &str| {
        Dimension::Length
            .parse(text.trim())
            .map_err(|e| e.to_string())
    };
    Ok([length(east)?, length(north)?])
}

/// Refuses a place beyond the edge: the model knows nothing of what lies there.
fn within(site: &Site, at: Point) -> Result<(), Failure> {
    let [x, y] = Places::of(&site.ground).centre;
    let (off, edge) = ((at[0] - x).hypot(at[1] - y), site.ground.edge.distance);
    if off <= edge {
        return Ok(());
    }
    Err(Failure::wrong(anyhow::anyhow!(
        "--gauge-at: that is {off:.0} m from the middle of wells and gauges, beyond the edge at {edge:.0} m; give a place within it, or the edge a greater distance"
    )))
}

impl ReachVerb {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        let layer = self.layer(&site)?;
        if site.embankment.is_some() {
            return Err(Failure::wrong(anyhow::anyhow!(
                "{}: an embankment claims no place of a leak, so it has no reach",
                self.site.display()
            )));
        }
        if let Some(at) = self.gauge_at {
            within(&site, at)?;
        }
        let present = present(&site, &self.log)?;
        let reach = self.weigh(&site, &present).map_err(Failure::unusable)?;
        let added = match self.gauge_at {
            Some(at) => Some(
                self.added(&site, &present, at, layer)
                    .map_err(Failure::unusable)?,
            ),
            None => None,
        };
        let told = Told {
            site: &site,
            notes: notes(&site, &present),
            reach: &reach,
            added: added.as_ref(),
            after: self.after,
        };
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

    fn layer(&self, site: &Site) -> Result<usize, Failure> {
        let Some(name) = &self.layer else {
            return Ok(0);
        };
        let names: Vec<&str> = site.ground.layers.iter().map(|l| l.name.as_str()).collect();
        names.iter().position(|n| n == name).ok_or_else(|| {
            let mend = match nearest(name, names.iter().copied()) {
                Some(near) => format!("did you mean {near}?"),
                None => format!("the layers are {}", names.join(", ")),
            };
            Failure::wrong(anyhow::anyhow!(
                "--layer: there is no layer {name:?}; {mend}"
            ))
        })
    }

    /// The delays asked for that history is long enough for, with that of the map.
    fn delays(&self, site: &Site, pattern: &[Block]) -> Vec<f64> {
        let mut delays = DELAYS.to_vec();
        if !delays.iter().any(|d| (d - self.after).abs() < 1.0) {
            delays.push(self.after);
        }
        delays.sort_by(f64::total_cmp);
        let held = span(site, pattern);
        delays.retain(|d| pattern.is_empty() || *d <= held + 1.0);
        delays
    }

    fn weigh(&self, site: &Site, present: &Present) -> anyhow::Result<Reach> {
        let pattern = &present.standing.recent;
        let bar = progress::share("weighing leaks");
        let delays = self.delays(site, pattern);
        let reach = present.standing.watch.reach(pattern, &delays, 0)?;
        bar.finish_and_clear();
        Ok(reach)
    }

    /// Reach with a further gauge and without it, both after the same time of learning.
    fn added(
        &self,
        site: &Site,
        present: &Present,
        wanted: Point,
        layer: usize,
    ) -> anyhow::Result<Added> {
        let pattern = &present.standing.recent;
        let watch = &present.standing.watch;
        let drift = site
            .ground
            .gauges
            .iter()
            .map(|g| g.drift)
            .fold(0.0, f64::max);
        let added = AddedGauge {
            at: wanted,
            layer,
            noise: self.noise,
            drift,
        };
        let ground = &present.ground;
        let commissioned = ground
            .commissioned
            .ground()
            .context("the ground file is that of an embankment")?;
        let trial = watch
            .with_gauge(commissioned, &ground.settings, pattern, &added)
            .context("the gauge cannot be added")?;
        let learn = LEARNING / block_plan(site).seconds();
        #[expect(
            clippy::cast_possible_truncation,
            clippy::cast_sign_loss,
            reason = "30 days of blocks of a minute or longer"
        )]
        let learn = learn.ceil().max(0.0) as usize;
        let delays = self.delays(site, pattern);
        Ok(Added {
            wanted,
            at: trial.at,
            layer,
            noise: self.noise,
            without: trial.without.reach(pattern, &delays, learn)?,
            with: trial.with.reach(pattern, &delays, learn)?,
        })
    }
}

fn span(site: &Site, pattern: &[Block]) -> f64 {
    let blocks = u32::try_from(pattern.len()).unwrap_or(u32::MAX);
    f64::from(blocks) * block_plan(site).seconds()
}

fn notes(site: &Site, present: &Present) -> Vec<String> {
    let mut notes = present.notes.clone();
    let pattern = &present.standing.recent;
    if pattern.is_empty() {
        notes.push("No readings are at hand: rates are held at their last values.".to_owned());
    } else {
        let span = site.units.show(Dimension::Time, span(site, pattern));
        notes.push(format!(
            "Rates go on as in the last {span}; delays longer than that are left out."
        ));
    }
    for (index, gauge) in site.gauges.iter().enumerate() {
        let read = |b: &Block| b.gauges.get(index).is_some_and(Option::is_some);
        if !pattern.is_empty() && !pattern.iter().rev().take(6).any(read) {
            notes.push(format!(
                "{} does not deliver now; this is the reach with it.",
                gauge.name
            ));
        }
    }
    notes
}

/// One line for `commission`: the median within the outline after three days. `None` where history is shorter.
pub(super) fn line(site: &Site, ground: &GroundFile, history: &[Block]) -> Option<String> {
    let watch = at_commissioning(ground).ok()?;
    let blocks = (30.0 * DAY / block_plan(site).seconds()).ceil();
    #[expect(
        clippy::cast_possible_truncation,
        clippy::cast_sign_loss,
        reason = "30 days of blocks of a minute or longer"
    )]
    let from = history.len().saturating_sub(blocks as usize);
    let reach = watch.reach(history.get(from..)?, &[3.0 * DAY], 0).ok()?;
    let [best, median, worst] = told::within_outline(&reach, 0)?;
    let shown = |size| told::size(Some(size), |v| site.units.show(Dimension::Rate, v));
    Some(format!(
        "Reach: of leaks that begin within the outline, the smallest noticed within 3 d with 90 % probability is {} at the median place\n\
         ({} at the best, {} at the worst). `borewake reach` tells it place by place.\n",
        shown(median),
        shown(best),
        shown(worst)
    ))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn places_and_times_are_read() {
        assert_eq!(point("310 m,-480 m"), Ok([310.0, -480.0]));
        assert!(point("310 m").is_err() && point("310,-480").is_err());
        assert_eq!(time("3 d"), Ok(3.0 * DAY));
        assert!(time("0 s").is_err() && time("1 yr").is_err());
        assert!(pressure("0 Pa").is_err());
    }
}
