//! A picture of every gauge that an alarm of the watch named as affected.

use std::collections::BTreeSet;
use std::path::{Path, PathBuf};

use anyhow::Context as _;
use borewake_model::finding::Subject;

use super::score::Score;
use crate::config::Site;
use crate::keeper::settings::block_plan;
use crate::record::Stamp;
use crate::report::svg::{GaugePlot, PlotPoint, gauge_plot};
use crate::store::{Judged, Reader};

/// Draws the pictures into `out`; gives the files written.
pub(super) async fn draw(
    site: &Site,
    store: &Path,
    score: &Score,
    out: &Path,
) -> anyhow::Result<Vec<PathBuf>> {
    let reader = Reader::open(store).await?;
    let judged = reader.judged_between(i64::MIN, i64::MAX).await?;
    std::fs::create_dir_all(out).with_context(|| out.display().to_string())?;
    let mut written = Vec::new();
    for gauge in affected(score) {
        let Some(settings) = site.gauges.get(gauge) else {
            continue;
        };
        let plot = GaugePlot {
            title: format!("{}, {}", settings.name, site.name),
            units: site.units,
            points: points(site, &judged, gauge),
            marks: score.marks(),
        };
        let path = out.join(format!("{}.svg", settings.name));
        std::fs::write(&path, gauge_plot(&plot)).with_context(|| path.display().to_string())?;
        written.push(path);
    }
    reader.close().await;
    Ok(written)
}

fn affected(score: &Score) -> BTreeSet<usize> {
    let mut gauges = BTreeSet::new();
    for found in score.found() {
        gauges.extend(found.finding.gauges.iter().map(|(gauge, ..)| *gauge));
        if let Some(Subject::Gauge(gauge)) = found.finding.causes.first().and_then(|c| c.subject) {
            gauges.insert(gauge);
        }
    }
    gauges
}

fn points(site: &Site, judged: &[Judged], gauge: usize) -> Vec<PlotPoint> {
    let plan = block_plan(site);
    judged
        .iter()
        .map(|j| {
            let expectation = j.step.expectations.get(gauge).copied().flatten();
            let departure = j.step.departures.get(gauge).copied().flatten();
            let at = Stamp(
                plan.start_of(j.step.block)
                    .0
                    .midpoint(plan.start_of(j.step.block + 1).0),
            );
            PlotPoint {
                at,
                reading: expectation.zip(departure).map(|(e, d)| e.mean + d),
                expectation,
            }
        })
        .collect()
}
