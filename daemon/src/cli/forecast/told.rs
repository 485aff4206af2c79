//! A forecast told to people, to programs and as a picture.

use std::fmt::Write as _;
use std::path::PathBuf;

use borewake_model::forecast::{BlockAhead, Forecast, RatePlan};
use borewake_model::units::{Dimension, significant};
use serde_json::{Value, json};

use crate::alarm::NOTICE;
use crate::cli::standing::Present;
use crate::cli::table::{Align, Table};
use crate::config::{Side, Site};
use crate::keeper::settings::block_plan;
use crate::record::{Expectation, Stamp};
use crate::report::svg::ahead::{AheadPlot, GaugeAhead, ahead_plot};
use crate::watch::blocks::BlockPlan;
use crate::watch::ground_file::Model;

/// Standard deviations either side that hold 95 % of a normal distribution.
const BAND: f64 = 1.959_964;
/// Lead times of the table \[h\].
const LEADS: [i64; 7] = [6, 24, 72, 240, 720, 2160, 8760];
/// Blocks without a reading after which a gauge counts as blind.
const SILENT: usize = 6;
/// Time shown before the present \[µs\].
const SHOWN_BEFORE: i64 = 10 * 24 * 3600 * Stamp::SECOND;
/// By how much a planned rate may exceed all that were seen at commissioning.
const BEYOND: f64 = 1.1;

/// What is told.
pub(super) struct Told<'a> {
    site: &'a Site,
    present: &'a Present,
    plan: &'a RatePlan,
    forecast: &'a Forecast,
    blocks: BlockPlan,
    notes: Vec<String>,
}

impl<'a> Told<'a> {
    pub(super) fn new(
        site: &'a Site,
        present: &'a Present,
        plan: &'a RatePlan,
        forecast: &'a Forecast,
    ) -> Self {
        let mut told = Self {
            site,
            present,
            plan,
            forecast,
            blocks: block_plan(site),
            notes: Vec::new(),
        };
        told.notes = told.gather_notes();
        told
    }

    /// The instant at which the forecast begins.
    fn now(&self) -> Stamp {
        let first = self.forecast.blocks.first();
        first.map_or(Stamp(0), |b| self.blocks.start_of(b.block))
    }

    fn middle(&self, block: &BlockAhead) -> Stamp {
        let start = self.blocks.start_of(block.block);
        start.plus(self.blocks.length / 2)
    }

    fn rate(&self, rate: f64) -> String {
        self.site.units.show(Dimension::Rate, rate)
    }

    /// Last block mean of a gauge, and how many blocks ago.
    fn last_read(&self, gauge: usize) -> Option<(f64, usize)> {
        let recent = &self.present.standing.recent;
        recent.iter().rev().enumerate().find_map(|(ago, block)| {
            let read = block.gauges.get(gauge)?.as_ref()?;
            Some((read.mean, ago))
        })
    }

    fn gather_notes(&self) -> Vec<String> {
        let mut notes = self.present.notes.clone();
        let units = self.site.units;
        let ahead = &self.forecast.blocks;
        for (index, well) in self.site.wells.iter().enumerate() {
            let steps = self.plan.wells.get(index).map_or(&[][..], Vec::as_slice);
            let held = self.forecast.held.get(index).copied().unwrap_or(0.0);
            if steps.is_empty() {
                notes.push(format!(
                    "{} is not in the plan: it keeps its last rate, {}.",
                    well.name,
                    self.rate(held)
                ));
            }
            let ground = self.present.ground.commissioned.ground();
            let largest = ground.and_then(|g| g.calibration.priors.rate.get(index));
            let known = largest.copied().unwrap_or(0.0);
            let most = steps.iter().map(|(_, q)| q.abs()).fold(0.0, f64::max);
            if most > BEYOND * known {
                notes.push(format!(
                    "{} is planned at up to {}, but was never above {} at commissioning: the model is not calibrated so far.",
                    well.name,
                    self.rate(most),
                    self.rate(known)
                ));
            }
        }
        for (index, gauge) in self.site.gauges.iter().enumerate() {
            match self.last_read(index) {
                Some((_, ago)) if ago < SILENT => {}
                _ => notes.push(format!(
                    "{} has not been read lately: its errors are not known now, and its band is as wide as that asks for.",
                    gauge.name
                )),
            }
            let of = |b: &BlockAhead| b.gauges.get(index).copied();
            let means = ahead.iter().filter_map(of).map(|e| e.mean);
            let (low, high) = means.fold((f64::INFINITY, f64::NEG_INFINITY), |(a, b), m| {
                (a.min(m), b.max(m))
            });
            if let Some(last) = ahead.last().and_then(of)
                && BAND * last.sd > high - low
            {
                notes.push(format!(
                    "{}: in the end its band (± {}) is wider than all the change foreseen ({}). What is not known of ground, meters \
                     and gauge is more than what the rates do; take the mean for no more than a guess.",
                    gauge.name,
                    units.show(Dimension::Pressure, BAND * last.sd),
                    units.show(Dimension::Pressure, high - low)
                ));
            }
        }
        if self.site.embankment.is_some() {
            notes.push(
                "The pool keeps its last level, and rain is as it was on average; what a rise or a storm to come does is not in it."
                    .to_owned(),
            );
        } else if self.forecast.held.len() > self.site.wells.len() {
            notes.push("Open water keeps its last level.".to_owned());
        }
        let span = match &self.present.ground.commissioned {
            Model::Ground(ground) => Some(ground.calibration.blocks),
            Model::Embankment(embankment) => Some(embankment.calibration.blocks),
        };
        let count = i64::try_from(ahead.len()).unwrap_or(i64::MAX);
        if span.is_some_and(|(first, last)| count > last + 1 - first) {
            notes.push(
                "It looks farther ahead than the history at commissioning was long: what only shows in longer times is not calibrated."
                    .to_owned(),
            );
        }
        notes
    }

