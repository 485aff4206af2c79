//! Gauges and channels over time, binned to the pixels asked for.

use std::sync::Arc;

use axum::Json;
use axum::extract::{Path, Query, State};
use serde::{Deserialize, Serialize};

use super::asking::Asking;
use super::history::{Cell, Columns};
use super::problem::Problem;
use crate::record::{ChannelId, ClockEpoch, Stamp};

/// Bins where none are asked for, and the most.
const BINS: i64 = 600;
const MOST_BINS: i64 = 2000;
/// Readings looked at in one bin of a channel; where there are more, the bin is thinned.
const A_BIN: i64 = 48;
/// What is shown where no time is asked for \[µs\].
const SPAN: i64 = 14 * 24 * 3600 * Stamp::SECOND;

/// What part of time, and how finely.
#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Window {
    from: Option<String>,
    to: Option<String>,
    bins: Option<i64>,
}

/// The window in instants.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Span {
    from: Stamp,
    to: Stamp,
    bins: i64,
}

impl Window {
    fn span(&self, end: Stamp) -> Result<Span, Problem> {
        let instant = |text: &Option<String>, name: &str| match text {
            None => Ok(None),
            Some(text) => Stamp::parse(text).map(Some).map_err(|_| {
                Problem::wrong(format!(
                    "{name}: RFC 3339 is due, such as 2031-05-02T00:00:00Z"
                ))
            }),
        };
        let to = instant(&self.to, "to")?.unwrap_or(end);
        let from = instant(&self.from, "from")?.unwrap_or(to.plus(-SPAN));
        let bins = self.bins.unwrap_or(BINS);
        if from >= to {
            return Err(Problem::wrong("from: it must be before to"));
        }
        if !(1..=MOST_BINS).contains(&bins) {
            return Err(Problem::wrong(format!("bins: 1 to {MOST_BINS}")));
        }
        Ok(Span { from, to, bins })
    }
}

/// Blocks of a span, gathered into bins: block numbers from, up to, and how many in a bin.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Bins {
    from: i64,
    to: i64,
    each: i64,
}

impl Bins {
    /// Whole blocks that lie in the span and are kept; bins start at multiples of their length, so that they stand still
    /// while time passes.
    fn of(span: Span, length: i64, columns: &Columns) -> Self {
        let from = span.from.0.div_euclid(length).max(columns.first);
        let last = span.to.0.saturating_add(length - 1).div_euclid(length);
        let to = last.min(columns.end());
        let blocks = to.saturating_sub(from).max(0);
        let each = (blocks.saturating_add(span.bins - 1) / span.bins).max(1);
        let from = from.div_euclid(each).saturating_mul(each);
        Self { from, to, each }
    }

    fn starts(self) -> impl Iterator<Item = i64> {
        let step = usize::try_from(self.each).unwrap_or(usize::MAX);
        (self.from..self.to).step_by(step)
    }
}

/// Length of a block \[µs\].
fn length(asking: &Asking) -> i64 {
    i64::try_from(asking.site.watch.block.as_micros())
        .unwrap_or(i64::MAX)
        .max(1)
}

fn end_of(asking: &Asking, columns: &Columns) -> Stamp {
    let end = columns.end();
    if end == columns.first {
        return Stamp::now();
    }
    Stamp(end.saturating_mul(length(asking)))
}

/// Every gauge's departure in its own standard deviations.
#[derive(Debug, Serialize)]
pub(super) struct Departures {
    /// First block that is kept.
    kept_from: Stamp,
    /// End of the last block judged.
    until: Stamp,
    /// Length of a bin \[s\].
    bin_s: f64,
    /// Start of each bin.
    at: Vec<f64>,
    gauges: Vec<GaugeRow>,
}

#[derive(Debug, Serialize)]
struct GaugeRow {
    name: String,
    /// Mean of the bin; `null` where nothing was judged.
    mean: Vec<Option<f32>>,
    /// The one farthest from zero in the bin.
    far: Vec<Option<f32>>,
    /// The newest block judged: departure \[Pa\], its standard deviation, and their ratio.
    last: Option<Last>,
}

#[derive(Debug, Clone, Copy, Serialize)]
struct Last {
    expected: f64,
    departure: Option<f32>,
    sd: f32,
    ratio: Option<f32>,
}

