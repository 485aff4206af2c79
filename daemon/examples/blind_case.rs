//! What the model says of blind cases, beside the truth: a quick look into the mathematics, without store or alarms.
//!
//! `cargo run --release -p borewake --example blind_case -- CASE...` where each CASE is a folder with `site.toml`,
//! `history.csv` (quiet days to commission on), `log.csv` (what follows) and `truth.json` (`kind`, `onset`, `onset_s`,
//! `commission_days`, and where it has them `place`, `size_m3d` and `span`). The ground file is kept in the case's folder
//! `blind-case`; take it away to commission anew. `EVERY=n` prints the evidence of every cause each n blocks.

use std::path::{Path, PathBuf};
use std::time::Instant;

use anyhow::{Context as _, Result};
use borewake::config::{self, Site};
use borewake::intake::log::LogReader;
use borewake::keeper::settings::block_plan;
use borewake::record::Stamp;
use borewake::watch::commissioning::make;
use borewake::watch::ground_file::GroundFile;
use borewake::watch::history::History;
use borewake_model::finding::Finding;
use borewake_model::watch::Watch;
use serde::Deserialize;

const DAY: f64 = 86_400.0;

/// What was planted.
#[derive(Debug, Deserialize)]
struct Truth {
    kind: String,
    onset: String,
    onset_s: f64,
    commission_days: f64,
    place: Option<[f64; 2]>,
    size_m3d: Option<f64>,
    span: Option<f64>,
}