    /// For people.
    pub(super) fn text(&self, files: &[&Option<PathBuf>]) -> String {
        let units = self.site.units;
        let mut text = format!(
            "site       {} ({})\nfrom       {} (after the last whole block of readings)\nto         {}\n\n",
            self.site.name,
            self.site.id,
            self.now(),
            self.forecast
                .blocks
                .last()
                .map_or(self.now(), |b| self.blocks.start_of(b.block + 1)),
        );
        if !self.site.wells.is_empty() {
            text += &self.rates_table().text(0);
        }
        let _ = writeln!(
            text,
            "\nPressure in {}: mean and 95 % band of the block mean.",
            units.unit(Dimension::Pressure)
        );
        text += &self.gauges_table().text(0);
        if self.site.limits.is_empty() {
            text += "\nNo [[limit]] stands in the site file, so there is no time to one.\n";
        } else {
            text += "\nTime to each limit: by the mean, and when 5, 50 and 95 % of 400 futures drawn have reached it.\n";
            text += &self.limits_table().text(0);
        }
        for note in &self.notes {
            let _ = write!(text, "\nnote: {note}");
        }
        if !self.notes.is_empty() {
            text.push('\n');
        }
        for path in files.iter().filter_map(|f| f.as_ref()) {
            let _ = write!(text, "\nwritten    {}", path.display());
        }
        let _ = writeln!(text, "\n\n{NOTICE}");
        text
    }

    fn rates_table(&self) -> Table {
        let mut table = Table::new(&[
            ("well", Align::Left),
            ("from", Align::Left),
            ("rate", Align::Right),
        ]);
        for (index, well) in self.site.wells.iter().enumerate() {
            let held = self.forecast.held.get(index).copied().unwrap_or(0.0);
            table.row([well.name.clone(), "now".to_owned(), self.rate(held)]);
            let steps = self.plan.wells.get(index).map_or(&[][..], Vec::as_slice);
            for (at, rate) in steps.iter().take(6) {
                table.row([
                    String::new(),
                    Stamp::from_seconds(*at).to_string(),
                    self.rate(*rate),
                ]);
            }
            if steps.len() > 6 {
                table.row([String::new(), format!("… {} rows more", steps.len() - 6)]);
            }
        }
        table
    }

    fn gauges_table(&self) -> Table {
        let units = self.site.units;
        let ahead = &self.forecast.blocks;
        let leads: Vec<(String, &BlockAhead)> = LEADS
            .iter()
            .filter_map(|hours| {
                let block = last_block_of(*hours, self.blocks.length)?;
                let head = if hours % 24 == 0 {
                    format!("after {} d", hours / 24)
                } else {
                    format!("after {hours} h")
                };
                Some((head, ahead.get(block)?))
            })
            .collect();
        let mut heads = vec![("gauge", Align::Left), ("last read", Align::Right)];
        heads.extend(leads.iter().map(|(h, _)| (h.as_str(), Align::Right)));
        let mut table = Table::new(&heads);
        for (index, gauge) in self.site.gauges.iter().enumerate() {
            let mut row = vec![
                gauge.name.clone(),
                self.last_read(index).map_or("-".to_owned(), |(v, _)| {
                    significant(units.number(Dimension::Pressure, v), 6)
                }),
            ];
            for (_, block) in &leads {
                row.push(
                    block
                        .gauges
                        .get(index)
                        .map_or_else(String::new, |e| self.shown(*e)),
                );
            }
            table.row(row);
        }
        table
    }