/// `/api/v1/departures`.
pub(super) async fn departures(
    State(asking): State<Arc<Asking>>,
    Query(window): Query<Window>,
) -> Result<Json<Departures>, Problem> {
    let columns = asking.history.columns();
    let until = end_of(&asking, &columns);
    let span = window.span(until)?;
    let length = length(&asking);
    let bins = Bins::of(span, length, &columns);
    let gauges = asking.names.gauges.iter().enumerate();
    let rows = gauges.map(|(gauge, name)| {
        let mut row = GaugeRow {
            name: name.clone(),
            mean: Vec::new(),
            far: Vec::new(),
            last: last(&columns, gauge),
        };
        for start in bins.starts() {
            let end = start.saturating_add(bins.each).min(bins.to);
            let (mut sum, mut count, mut far) = (0.0, 0_u32, 0.0_f64);
            for ratio in (start..end).map(|b| columns.cell(b, gauge).ratio()) {
                if ratio.is_finite() {
                    sum += ratio;
                    count += 1;
                    if ratio.abs() > far.abs() {
                        far = ratio;
                    }
                }
            }
            row.mean
                .push((count > 0).then(|| short(sum / f64::from(count))));
            row.far.push((count > 0).then(|| short(far)));
        }
        row
    });
    let gauges = rows.collect();
    Ok(Json(Departures {
        kept_from: Stamp(columns.first.saturating_mul(length)),
        until,
        bin_s: Stamp(bins.each.saturating_mul(length)).seconds(),
        at: instants(bins, length),
        gauges,
    }))
}

/// The newest block in which a gauge was expected to show something, among the last hundred.
fn last(columns: &Columns, gauge: usize) -> Option<Last> {
    let end = columns.end();
    (end.saturating_sub(100)..end)
        .rev()
        .map(|block| columns.cell(block, gauge))
        .find(|cell| cell.mean.is_finite() && cell.departure.is_finite())
        .map(|cell| Last {
            expected: cell.mean,
            departure: Some(cell.departure).filter(|d| d.is_finite()),
            sd: cell.sd,
            ratio: Some(short(cell.ratio())).filter(|r| r.is_finite()),
        })
}

fn instants(bins: Bins, length: i64) -> Vec<f64> {
    bins.starts()
        .map(|block| Stamp(block.saturating_mul(length)).seconds())
        .collect()
}

#[expect(
    clippy::cast_possible_truncation,
    reason = "ratios are drawn; a few digits do"
)]
fn short(ratio: f64) -> f32 {
    ((ratio * 1000.0).round() / 1000.0) as f32
}

/// One gauge: what it showed and what it should have.
#[derive(Debug, Default, Serialize)]
pub(super) struct GaugeSeries {
    name: String,
    unit: &'static str,
    kept_from: Stamp,
    until: Stamp,
    /// Length of a bin \[s\].
    bin_s: f64,
    /// Start of each bin.
    at: Vec<f64>,
    /// Mean of the readings; `null` where there is none.
    reading: Vec<Option<f64>>,
    /// Lowest and highest block mean in the bin.
    low: Vec<Option<f64>>,
    high: Vec<Option<f64>>,
    /// Mean of the expectation and its largest standard deviation.
    expected: Vec<Option<f64>>,
    sd: Vec<Option<f64>>,
}

/// `/api/v1/gauges/{name}/series`.
pub(super) async fn gauge(
    State(asking): State<Arc<Asking>>,
    Path(name): Path<String>,
    Query(window): Query<Window>,
) -> Result<Json<GaugeSeries>, Problem> {
    let gauges = &asking.names.gauges;
    let Some(gauge) = gauges.iter().position(|g| *g == name) else {
        return Err(Problem::missing(format!(
            "there is no gauge {name}; there is {}",
            gauges.join(", ")
        )));
    };
    let columns = asking.history.columns();
    let span = window.span(end_of(&asking, &columns))?;
    let length = length(&asking);
    let bins = Bins::of(span, length, &columns);
    let mut series = GaugeSeries {
        name,
        unit: "Pa",
        kept_from: Stamp(columns.first.saturating_mul(length)),
        until: end_of(&asking, &columns),
        bin_s: Stamp(bins.each.saturating_mul(length)).seconds(),
        at: instants(bins, length),
        ..GaugeSeries::default()
    };
    for start in bins.starts() {
        let end = start.saturating_add(bins.each).min(bins.to);
        series.bin((start..end).map(|block| columns.cell(block, gauge)));
    }
    Ok(Json(series))
}

