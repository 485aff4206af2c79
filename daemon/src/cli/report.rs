//! `borewake report`: the evidence for one alarm as one file.

use std::path::PathBuf;

use anyhow::Context as _;
use borewake_model::ground::Ground;
use clap::Args;

use super::commission::summary;
use super::{Context, Exit, Failure, print};
use crate::config::{self, Site};
use crate::keeper::settings::block_plan;
use crate::record::{Alarm, AlarmId, ChannelId, Place, Stamp, Transition};
use crate::report::document::{AlarmReport, ChannelQuality, html};
use crate::report::plan::{Mark, Plan, draw};
use crate::report::svg::{GaugePlot, PlotPoint, gauge_plot};
use crate::store::{Judged, Reader};
use crate::watch::ground_file::GroundFile;

/// Steps of an alarm looked at.
const STEPS: i64 = 1000;
/// Shortest time shown before an alarm began \[µs\].
const BEFORE: i64 = 7 * 24 * 3600 * Stamp::SECOND;
/// Longest time shown \[µs\].
const LONGEST: i64 = 120 * 24 * 3600 * Stamp::SECOND;
/// Most points of a plot.
const POINTS: usize = 1200;

/// Writes the evidence for one alarm: one HTML file with plots that needs nothing else and prints well
#[derive(Debug, Args)]
#[command(after_help = "\
Examples:
  borewake report site.toml watch
  borewake report site.toml watch --occurrence 2 --out leak-at-the-north-well.html

Reads the store beside a running daemon, or without one.")]
pub(super) struct Report {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// Name of the alarm, as `borewake alarms` shows it
    #[arg(value_name = "ALARM")]
    alarm: String,
    /// Which occurrence; the latest where not given
    #[arg(long, value_name = "N")]
    occurrence: Option<u32>,
    /// The file to write; named after site, alarm and occurrence where not given
    #[arg(long, value_name = "FILE")]
    out: Option<PathBuf>,
}

impl Report {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        let runtime = tokio::runtime::Builder::new_current_thread()
            .enable_all()
            .build()
            .map_err(Failure::unusable)?;
        let report = runtime.block_on(async {
            let reader = Reader::open(&site.store.folder)
                .await
                .map_err(Failure::unusable)?;
            let report = self.gather(&site, &reader).await;
            reader.close().await;
            report
        })?;
        let path = self.out.clone().unwrap_or_else(|| {
            let alarm = &report.alarm;
            format!("report-{}-{}-{}.html", site.id, alarm.id, alarm.occurrence).into()
        });
        std::fs::write(&path, html(&report))
            .with_context(|| path.display().to_string())
            .map_err(Failure::unusable)?;
        print(&if context.json {
            format!("{:#}\n", serde_json::json!({ "written": path }))
        } else {
            format!("{}\n", path.display())
        })?;
        Ok(Exit::Done)
    }

    async fn gather(&self, site: &Site, reader: &Reader) -> Result<AlarmReport, Failure> {
        let id = AlarmId(self.alarm.clone());
        let steps = reader.latest_transitions(Some(&id), STEPS).await;
        let steps = steps.map_err(Failure::unusable)?;
        let occurrence = self
            .occurrence
            .or_else(|| steps.first().map(|(_, t)| t.alarm.occurrence));
        let mut history: Vec<Transition> = steps
            .into_iter()
            .map(|(_, t)| t)
            .filter(|t| Some(t.alarm.occurrence) == occurrence)
            .collect();
        history.reverse();
        let Some(alarm) = told(&history) else {
            let known = reader.alarms().await.map_err(Failure::unusable)?;
            return Err(Failure::wrong(unknown(&id, self.occurrence, &known)));
        };
        let window = window(&alarm, &history);
        let (plots, channels) = self
            .look(site, reader, &alarm, window)
            .await
            .map_err(Failure::unusable)?;
        let model = GroundFile::read(&site.store.folder, &site.ground_digest())
            .map(|ground| summary(site, &ground))
            .map_err(|why| format!("There is no model now: {why}."));
        Ok(AlarmReport {
            site: site.name.clone(),
            names: site.names(),
            made: Stamp::now(),
            window,
            plan: draw(&site_plan(
                &site.ground,
                alarm.finding.as_ref().and_then(|f| f.place),
            )),
            plots,
            history,
            channels,
            model,
            embankment: site.embankment.is_some(),
            alarm,
        })
    }

    async fn look(
        &self,
        site: &Site,
        reader: &Reader,
        alarm: &Alarm,
        (from, to): (Stamp, Stamp),
    ) -> anyhow::Result<(Vec<(String, String)>, Vec<ChannelQuality>)> {
        let length = i64::try_from(site.watch.block.as_micros()).unwrap_or(i64::MAX);
        let length = length.max(1);
        let blocks = (from.0.div_euclid(length), to.0.div_euclid(length) + 1);
        let judged = reader.judged_between(blocks.0, blocks.1).await?;
        let mut marks = vec![(alarm.since, "began".to_owned())];
        if let Some(finding) = &alarm.finding {
            marks = vec![(Stamp::from_seconds(finding.onset), "onset".to_owned())];
        }
        let plots = site.gauges.iter().enumerate().map(|(index, gauge)| {
            let plot = GaugePlot {
                title: format!("{}, {}", gauge.name, site.name),
                units: site.units,
                points: points(site, &judged, index),
                marks: marks.clone(),
            };
            (gauge.name.clone(), gauge_plot(&plot))
        });
        let plots = plots.collect();
        let gauges = site
            .gauges
            .iter()
            .map(|g| (&g.channel, format!("gauge {}", g.name)));
        let wells = site
            .wells
            .iter()
            .map(|w| (&w.rate, format!("well {}", w.name)));
        let waters = site
            .waters
            .iter()
            .map(|w| (&w.channel, format!("water {}", w.name)));
        let mut channels = Vec::new();
        let drives = site.embankment.iter().flat_map(|e| &e.drives);
        let drives = drives.map(|d| (&d.channel, d.driver.name().to_owned()));
        for (channel, feeds) in gauges.chain(wells).chain(waters).chain(drives) {
            channels.push(quality(reader, channel, feeds, (from, to)).await?);
        }
        Ok((plots, channels))
    }
}