    fn shown(&self, expected: Expectation) -> String {
        let units = self.site.units;
        let half = units.number(Dimension::Pressure, BAND * expected.sd);
        let mean = units.number(Dimension::Pressure, expected.mean);
        // As many decimals as the band's second digit asks for.
        let decimals = (0..4)
            .find(|d| half * 10_f64.powi(*d) >= 10.0)
            .and_then(|d| usize::try_from(d).ok())
            .unwrap_or(4);
        format!("{mean:.decimals$} ± {half:.decimals$}")
    }

    fn when(&self, at: Option<f64>) -> String {
        at.map_or("not in this time".to_owned(), |at| {
            let lead = at - self.now().seconds();
            self.site.units.show(Dimension::Time, lead.max(0.0))
        })
    }

    fn limits_table(&self) -> Table {
        let mut table = Table::new(&[
            ("limit", Align::Left),
            ("gauge", Align::Left),
            ("at", Align::Left),
            ("mean", Align::Right),
            ("5 %", Align::Right),
            ("50 %", Align::Right),
            ("95 %", Align::Right),
            ("reach it", Align::Right),
        ]);
        for (limit, passage) in self.site.limits.iter().zip(&self.forecast.passages) {
            let side = match limit.side {
                Side::Above => "above",
                Side::Below => "below",
            };
            let value = self.site.units.show(Dimension::Pressure, limit.value);
            let [early, middle, late] = passage.spread.map(|at| self.when(at));
            table.row([
                limit.alarm.0.clone(),
                self.gauge(limit.gauge),
                format!("{side} {value}"),
                self.when(passage.mean),
                early,
                middle,
                late,
                format!("{:.0} %", 100.0 * passage.share),
            ]);
        }
        table
    }

    fn gauge(&self, index: usize) -> String {
        let gauge = self.site.gauges.get(index);
        gauge.map_or_else(String::new, |g| g.name.clone())
    }

    /// For spreadsheets: a row a block and gauge.
    pub(super) fn sheet(&self) -> String {
        let units = self.site.units;
        let (p, q) = (units.unit(Dimension::Pressure), units.unit(Dimension::Rate));
        let quoted = |text: &str| {
            if text.contains([',', '"', '\n', '\r']) {
                format!("\"{}\"", text.replace('"', "\"\""))
            } else {
                text.to_owned()
            }
        };
        let mut sheet = format!("from,to,gauge,mean [{p}],low_95 [{p}],high_95 [{p}],sd [{p}]");
        for well in &self.site.wells {
            let _ = write!(sheet, ",{}", quoted(&format!("{} [{q}]", well.name)));
        }
        sheet.push('\n');
        for block in &self.forecast.blocks {
            let (from, to) = (
                self.blocks.start_of(block.block),
                self.blocks.start_of(block.block + 1),
            );
            for (gauge, e) in self.site.gauges.iter().zip(&block.gauges) {
                let number = |v: f64| significant(units.number(Dimension::Pressure, v), 8);
                let _ = write!(
                    sheet,
                    "{from},{to},{},{},{},{},{}",
                    quoted(&gauge.name),
                    number(e.mean),
                    number(e.mean - BAND * e.sd),
                    number(e.mean + BAND * e.sd),
                    number(e.sd)
                );
                for rate in block.rates.iter().take(self.site.wells.len()) {
                    let _ = write!(
                        sheet,
                        ",{}",
                        significant(units.number(Dimension::Rate, *rate), 6)
                    );
                }
                sheet.push('\n');
            }
        }
        sheet
    }

