//! How near commissioning comes to the truth on blind quiet cases, and whether its 95 % intervals cover it.
//!
//! `cargo run --release -p borewake --example calibration_table -- CASE...` where each CASE is a folder with `site.toml`, `history.csv`
//! and `truth.json` (`T` \[m3/(Pa s)\], `S` \[m/Pa\] of the one layer, and `skins`, one a well, where they are known). Commissioning
//! starts with T and S 25 % off, by turns above and below. Cases run two at a time.

use std::path::{Path, PathBuf};
use std::sync::Mutex;
use std::time::Instant;

use anyhow::{Context as _, Result};
use borewake::config::{self, Site};
use borewake::intake::log::LogReader;
use borewake::keeper::settings::block_plan;
use borewake::watch::commissioning::reduce_ground;
use borewake::watch::history::History;
use borewake_model::commission::{Calibration, CommissionSettings, commission};
use borewake_model::weak_form::Parameter;
use serde::Deserialize;

/// How far off commissioning starts, as a factor.
const OFF: f64 = 1.25;
/// Cases at once.
const AT_ONCE: usize = 2;
/// Half-width of a 95 % interval in standard deviations.
const WITHIN: f64 = 1.96;

#[derive(Debug, Deserialize)]
struct Truth {
    #[serde(rename = "T")]
    transmissivity: f64,
    #[serde(rename = "S")]
    storativity: f64,
    #[serde(default)]
    skins: Vec<f64>,
}

/// Error of one number and its stated standard deviation.
type Off = (f64, f64);

/// What one case gave.
#[derive(Debug)]
struct Row {
    name: String,
    transmissivity: Off,
    storativity: Off,
    skins: Vec<Off>,
    patch: [f64; 2],
    seconds: f64,
}

fn main() -> Result<()> {
    let cases: Vec<PathBuf> = std::env::args_os().skip(1).map(PathBuf::from).collect();
    let next = Mutex::new(cases.iter().enumerate());
    let rows = Mutex::new(Vec::new());
    println!(
        "case                    T off   (sd) %    S off   (sd) %   worst skin off  (sd)   patches T, S      s"
    );
    std::thread::scope(|scope| {
        for _ in 0..AT_ONCE {
            scope.spawn(|| {
                loop {
                    let Some((index, case)) = next.lock().ok().and_then(|mut n| n.next()) else {
                        return;
                    };
                    match look(case, index) {
                        Ok(row) => {
                            tell(&row);
                            if let Ok(mut rows) = rows.lock() {
                                rows.push(row);
                            }
                        }
                        Err(why) => println!("{}: {why:#}", case.display()),
                    }
                }
            });
        }
    });
    let rows = rows
        .into_inner()
        .map_err(|_| anyhow::anyhow!("a case failed"))?;
    println!();
    summary("T", 0.01, rows.iter().map(|r| r.transmissivity).collect());
    summary("S", 0.02, rows.iter().map(|r| r.storativity).collect());
    summary(
        "skin",
        0.1,
        rows.iter().flat_map(|r| r.skins.iter().copied()).collect(),
    );
    let slowest = rows.iter().map(|r| r.seconds).fold(0.0, f64::max);
    println!("slowest {slowest:.0} s, {AT_ONCE} at once");
    Ok(())
}

