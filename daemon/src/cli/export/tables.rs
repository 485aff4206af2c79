//! The four tables. Instants are RFC 3339 in UTC; a unit ends the name of its column, SI where none is named.

use std::collections::BTreeMap;
use std::io::Write;

use anyhow::Result;

use super::sheet::{Cell, Sheet};
use crate::config::Conversion;
use crate::record::{Blind, ChannelId, ChannelKind, Finding, Names, Stamp, Suppression};
use crate::store::{Judged, Reader};

/// From an instant up to but not at another.
#[derive(Debug, Clone, Copy)]
pub(super) struct Span {
    pub(super) from: Stamp,
    pub(super) to: Stamp,
}

/// What the site file says of the numbers in the store.
#[derive(Debug, Clone)]
pub(super) struct Legend {
    pub(super) names: Names,
    pub(super) channels: BTreeMap<ChannelId, (ChannelKind, Conversion)>,
    /// Length of a block \[us\].
    pub(super) block: i64,
}

impl Legend {
    fn start(&self, block: i64) -> Stamp {
        Stamp(block.saturating_mul(self.block))
    }

    /// Blocks that begin within the span.
    fn blocks(&self, span: Span) -> (i64, i64) {
        let length = self.block.max(1);
        let first_from = |at: Stamp| {
            at.0.div_euclid(length)
                .saturating_add(i64::from(at.0.rem_euclid(length) > 0))
        };
        (first_from(span.from), first_from(span.to))
    }
}

pub(super) const READINGS: [&str; 10] = [
    "time",
    "channel",
    "value",
    "quality",
    "si_value",
    "si_unit",
    "device",
    "clock",
    "clock_run",
    "received",
];

/// Readings in sample order. `time`, `channel`, `value` (as delivered) and `quality` are what `replay` reads
/// with the same site file; `si_value` is the value after conversion.
pub(super) async fn readings<W: Write>(
    reader: &Reader,
    legend: &Legend,
    span: Span,
    sheet: &mut Sheet<W, 10>,
    mut told: impl FnMut(Stamp),
) -> Result<()> {
    let channels = reader.channels().await?;
    let mut walk = reader.walk(&channels, span.from, span.to);
    while let Some(reading) = walk.next().await? {
        told(reading.sampled);
        let known = legend.channels.get(&reading.channel);
        let delivered = reading.raw.or_else(|| {
            let (_, conversion) = known?;
            Some(conversion.to_raw(reading.value?))
        });
        sheet.row([
            reading.sampled.to_string().into(),
            (&*reading.channel.0).into(),
            delivered.into(),
            u32::from(reading.quality.flag()).into(),
            reading.value.into(),
            known.map(|(kind, _)| unit(*kind)).into(),
            word(&reading.device),
            word(&reading.clock),
            reading.epoch.0.into(),
            reading.received.to_string().into(),
        ])?;
    }
    Ok(())
}

pub(super) const EXPECTATIONS: [&str; 10] = [
    "start",
    "end",
    "gauge",
    "reading_Pa",
    "expected_Pa",
    "sd_Pa",
    "departure_Pa",
    "blind",
    "block",
    "revision",
];

/// What each gauge should have shown in each block, and what it showed.
pub(super) async fn expectations<W: Write>(
    reader: &Reader,
    legend: &Legend,
    span: Span,
    sheet: &mut Sheet<W, 10>,
) -> Result<()> {
    each_block(reader, legend, span, |judged| {
        let step = &judged.step;
        let start = legend.start(step.block);
        for (gauge, expectation) in step.expectations.iter().enumerate() {
            let departure = step.departures.get(gauge).copied().flatten();
            let blind: Option<Blind> = step.blind.get(gauge).copied().flatten();
            let reading = expectation.and_then(|e| Some(e.mean + departure?));
            sheet.row([
                start.to_string().into(),
                start.plus(legend.block).to_string().into(),
                legend.names.gauge(gauge).into(),
                reading.into(),
                expectation.map(|e| e.mean).into(),
                expectation.map(|e| e.sd).into(),
                departure.into(),
                blind.map_or(Cell::None, |b| word(&b)),
                step.block.into(),
                judged.revision.into(),
            ])?;
        }
        Ok(())
    })
    .await
}

pub(super) const FINDINGS: [&str; 20] = [
    "start",
    "end",
    "cause",
    "probability",
    "named",
    "subject",
    "onset",
    "onset_sd_s",
    "size",
    "size_sd",
    "size_unit",
    "x_m",
    "y_m",
    "layer",
    "radius_90_m",
    "log_mixture",
    "log_threshold",
    "causes",
    "block",
    "revision",
];

