//! The report of a commissioning, gathered.

use borewake_model::ModelError;
use borewake_model::ground::mesh::{Mesh, MeshOptions, Quality};
use borewake_model::reduce::{Spread, spread};
use borewake_model::units::Dimension;
use serde_json::{Value, json};

use super::Found;
use super::changes::{APART, Drawn, drawn};
use super::figures::{self, NOT_SEEN};
use super::grounds;
use crate::cli::report::site_plan;
use crate::config::Site;
use crate::keeper::settings::block_plan;
use crate::record::{ChannelId, Expectation, Stamp};
use crate::report::calibration::{CalibrationReport, Sheet, html};
use crate::report::document::ChannelQuality;
use crate::report::plan::draw;
use crate::report::svg::{GaugePlot, PlotPoint, fit_plot, log_log_plot};

/// Most points of a plot.
const POINTS: usize = 1500;

/// What is worked out for the report alone.
#[derive(Debug, Clone)]
pub(super) struct Shown {
    pub(super) quality: Quality,
    pub(super) spread: Spread,
    changes: Vec<Drawn>,
    channels: Vec<ChannelQuality>,
}

impl Shown {
    pub(super) fn of(found: &Found<'_>) -> Result<Self, ModelError> {
        let options = MeshOptions::default();
        let ground = &found.site.ground;
        let commissioned = found.commissioned;
        Ok(Self {
            quality: Mesh::fit(ground, &options)?.quality(),
            // Worked out when the fitted ground was certified.
            spread: match &commissioned.numerics {
                Some(numerics) => numerics.spread,
                None => spread(ground, &options)?,
            },
            changes: drawn(found.site, commissioned, found.history, found.blocks)?,
            channels: channels(found),
        })
    }

    pub(super) fn changes_json(&self, site: &Site) -> Value {
        self.changes
            .iter()
            .map(|drawn| {
                json!({
                    "gauge": site.gauges.get(drawn.gauge).map(|g| &g.name),
                    "at": drawn.at,
                    "by_m3_s": drawn.by,
                    "held_s": drawn.held,
                    "smoothing": APART,
                    "change_s_pa": drawn.plot.points,
                    "slope_s_pa": drawn.plot.slopes,
                    "model_s_pa": drawn.plot.model,
                    "model_slope_s_pa": drawn.plot.model_slopes,
                })
            })
            .collect()
    }

    pub(super) fn channels_json(&self) -> Value {
        self.channels
            .iter()
            .map(|c| {
                json!({
                    "channel": c.name, "feeds": c.feeds, "readings": c.readings, "of_no_use": c.unusable,
                    "longest_gap_s": c.longest_gap, "last": c.last,
                })
            })
            .collect()
    }
}

/// The page as HTML.
pub(super) fn page(found: &Found<'_>, shown: &Shown) -> String {
    let site = found.site;
    let plan = block_plan(site);
    let calibration = &found.commissioned.calibration;
    let (first, last) = calibration.blocks;
    html(&CalibrationReport {
        site: site.name.clone(),
        made: found.made,
        span: (plan.start_of(first), plan.start_of(last + 1)),
        blocks: found.blocks.len(),
        warnings: super::warnings(found),
        figures: figure_sheet(found),
        told: figures::told(site, found.account),
        grounds: if found.account.tried.len() > 1 {
            grounds::sheet(found)
        } else {
            Sheet::default()
        },
        choice: grounds::choice(found),
        plan: draw(&site_plan(&site.ground, None)),
        gauges: gauge_sheet(found),
        plots: (0..site.gauges.len())
            .map(|gauge| residual_plot(found, gauge))
            .collect(),
        changes: shown
            .changes
            .iter()
            .map(|d| change_plot(site, d))
            .collect(),
        no_changes: "No plot can be drawn: none of the wells with a gauge in its bore changed its rate by a fifth of its \
                     largest and then held it for half a day."
            .to_owned(),
        channels: shown.channels.clone(),
        numerics: numerics(found, shown),
    })
}