/// What the watch said, gathered over the log.
#[derive(Debug, Default)]
struct Said {
    /// Highest log mixture while nothing was there.
    quiet: Option<f64>,
    /// First finding while nothing was there: day of the log, cause.
    false_alarm: Option<(f64, &'static str)>,
    /// First finding after the onset: days since, cause.
    first: Option<(f64, &'static str)>,
    /// Last finding after the onset.
    last: Option<Finding>,
    /// Blocks within the 95 % band and judged, by gauge.
    covered: Vec<(u32, u32)>,
}

fn main() -> Result<()> {
    let every: usize = match std::env::var("EVERY") {
        Ok(text) => text.parse().context("EVERY must be a number of blocks")?,
        Err(_) => usize::MAX,
    };
    for folder in std::env::args_os().skip(1).map(PathBuf::from) {
        look(&folder, every).with_context(|| folder.display().to_string())?;
    }
    Ok(())
}

fn look(folder: &Path, every: usize) -> Result<()> {
    let site = config::load(&folder.join("site.toml"))?;
    let truth: Truth = serde_json::from_slice(&std::fs::read(folder.join("truth.json"))?)?;
    let onset = Stamp::parse(&truth.onset).map_err(|e| anyhow::anyhow!("onset: {e}"))?;
    let end = Stamp::from_seconds(onset.seconds() - truth.onset_s + truth.commission_days * DAY);
    let plan = block_plan(&site);
    let history = read(&site, &[folder.join("history.csv"), folder.join("log.csv")])?;
    let (first, last) = history.span().context("the logs are empty")?;

    let begun = Instant::now();
    let store = folder.join("blind-case");
    let ground = match GroundFile::read(&store, &site.ground_digest()) {
        Ok(ground) => ground,
        Err(_) => {
            let blocks = history.blocks(&plan, first, end);
            let (ground, _) = make(&site, &blocks, &[], Stamp(0), &mut |_, _| {})?;
            ground.write(&store)?;
            ground
        }
    };
    let calibration = &ground
        .commissioned
        .ground()
        .ok_or_else(|| anyhow::anyhow!("{} is no field of wells", folder.display()))?
        .calibration;
    println!(
        "{}: commissioned in {:.1} s; patches {:.3} {:.3}, meter gain {:.4}, barrier {:?}",
        folder.display(),
        begun.elapsed().as_secs_f64(),
        calibration.priors.patch[0],
        calibration.priors.patch[1],
        calibration.priors.gain,
        calibration.suspect
    );

    let begun = Instant::now();
    let start = ground.start.clone();
    let mut watch = Watch::restore(&ground.commissioned, &ground.settings, &[], start)?;
    let mut said = Said {
        covered: vec![(0, 0); site.ground.gauges.len()],
        ..Said::default()
    };
    let from = plan.start_of(ground.last_block + 1);
    let until = plan.start_of(plan.index_of(last) + 1);
    for (index, block) in history.blocks(&plan, from, until).iter().enumerate() {
        let step = watch.step(block)?;
        let at = plan.start_of(block.index + 1);
        let quiet = match truth.kind.as_str() {
            "none" => true,
            "barrier" => false,
            _ => at <= onset,
        };
        let finding = step.finding.as_ref().zip(
            step.finding
                .as_ref()
                .and_then(|f| f.causes.first())
                .map(|c| c.cause.name()),
        );
        if quiet {
            said.quiet = Some(
                said.quiet
                    .map_or(step.log_mixture, |q| q.max(step.log_mixture)),
            );
            let both = step.expectations.iter().zip(&step.departures);
            for (covered, (expectation, departure)) in said.covered.iter_mut().zip(both) {
                if let (Some(expectation), Some(departure)) = (expectation, departure) {
                    covered.0 += u32::from(departure.abs() < 1.96 * expectation.sd);
                    covered.1 += 1;
                }
            }
            if let Some((_, cause)) = finding {
                said.false_alarm.get_or_insert((days(at, end), cause));
            }
        } else if let Some((finding, cause)) = finding {
            said.first.get_or_insert((days(at, onset), cause));
            said.last = Some(finding.clone());
        }
        if index % every == every - 1 {
            let evidence: Vec<String> = watch
                .evidence()
                .iter()
                .map(|(cause, log)| format!("{} {log:.1}", cause.name()))
                .collect();
            println!(
                "  day {:5.1}: {:.1} of {:.1}; {}",
                days(at, end),
                step.log_mixture,
                step.log_threshold,
                evidence.join(", ")
            );
        }
    }
    tell(&truth, &said, watch.log_threshold(), onset);
    println!("  watched in {:.1} s", begun.elapsed().as_secs_f64());
    Ok(())
}

fn tell(truth: &Truth, said: &Said, threshold: f64, onset: Stamp) {
    let covered: Vec<String> = said
        .covered
        .iter()
        .filter(|(_, judged)| *judged > 0)
        .map(|(within, judged)| format!("{:.2}", f64::from(*within) / f64::from(*judged)))
        .collect();
    println!(
        "  quiet: highest {:.1} of {threshold:.1}, false alarm {:?}, cover {}",
        said.quiet.unwrap_or(f64::NEG_INFINITY),
        said.false_alarm,
        covered.join(" ")
    );
    let Some(last) = &said.last else {
        println!("  {}: nothing found", truth.kind);
        return;
    };
    let leading = last.causes.first().map_or("nothing", |c| c.cause.name());
    print!(
        "  {}: {leading} (named {}), first {:?} days after; onset {:+.2} d",
        truth.kind,
        last.named,
        said.first,
        (last.onset - onset.seconds()) / DAY
    );
    if let (Some(place), Some(there)) = (last.place, truth.place) {
        let off = (place.x - there[0]).hypot(place.y - there[1]);
        print!(
            "; {off:.0} m off ({:.2} span), 90 % within {:.0} m",
            off / truth.span.unwrap_or(f64::NAN),
            place.radius_90
        );
    }
    if let (Some(size), Some(true_size)) = (last.size, truth.size_m3d) {
        print!(
            "; {:.1} +- {:.1} of {true_size:.1} m3/d",
            size.value * DAY,
            size.sd * DAY
        );
    }
    println!();
}

fn days(at: Stamp, since: Stamp) -> f64 {
    (at.seconds() - since.seconds()) / DAY
}

fn read(site: &Site, logs: &[PathBuf]) -> Result<History> {
    let mut log = LogReader::of_site(logs, site)?;
    let mut history = History::default();
    while let Some(delivery) = log.next_delivery()? {
        history.add(delivery.readings);
    }
    Ok(history)
}