fn look(folder: &Path, index: usize) -> Result<Row> {
    let mut site = config::load(&folder.join("site.toml"))?;
    let truth: Truth = serde_json::from_slice(&std::fs::read(folder.join("truth.json"))?)?;
    let off = |turn: usize| {
        if turn.is_multiple_of(2) {
            OFF
        } else {
            OFF.recip()
        }
    };
    let layer = site
        .ground
        .layers
        .first_mut()
        .context("the site has no layer")?;
    layer.transmissivity = truth.transmissivity * off(index);
    layer.storativity = truth.storativity * off(index / 2);
    let begun = Instant::now();
    let calibration = calibrate(&site, &folder.join("history.csv"))?;
    let fitted = |parameter, described: f64, true_value: f64| {
        let mut both = calibration.factors.iter().zip(&calibration.factor_sd);
        let found = both.find(|((p, _), _)| *p == parameter);
        let ((_, factor), sd) = found.context("a parameter of the layer was not fitted")?;
        anyhow::Ok(((described * factor / true_value).ln(), *sd))
    };
    let layer = site
        .ground
        .layers
        .first()
        .context("the site has no layer")?;
    let known = calibration
        .skins
        .iter()
        .zip(&calibration.skin_sd)
        .zip(&truth.skins);
    Ok(Row {
        name: folder
            .file_name()
            .unwrap_or_default()
            .to_string_lossy()
            .into_owned(),
        transmissivity: fitted(
            Parameter::Transmissivity(0),
            layer.transmissivity,
            truth.transmissivity,
        )?,
        storativity: fitted(
            Parameter::Storativity(0),
            layer.storativity,
            truth.storativity,
        )?,
        skins: known
            .map(|((fitted, sd), skin)| (fitted - skin, *sd))
            .collect(),
        patch: calibration.priors.patch,
        seconds: begun.elapsed().as_secs_f64(),
    })
}

fn calibrate(site: &Site, log: &Path) -> Result<Calibration> {
    let plan = block_plan(site);
    let mut reader = LogReader::of_site(&[log.to_owned()], site)?;
    let mut history = History::default();
    while let Some(delivery) = reader.next_delivery()? {
        history.add(delivery.readings);
    }
    let (first, last) = history.span().context("the log is empty")?;
    let blocks = history.blocks(&plan, first, plan.start_of(plan.index_of(last) + 1));
    let reduced = reduce_ground(&site.ground, &mut |_, _| {})?;
    let settings = CommissionSettings::default();
    let (calibration, _) = commission(&site.ground, &reduced, &blocks, &settings, &mut |_| {})?;
    Ok(calibration)
}

fn tell(row: &Row) {
    let worst = row
        .skins
        .iter()
        .copied()
        .fold((0.0, 0.0), |worst: Off, skin| {
            if skin.0.abs() > worst.0.abs() {
                skin
            } else {
                worst
            }
        });
    println!(
        "{:<20} {:8.2} ({:5.2})   {:8.2} ({:5.2})   {:14.3} ({:5.3})   {:.3} {:.3}   {:6.1}",
        row.name,
        100.0 * row.transmissivity.0,
        100.0 * row.transmissivity.1,
        100.0 * row.storativity.0,
        100.0 * row.storativity.1,
        worst.0,
        worst.1,
        row.patch[0],
        row.patch[1],
        row.seconds
    );
}

/// Says how many lie within `asked`, and how many intervals cover, beside what a binomial test at 1 % allows.
fn summary(what: &str, asked: f64, all: Vec<Off>) {
    let near = all.iter().filter(|(off, _)| off.abs() <= asked).count();
    let covered = all
        .iter()
        .filter(|(off, sd)| off.abs() <= WITHIN * sd)
        .count();
    let worst = all.iter().map(|(off, _)| off.abs()).fold(0.0, f64::max);
    let scale = (all.iter().map(|(off, sd)| (off / sd).powi(2)).sum::<f64>()
        / all.len().max(1) as f64)
        .sqrt();
    println!(
        "{what}: within {asked}: {near} of {}, worst {worst:.4}; 95 % interval covers {covered} of {} (at least {} by a binomial test at 1 %); errors over stated spread {scale:.2}",
        all.len(),
        all.len(),
        least_covered(all.len())
    );
}

/// Least number of intervals that must cover so that 0.95 is not rejected at 1 %, one-sided.
fn least_covered(count: usize) -> usize {
    let miss = 0.05_f64;
    let mut chance = (1.0 - miss).powi(i32::try_from(count).unwrap_or(i32::MAX));
    let mut below = chance;
    for missed in 0..count {
        // `below` is the chance of at most `missed` misses.
        if 1.0 - below < 0.01 {
            return count - missed;
        }
        chance *= (count - missed) as f64 / (missed + 1) as f64 * miss / (1.0 - miss);
        below += chance;
    }
    0
}