fn figure_sheet(found: &Found<'_>) -> Sheet {
    let units = found.site.units;
    let heads = [
        "figure",
        "site file",
        "fitted",
        "95 % interval",
        "unit",
        "fitted, SI",
        "95 % interval, SI",
    ];
    let rows = figures::rows(found.site, &found.commissioned.calibration);
    let cells = |row: &figures::Row| {
        let mut cells = vec![row.name.clone(), row.shown(units, row.described)];
        match row.fitted {
            Some([fitted, low, high]) => {
                cells.push(row.shown(units, fitted));
                cells.push(format!(
                    "{} to {}",
                    row.shown(units, low),
                    row.shown(units, high)
                ));
                cells.push(row.unit(units).to_owned());
                if row.dimension.is_some() {
                    cells.push(format!("{} {}", row.si(fitted), row.si_unit()));
                    cells.push(format!("{} to {}", row.si(low), row.si(high)));
                } else {
                    cells.extend([String::new(), String::new()]);
                }
            }
            None => cells.extend(["", NOT_SEEN, "", "", ""].map(str::to_owned)),
        }
        cells
    };
    Sheet {
        heads: heads.map(str::to_owned).to_vec(),
        numbers: vec![1, 2, 3, 5, 6],
        rows: rows.iter().map(cells).collect(),
    }
}

fn gauge_sheet(found: &Found<'_>) -> Sheet {
    let site = found.site;
    let show = |pascal| site.units.show(Dimension::Pressure, pascal);
    let calibration = &found.commissioned.calibration;
    let mut rows = Vec::new();
    for (index, gauge) in site.gauges.iter().enumerate() {
        let Some(fit) = found.account.gauges.get(index) else {
            continue;
        };
        let noise = calibration.noise.get(index).copied().unwrap_or(f64::NAN);
        let (sd, lag) = calibration
            .left
            .get(index)
            .copied()
            .unwrap_or((f64::NAN, f64::NAN));
        rows.push(vec![
            gauge.name.clone(),
            fit.series.len().to_string(),
            fit.missing.to_string(),
            fit.outliers.len().to_string(),
            show(range(fit.series.iter().map(|s| s.1))),
            show(rms(fit.series.iter().map(|s| s.1 - s.2))),
            show(noise),
            format!("{sd:.2}"),
            format!("{:.2}", lag + 0.0),
        ]);
    }
    let heads = [
        "gauge",
        "blocks",
        "missing",
        "outliers",
        "moved by",
        "left (rms)",
        "noise of a block",
        "scale (1 = all)",
        "lag-1 of left",
    ];
    Sheet {
        heads: heads.map(str::to_owned).to_vec(),
        numbers: (1..heads.len()).collect(),
        rows,
    }
}

fn range(values: impl Iterator<Item = f64>) -> f64 {
    let (low, high) = values.fold((f64::INFINITY, f64::NEG_INFINITY), |(a, b), v| {
        (a.min(v), b.max(v))
    });
    (high - low).max(0.0)
}

fn rms(values: impl Iterator<Item = f64>) -> f64 {
    let (sum, count) = values.fold((0.0, 0.0_f64), |(s, n), v| (s + v * v, n + 1.0));
    (sum / count.max(1.0)).sqrt()
}

fn residual_plot(found: &Found<'_>, gauge: usize) -> String {
    let site = found.site;
    let plan = block_plan(site);
    let fit = found.account.gauges.get(gauge);
    let series = fit.map_or(&[][..], |f| f.series.as_slice());
    let sd = rms(series.iter().map(|s| s.1 - s.2));
    let every = series.len().div_ceil(POINTS).max(1);
    let points = series
        .iter()
        .step_by(every)
        .map(|&(block, reading, model)| {
            let (start, end) = (plan.start_of(block), plan.start_of(block + 1));
            PlotPoint {
                at: Stamp(start.0.midpoint(end.0)),
                reading: Some(reading),
                expectation: Some(Expectation { mean: model, sd }),
            }
        });
    let name = site.gauges.get(gauge).map_or("", |g| g.name.as_str());
    fit_plot(&GaugePlot {
        title: format!("{name}, {}", site.name),
        units: site.units,
        points: points.collect(),
        marks: Vec::new(),
    })
}