    /// For programs, in SI.
    pub(super) fn json(&self) -> String {
        let instant = |at: Option<f64>| at.map(Stamp::from_seconds);
        let limits: Vec<Value> = self
            .site
            .limits
            .iter()
            .zip(&self.forecast.passages)
            .map(|(limit, passage)| {
                let [early, middle, late] = passage.spread.map(instant);
                json!({
                    "limit": limit.alarm, "gauge": self.gauge(limit.gauge), "above": limit.side == Side::Above,
                    "value_pa": limit.value, "mean": instant(passage.mean), "after_5_percent": early,
                    "after_50_percent": middle, "after_95_percent": late, "share": passage.share,
                })
            })
            .collect();
        let blocks: Vec<Value> = self
            .forecast
            .blocks
            .iter()
            .map(|block| {
                json!({
                    "from": self.blocks.start_of(block.block), "to": self.blocks.start_of(block.block + 1),
                    "rates_m3_s": block.rates.get(..self.site.wells.len()),
                    "mean_pa": block.gauges.iter().map(|e| e.mean).collect::<Vec<_>>(),
                    "sd_pa": block.gauges.iter().map(|e| e.sd).collect::<Vec<_>>(),
                })
            })
            .collect();
        let gauges: Vec<&String> = self.site.gauges.iter().map(|g| &g.name).collect();
        let wells: Vec<&String> = self.site.wells.iter().map(|w| &w.name).collect();
        let document = json!({
            "site": self.site.id, "from": self.now(), "gauges": gauges, "wells": wells, "limits": limits,
            "blocks": blocks, "notes": self.notes, "notice": NOTICE,
        });
        format!("{document:#}\n")
    }

    /// As a picture.
    pub(super) fn picture(&self) -> String {
        let since = self.now().plus(-SHOWN_BEFORE);
        let recent: Vec<_> = self
            .present
            .standing
            .recent
            .iter()
            .filter(|b| self.blocks.start_of(b.index) >= since)
            .collect();
        let middle = |index: i64| self.blocks.start_of(index).plus(self.blocks.length / 2);
        let gauges = self.site.gauges.iter().enumerate();
        let gauges = gauges
            .map(|(index, gauge)| GaugeAhead {
                name: gauge.name.clone(),
                read: recent
                    .iter()
                    .filter_map(|b| Some((middle(b.index), b.gauges.get(index)?.as_ref()?.mean)))
                    .collect(),
                expected: self
                    .forecast
                    .blocks
                    .iter()
                    .filter_map(|b| Some((self.middle(b), b.gauges.get(index).copied()?)))
                    .collect(),
                limits: self
                    .site
                    .limits
                    .iter()
                    .filter(|l| l.gauge == index)
                    .map(|l| l.value)
                    .collect(),
            })
            .collect();
        let rates = self.site.wells.iter().enumerate();
        let rates = rates
            .map(|(index, well)| {
                let mut steps: Vec<(Stamp, f64)> = Vec::new();
                for block in &recent {
                    let start = self.blocks.start_of(block.index);
                    let mut from = 0.0;
                    for (until, rate) in block.rates.get(index).map_or(&[][..], |r| &r.pieces[..]) {
                        steps.push((Stamp::from_seconds(start.seconds() + from), *rate));
                        from = *until;
                    }
                }
                let held = self.forecast.held.get(index).copied().unwrap_or(0.0);
                steps.push((self.now(), held));
                let end = self.forecast.blocks.last();
                let end = end.map_or(self.now(), |b| self.blocks.start_of(b.block + 1));
                let planned = self.plan.wells.get(index).into_iter().flatten();
                steps.extend(
                    planned.map(|(at, rate)| (Stamp::from_seconds(*at).max(self.now()), *rate)),
                );
                steps.retain(|(at, _)| *at <= end);
                (well.name.clone(), steps)
            })
            .collect();
        ahead_plot(&AheadPlot {
            title: format!("{}: pressure under planned rates", self.site.name),
            units: self.site.units,
            now: self.now(),
            gauges,
            rates,
        })
    }
}

/// Which block to come, by order, ends after a lead time \[h\]; `None` where no block does.
fn last_block_of(hours: i64, length: i64) -> Option<usize> {
    let lead = hours.checked_mul(3600 * Stamp::SECOND)?;
    if length <= 0 || lead % length != 0 {
        return None;
    }
    usize::try_from(lead / length - 1).ok()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_lead_time_is_a_block_whatever_its_length() {
        let block = |hours, minutes: i64| last_block_of(hours, minutes * 60 * Stamp::SECOND);
        assert_eq!(block(6, 60), Some(5));
        assert_eq!(block(6, 10), Some(35));
        assert_eq!(block(6, 360), Some(0));
        assert_eq!(block(24, 360), Some(3));
        assert_eq!(block(6, 45), Some(7));
        assert_eq!(block(24, 25), None);
        assert_eq!(block(6, 1440), None);
        assert_eq!(block(24, 0), None);
    }
}