/// The finding of each block that had one.
pub(super) async fn findings<W: Write>(
    reader: &Reader,
    legend: &Legend,
    span: Span,
    sheet: &mut Sheet<W, 20>,
) -> Result<()> {
    each_block(reader, legend, span, |judged| {
        let Some(finding) = &judged.step.finding else {
            return Ok(());
        };
        let start = legend.start(judged.step.block);
        let leading = finding.causes.first();
        let subject = leading
            .and_then(|c| c.subject)
            .and_then(|s| legend.names.subject(s));
        sheet.row([
            start.to_string().into(),
            start.plus(legend.block).to_string().into(),
            leading.map(|c| c.cause.name()).into(),
            leading.map(|c| c.probability).into(),
            finding.named.into(),
            subject.into(),
            Stamp::from_seconds(finding.onset).to_string().into(),
            finding.onset_sd.into(),
            finding.size.map(|s| s.value).into(),
            finding.size.map(|s| s.sd).into(),
            finding.size.map_or(Cell::None, |s| word(&s.unit)),
            finding.place.map(|p| p.x).into(),
            finding.place.map(|p| p.y).into(),
            finding.place.map(|p| legend.names.layer(p.layer)).into(),
            finding.place.map(|p| p.radius_90).into(),
            finding.log_mixture.into(),
            finding.log_threshold.into(),
            all_causes(finding).into(),
            judged.step.block.into(),
            judged.revision.into(),
        ])
    })
    .await
}

pub(super) const ALARMS: [&str; 19] = [
    "time",
    "recorded",
    "alarm",
    "transition",
    "state",
    "occurrence",
    "sequence",
    "priority",
    "condition",
    "acknowledgement",
    "latch",
    "suppression",
    "since",
    "cause",
    "probability",
    "by",
    "note",
    "summary",
    "response",
];

/// Every step in the life of every alarm.
pub(super) async fn alarms<W: Write>(
    reader: &Reader,
    span: Span,
    sheet: &mut Sheet<W, 19>,
) -> Result<()> {
    let mut last = 0;
    loop {
        let page = reader.transitions_after(last, PAGE).await?;
        if page.is_empty() {
            return Ok(());
        }
        for (id, transition) in page {
            last = id;
            if transition.at < span.from || transition.at >= span.to {
                continue;
            }
            let alarm = &transition.alarm;
            let leading = alarm.finding.as_ref().and_then(|f| f.causes.first());
            sheet.row([
                transition.at.to_string().into(),
                transition.recorded.to_string().into(),
                alarm.id.0.as_str().into(),
                word(&transition.kind),
                alarm.state().name().into(),
                alarm.occurrence.into(),
                alarm.sequence.into(),
                word(&alarm.priority),
                word(&alarm.condition),
                word(&alarm.acknowledgement),
                word(&alarm.latch),
                suppression(&alarm.suppression).into(),
                alarm.since.to_string().into(),
                leading.map(|c| c.cause.name()).into(),
                leading.map(|c| c.probability).into(),
                transition.by.into(),
                transition.note.into(),
                alarm.summary.as_str().into(),
                alarm.response.as_str().into(),
            ])?;
        }
    }
}

/// Rows fetched at a time.
const PAGE: i64 = 1000;

async fn each_block(
    reader: &Reader,
    legend: &Legend,
    span: Span,
    mut take: impl FnMut(&Judged) -> Result<()>,
) -> Result<()> {
    let (mut from, to) = legend.blocks(span);
    loop {
        let page = reader.judged_page(from, to, PAGE).await?;
        let Some(last) = page.last() else {
            return Ok(());
        };
        from = last.step.block.saturating_add(1);
        for judged in &page {
            take(judged)?;
        }
    }
}

fn all_causes(finding: &Finding) -> String {
    let causes: Vec<String> = finding
        .causes
        .iter()
        .map(|c| format!("{} {}", c.cause.name(), c.probability))
        .collect();
    causes.join("; ")
}

fn suppression(suppression: &Suppression) -> String {
    match suppression {
        Suppression::None => "none".to_owned(),
        Suppression::Shelved { until } => format!("shelved until {until}"),
        Suppression::Design { rule } => format!("by design: {rule}"),
        Suppression::OutOfService => "out-of-service".to_owned(),
    }
}

/// The SI unit values of a kind are kept in.
fn unit(kind: ChannelKind) -> &'static str {
    match kind {
        ChannelKind::Pressure | ChannelKind::Barometer => "Pa",
        ChannelKind::Rate => "m3/s",
        ChannelKind::Temperature => "degC",
        ChannelKind::Stage => "m",
        ChannelKind::Rain => "m/s",
    }
}

/// The word of an enumeration, as events spell it.
fn word<T: serde::Serialize>(value: &T) -> Cell {
    match serde_json::to_value(value) {
        Ok(serde_json::Value::String(text)) => Cell::Text(text),
        _ => Cell::None,
    }
}