fn change_plot(site: &Site, drawn: &Drawn) -> (String, String) {
    let name = site.gauges.get(drawn.gauge).map_or("", |g| g.name.as_str());
    let mut plot = drawn.plot.clone();
    plot.title = format!("{name}, {}", crate::alarm::minute(drawn.at));
    let words = format!(
        "{name}: the rate changed by {} on {} and held for {}. Smoothing L = {APART} in ln time.",
        site.units.show(Dimension::Rate, drawn.by),
        crate::alarm::minute(drawn.at),
        crate::alarm::duration(drawn.held)
    );
    (words, log_log_plot(&plot))
}

fn numerics(found: &Found<'_>, shown: &Shown) -> Vec<String> {
    let site = found.site;
    let certificate = &found.commissioned.reduced.certificate;
    let time = |t| site.units.show(Dimension::Time, t);
    let place = |[x, y]: [f64; 2]| {
        let show = |v| site.units.show(Dimension::Length, v);
        format!("{} east, {} north", show(x), show(y))
    };
    let (fastest, slowest) = certificate.times;
    let mut said = vec![
        format!(
            "{} triangles, {} nodes a layer; least angle {:.0} degrees (at {}), steepest grading {:.1} (at {}).",
            shown.quality.triangles,
            shown.quality.quadratic_nodes,
            shown.quality.least_angle,
            place(shown.quality.least_angle_at),
            shown.quality.grading,
            place(shown.quality.grading_at)
        ),
        format!(
            "{} unknowns reduced to {} modes. Worst step response from {} to {}: {:.1e} of its peak at wells and gauges, {:.1e} at nodes drawn at random.",
            certificate.full_size,
            certificate.modes,
            time(fastest),
            time(slowest),
            certificate.ports,
            certificate.random_nodes
        ),
        format!(
            "A mesh with three quarters of the points on a ring moves responses by {:.1e} of their peak, linear in place of quadratic elements by {:.1e}.",
            shown.spread.sizes, shown.spread.schemes
        ),
    ];
    if let Some(numerics) = &found.commissioned.numerics {
        said.push(format!(
            "With the fitted parameters and patches: {:.1e} at wells and gauges, {:.1e} at nodes drawn at random. The watch leaves {:.1e} of every response to the numbers, so that no alarm is tighter.",
            numerics.fitted.ports,
            numerics.fitted.random_nodes,
            numerics.pair(),
        ));
    }
    said
}

/// How every channel stood over the history.
fn channels(found: &Found<'_>) -> Vec<ChannelQuality> {
    let site = found.site;
    let plan = block_plan(site);
    let (first, last) = found.commissioned.calibration.blocks;
    let (from, to) = (plan.start_of(first), plan.start_of(last + 1));
    let gauges = site
        .gauges
        .iter()
        .map(|g| (&g.channel, format!("gauge {}", g.name)));
    let wells = site
        .wells
        .iter()
        .map(|w| (&w.rate, format!("well {}", w.name)));
    gauges
        .chain(wells)
        .map(|(channel, feeds)| channel_quality(found, channel, feeds, (from, to)))
        .collect()
}

fn channel_quality(
    found: &Found<'_>,
    channel: &ChannelId,
    feeds: String,
    (from, to): (Stamp, Stamp),
) -> ChannelQuality {
    let mut quality = ChannelQuality {
        name: channel.to_string(),
        feeds,
        readings: 0,
        unusable: 0,
        longest_gap: 0.0,
        last: None,
    };
    let mut before = from;
    let within = found.history.of(channel);
    for reading in within.iter().filter(|r| (from..to).contains(&r.sampled)) {
        quality.readings += 1;
        if !reading.is_usable() {
            quality.unusable += 1;
            continue;
        }
        let gap = reading.sampled.seconds() - before.seconds();
        quality.longest_gap = quality.longest_gap.max(gap);
        before = reading.sampled;
        quality.last = Some(reading.sampled);
    }
    quality.longest_gap = quality.longest_gap.max(to.seconds() - before.seconds());
    quality
}