impl GaugeSeries {
    fn bin(&mut self, cells: impl Iterator<Item = Cell>) {
        let (mut expected, mut reading) = (Mean::default(), Mean::default());
        let mut sd = f64::NAN;
        for cell in cells {
            expected.add(cell.mean);
            reading.add(cell.mean + f64::from(cell.departure));
            sd = sd.max(f64::from(cell.sd));
        }
        self.reading.push(reading.mean());
        self.low.push(reading.low());
        self.high.push(reading.high());
        self.expected.push(expected.mean());
        self.sd.push(Some(sd).filter(|s| s.is_finite()));
    }
}

/// Mean and extremes of finite values.
#[derive(Debug, Default)]
struct Mean {
    sum: f64,
    count: u32,
    range: Option<(f64, f64)>,
}

impl Mean {
    fn add(&mut self, value: f64) {
        if !value.is_finite() {
            return;
        }
        self.sum += value;
        self.count += 1;
        let (low, high) = self.range.unwrap_or((value, value));
        self.range = Some((low.min(value), high.max(value)));
    }

    fn mean(&self) -> Option<f64> {
        (self.count > 0).then(|| self.sum / f64::from(self.count))
    }

    fn low(&self) -> Option<f64> {
        self.range.map(|r| r.0)
    }

    fn high(&self) -> Option<f64> {
        self.range.map(|r| r.1)
    }
}

/// Readings of one channel.
#[derive(Debug, Serialize)]
pub(super) struct ChannelSeries {
    channel: String,
    kind: &'static str,
    unit: &'static str,
    /// Length of a bin \[s\].
    bin_s: f64,
    /// Whether bins hold more readings than were looked at: then they are a sample.
    thinned: bool,
    /// Start of each bin that has readings.
    at: Vec<f64>,
    mean: Vec<Option<f64>>,
    low: Vec<Option<f64>>,
    high: Vec<Option<f64>>,
}

/// `/api/v1/channels/{name}/readings`.
pub(super) async fn channel(
    State(asking): State<Arc<Asking>>,
    Path(name): Path<String>,
    Query(window): Query<Window>,
) -> Result<Json<ChannelSeries>, Problem> {
    let id = ChannelId::from(name.as_str());
    let Some(settings) = asking.site.channel(&id) else {
        return Err(Problem::missing(format!("there is no channel {name}")));
    };
    let end = match window.to {
        Some(_) => Stamp::default(),
        None => {
            let newest = asking.reader.newest(&id).await?;
            newest.map_or_else(Stamp::now, |r| r.sampled.plus(1))
        }
    };
    let span = window.span(end)?;
    let width = (span.to.0.saturating_sub(span.from.0) / span.bins).max(1);
    let mut series = ChannelSeries {
        channel: name,
        kind: settings.kind.name(),
        unit: si(settings.kind),
        bin_s: Stamp(width).seconds(),
        thinned: false,
        at: Vec::new(),
        mean: Vec::new(),
        low: Vec::new(),
        high: Vec::new(),
    };
    // One seek a bin, and only where there are readings: the work is that of the pixels, however many rows there are.
    let mut start = span.from;
    while start < span.to {
        let end = Stamp(start.0.saturating_add(width).min(span.to.0));
        let page = asking
            .reader
            .page(&id, (start, ClockEpoch(0)), span.to, A_BIN)
            .await?;
        let Some(first) = page.first() else { break };
        if first.sampled >= end {
            // Nothing here: on to the bin of the next reading.
            let skipped = first.sampled.0.saturating_sub(span.from.0) / width;
            start = span.from.plus(skipped.saturating_mul(width));
            continue;
        }
        let mut mean = Mean::default();
        for reading in page.iter().take_while(|r| r.sampled < end) {
            if reading.quality.usable()
                && let Some(value) = reading.value
            {
                mean.add(value);
            }
        }
        let whole = page.last().is_some_and(|r| r.sampled >= end);
        let full = i64::try_from(page.len()).unwrap_or(i64::MAX) >= A_BIN;
        series.thinned |= full && !whole;
        if mean.count > 0 {
            series.at.push(start.seconds());
            series.mean.push(mean.mean());
            series.low.push(mean.low());
            series.high.push(mean.high());
        }
        start = end;
    }
    Ok(Json(series))
}

/// The SI unit of a kind of channel.
pub(super) fn si(kind: crate::record::ChannelKind) -> &'static str {
    use crate::record::ChannelKind::{Barometer, Pressure, Rain, Rate, Stage, Temperature};
    match kind {
        Pressure | Barometer => "Pa",
        Rate => "m3/s",
        Temperature => "degC",
        Stage => "m",
        Rain => "m/s",
    }
}
