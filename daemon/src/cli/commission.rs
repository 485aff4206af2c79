//! `borewake commission`: calibrates on quiet history and writes the ground file.

use std::path::PathBuf;

use borewake_model::commission::Commissioned;
use borewake_model::weak_form::Parameter;
use clap::Args;

mod embankment;

use super::progress;
use super::{Context, Exit, Failure, print};
use crate::config::{self, Site};
use crate::intake::log::LogReader;
use crate::keeper::settings::block_plan;
use crate::record::Stamp;
use crate::store::{Reader, StoreError};
use crate::watch::commissioning::{Stage, make};
use crate::watch::ground_file::{GroundFile, Model};
use crate::watch::history::History;

/// Fits transmissivity, storativity and skins to quiet history and writes the ground file
#[derive(Debug, Args)]
#[command(after_help = "\
Example:
  borewake commission site.toml --from 2031-03-01T00:00:00Z --to 2031-04-15T00:00:00Z
  borewake commission site.toml --log march.csv april.csv
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
}

fn instant(text: &str) -> Result<Stamp, String> {
    Stamp::parse(text).map_err(|e| format!("{e}; write it as 2031-03-01T00:00:00Z"))
}

impl Commission {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        let history = if self.log.is_empty() {
            self.stored(&site)
        } else {
            self.logged(&site)
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
        let blocks = history.blocks(&plan, from, to);
        let ground = commission_site(&site, &blocks, Stamp::now()).map_err(|why| {
            Failure::unusable(anyhow::Error::new(why).context(site.path.display().to_string()))
        })?;
        let path = ground
            .write(&site.store.folder)
            .map_err(Failure::unusable)?;
        if context.json {
            let text = match &ground.commissioned {
                Model::Ground(ground) => serde_json::to_string(&ground.calibration),
                Model::Embankment(embankment) => serde_json::to_string(&embankment.calibration),
            };
            let text = text.map_err(Failure::unusable)?;
            print(&format!("{text}\n"))?;
        } else {
            print(&format!(
                "{}{}ground file   {}\n",
                summary(&site, &ground),
                super::reach::line(&site, &ground, &blocks).unwrap_or_default(),
                path.display()
            ))?;
        }
        Ok(Exit::Done)
    }

    fn logged(&self, site: &Site) -> anyhow::Result<History> {
        let mut log = LogReader::of_site(&self.log, site)?;
        let bar = progress::bytes(log.total_bytes(), "reading logs");
        let mut history = History::default();
        while let Some(delivery) = log.next_delivery()? {
            history.add(delivery.readings);
            bar.set_position(log.read_bytes());
        }
        bar.finish_and_clear();
        Ok(history)
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

/// Makes a ground file, with a progress bar.
pub(super) fn commission_site(
    site: &Site,
    blocks: &[crate::record::Block],
    made: Stamp,
) -> Result<GroundFile, borewake_model::ModelError> {
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
    let ground = make(site, blocks, made, &mut show);
    bar.finish_and_clear();
    ground
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
    let certificate = &commissioned.reduced.certificate;
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
    let _ = writeln!(
        text,
        "model         {} unknowns, {} modes; worst step response {:.1e} at ports, {:.1e} at random nodes",
        certificate.full_size, certificate.modes, certificate.ports, certificate.random_nodes
    );
    let _ = writeln!(
        text,
        "\n{:<28} {:>12} {:>12} {:>9}",
        "parameter", "described", "fitted", "spread"
    );
    for ((parameter, factor), sd) in calibration.factors.iter().zip(&calibration.factor_sd) {
        let (name, described) = describe(site, *parameter);
        let _ = writeln!(
            text,
            "{name:<28} {:>12} {:>12} {:>8.2}%",
            described.0,
            described.1(*factor),
            sd * 100.0
        );
    }
    for ((well, fitted), sd) in site
        .ground
        .wells
        .iter()
        .zip(&calibration.skins)
        .zip(&calibration.skin_sd)
    {
        let name = format!("skin of {}", well.name);
        let _ = writeln!(
            text,
            "{name:<28} {:>12.2} {fitted:>12.2} {sd:>9.2}",
            well.skin
        );
    }
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
    if let Some(suspect) = calibration.suspect {
        let _ = writeln!(
            text,
            "This history asks for a barrier that the site file does not tell of: {:.0} m from the middle of the array,\n\
             {:.0} degrees from east, counter-clockwise (log evidence {:.0}). The watch will report it; if you know of it,\n\
             declare it with [[barrier]] and commission again.",
            suspect.distance,
            suspect.azimuth.to_degrees().rem_euclid(360.0),
            suspect.log_evidence
        );
    }
    let _ = writeln!(
        text,
        "\nA leak that was already flowing in this history is part of the calibration and cannot be seen.\n"
    );
    text
}

type Shown = (String, Box<dyn Fn(f64) -> String>);

fn describe(site: &Site, parameter: Parameter) -> (String, Shown) {
    let layer = |i: usize| site.ground.layers.get(i);
    let shown = |value: f64, unit: &'static str| -> Shown {
        (
            format!("{value:.3e} {unit}"),
            Box::new(move |factor| format!("{:.3e} {unit}", value * factor)),
        )
    };
    match parameter {
        Parameter::Transmissivity(i) => match layer(i) {
            Some(l) => (
                format!("T of {} [m3/(Pa s)]", l.name),
                shown(l.transmissivity, ""),
            ),
            None => (format!("T of layer {i}"), shown(1.0, "x")),
        },
        Parameter::Storativity(i) => match layer(i) {
            Some(l) => (format!("S of {} [m/Pa]", l.name), shown(l.storativity, "")),
            None => (format!("S of layer {i}"), shown(1.0, "x")),
        },
        Parameter::ZoneTransmissivity(i) => match site.ground.zones.get(i) {
            Some(z) => (
                format!("T of {} [m3/(Pa s)]", z.name),
                shown(z.transmissivity, ""),
            ),
            None => (format!("T of zone {i}"), shown(1.0, "x")),
        },
        Parameter::ZoneStorativity(i) => match site.ground.zones.get(i) {
            Some(z) => (format!("S of {} [m/Pa]", z.name), shown(z.storativity, "")),
            None => (format!("S of zone {i}"), shown(1.0, "x")),
        },
        other => (format!("{other:?}").to_lowercase(), shown(1.0, "x")),
    }
}