/// The alarm as it last was with a finding; without one, as it last was.
fn told(history: &[Transition]) -> Option<Alarm> {
    let last = history.last()?.alarm.clone();
    let finding = history.iter().rev().find(|t| t.alarm.finding.is_some());
    Some(match finding {
        Some(found) if last.finding.is_none() => Alarm {
            finding: found.alarm.finding.clone(),
            ..last
        },
        _ => last,
    })
}

fn unknown(id: &AlarmId, occurrence: Option<u32>, known: &[Alarm]) -> anyhow::Error {
    if let (Some(asked), Some(alarm)) = (occurrence, known.iter().find(|a| a.id == *id)) {
        let came = alarm.occurrence;
        return anyhow::anyhow!("{id} has come {came} times; there is no occurrence {asked}");
    }
    let names: Vec<&str> = known.iter().map(|a| a.id.0.as_str()).collect();
    if names.is_empty() {
        anyhow::anyhow!("there is no alarm {id}, nor has any other ever come")
    } else {
        anyhow::anyhow!("there is no alarm {id}; there are {}", names.join(", "))
    }
}

/// From some time before it began until its last step, bounded.
fn window(alarm: &Alarm, history: &[Transition]) -> (Stamp, Stamp) {
    let last = history
        .iter()
        .filter(|t| t.by.is_none())
        .map(|t| t.at)
        .max()
        .unwrap_or(alarm.since);
    let to = last.max(alarm.since).plus(24 * 3600 * Stamp::SECOND);
    let lasted = to.0.saturating_sub(alarm.since.0).max(0);
    let from = alarm.since.plus(-BEFORE.max(lasted / 2));
    (from.max(to.plus(-LONGEST)), to)
}

/// The site from above, with the place of a finding.
pub(super) fn site_plan(ground: &Ground, found: Option<Place>) -> Plan {
    let mut marks = Vec::new();
    for well in &ground.wells {
        marks.push((Mark::Well, well.name.clone(), well.at));
    }
    for (index, gauge) in ground.gauges.iter().enumerate() {
        if let Some((at, _)) = ground.gauge_at(index) {
            // One that sits in a well is named by it.
            let own = !ground
                .wells
                .iter()
                .any(|w| w.at == at && w.name == gauge.name);
            let name = if own {
                gauge.name.clone()
            } else {
                String::new()
            };
            marks.push((Mark::Gauge, name, at));
        }
    }
    for neighbour in &ground.neighbours {
        marks.push((Mark::Neighbour, neighbour.name.clone(), neighbour.at));
    }
    Plan {
        barriers: ground
            .barriers
            .iter()
            .map(|b| (b.name.clone(), b.line.clone()))
            .collect(),
        marks,
        found: found.map(|p| ([p.x, p.y], p.radius_90)),
    }
}

fn points(site: &Site, judged: &[Judged], gauge: usize) -> Vec<PlotPoint> {
    let plan = block_plan(site);
    let every = judged.len().div_ceil(POINTS).max(1);
    judged
        .iter()
        .step_by(every)
        .map(|j| {
            let expectation = j.step.expectations.get(gauge).copied().flatten();
            let departure = j.step.departures.get(gauge).copied().flatten();
            let (start, end) = (plan.start_of(j.step.block), plan.start_of(j.step.block + 1));
            PlotPoint {
                at: Stamp(start.0.midpoint(end.0)),
                reading: expectation.zip(departure).map(|(e, d)| e.mean + d),
                expectation,
            }
        })
        .collect()
}

/// Goes through a channel's readings once.
async fn quality(
    reader: &Reader,
    channel: &ChannelId,
    feeds: String,
    (from, to): (Stamp, Stamp),
) -> anyhow::Result<ChannelQuality> {
    let mut found = ChannelQuality {
        name: channel.to_string(),
        feeds,
        readings: 0,
        unusable: 0,
        longest_gap: 0.0,
        last: None,
    };
    let mut walk = reader.walk(std::slice::from_ref(channel), from, to);
    let mut before = from;
    while let Some(reading) = walk.next().await? {
        found.readings += 1;
        found.unusable += u64::from(!reading.quality.usable());
        let gap = reading.sampled.seconds() - before.seconds();
        found.longest_gap = found.longest_gap.max(gap);
        before = reading.sampled;
        found.last = Some(reading.sampled);
    }
    Ok(found)
}
