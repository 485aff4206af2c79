//! Changes of rate in the history that a log-log plot can be drawn of, with the model's curve beside the readings.

use borewake_model::commission::Commissioned;
use borewake_model::derivative::{Change, Level, bourdet, changes, levels, superposition_time};
use borewake_model::ground::Seat;

use crate::config::Site;
use crate::record::{Block, Reading, Stamp};
use crate::report::svg::LogLog;
use crate::watch::history::History;

/// A change of rate counts from this share of the well's largest rate on; within the second a rate is one level.
const COUNTS: f64 = 0.2;
const ONE_LEVEL: f64 = 0.05;
/// Time for which the rate must hold after it \[s\].
const HELD: f64 = 12.0 * 3600.0;
/// Plots of one gauge.
const MOST: usize = 2;
/// Width of the bins in the logarithm of time whose readings are averaged.
const BIN: f64 = 0.08;
/// Distance between the points of a slope, in the logarithm of time (Bourdet et al. 1989 use 0.1 to 0.5).
pub(super) const APART: f64 = 0.3;
/// Instants of the model's curve.
const INSTANTS: u32 = 90;
/// Fewest points of a plot.
const FEWEST: usize = 8;

/// A plot of one change, with the words for it.
#[derive(Debug, Clone)]
pub(super) struct Drawn {
    /// Gauge, by order.
    pub(super) gauge: usize,
    /// When the rate changed.
    pub(super) at: Stamp,
    /// By how much \[m3/s\].
    pub(super) by: f64,
    /// How long it held \[s\].
    pub(super) held: f64,
    /// The plot.
    pub(super) plot: LogLog,
}

/// Plots of every gauge that sits in a well.
pub(super) fn drawn(
    site: &Site,
    commissioned: &Commissioned,
    history: &History,
    blocks: &[Block],
) -> Result<Vec<Drawn>, borewake_model::ModelError> {
    let rates: Vec<Vec<(f64, f64)>> = (0..site.ground.inputs())
        .map(|input| pieces(blocks, input))
        .collect();
    let Some(end) = blocks.last().map(|b| b.start() + b.length) else {
        return Ok(Vec::new());
    };
    let mut all = Vec::new();
    for (gauge, settings) in site.ground.gauges.iter().enumerate() {
        let Seat::InWell(well) = settings.seat else {
            continue;
        };
        let Some(path) = rates.get(well) else {
            continue;
        };
        let largest = path.iter().map(|p| p.1.abs()).fold(0.0, f64::max);
        let levels = levels(path, end, ONE_LEVEL * largest);
        let mut found = changes(&levels, end, COUNTS * largest, HELD);
        // The larger and the longer, the more it shows.
        found.sort_by(|a, b| weight(b).total_cmp(&weight(a)));
        let channel = site.gauges.get(gauge).map(|g| &g.channel);
        let readings = channel.map_or(&[][..], |c| history.of(c));
        let mut plots = Vec::new();
        for change in &found {
            if plots.len() == MOST {
                break;
            }
            let source = Source {
                commissioned,
                rates: &rates,
                levels: &levels,
                gauge,
                well,
            };
            if let Some(plot) = source.plot(site, change, readings)? {
                plots.push(Drawn {
                    gauge,
                    at: Stamp::from_seconds(change.at),
                    by: change.by,
                    held: change.held,
                    plot,
                });
            }
        }
        plots.sort_by_key(|p| p.at);
        all.extend(plots);
    }
    Ok(all)
}

fn weight(change: &Change) -> f64 {
    change.by.abs() * (change.held / HELD).ln_1p()
}

/// Rates of a well as `(from, rate)`, equal neighbours as one.
fn pieces(blocks: &[Block], well: usize) -> Vec<(f64, f64)> {
    let mut pieces: Vec<(f64, f64)> = Vec::new();
    for block in blocks {
        let mut from = block.start();
        let path = block.rates.get(well).map_or(&[][..], |r| &r.pieces);
        for &(until, rate) in path {
            if pieces.last().is_none_or(|last| last.1 != rate) {
                pieces.push((from, rate));
            }
            from = block.start() + until;
        }
    }
    pieces
}

/// Where the curves of one gauge come from.
struct Source<'a> {
    commissioned: &'a Commissioned,
    rates: &'a [Vec<(f64, f64)>],
    levels: &'a [Level],
    gauge: usize,
    well: usize,
}

impl Source<'_> {
    /// What the model says of the well itself and of all others \[Pa\], at instants after a change; the first is the change.
    fn model(
        &self,
        change: &Change,
        after: &[f64],
    ) -> Result<Vec<(f64, f64)>, borewake_model::ModelError> {
        let mut instants = vec![change.at];
        instants.extend(after.iter().map(|dt| change.at + dt));
        let trace = self.commissioned.trace(self.rates, self.gauge, &instants)?;
        Ok(trace
            .row_iter()
            .map(|row| {
                let own = row.iter().nth(self.well).copied().unwrap_or(0.0);
                (own, row.sum() - own)
            })
            .collect())
    }

    fn plot(
        &self,
        site: &Site,
        change: &Change,
        readings: &[Reading],
    ) -> Result<Option<LogLog>, borewake_model::ModelError> {
        let usable = |r: &&Reading| r.is_usable();
        let first = readings.partition_point(|r| r.sampled.seconds() <= change.at + 1.0);
        let end = change.at + change.held;
        let last = readings.partition_point(|r| r.sampled.seconds() <= end);
        let before = readings.get(..first).unwrap_or_default();
        let Some(rest) = before
            .iter()
            .rev()
            .find(usable)
            .filter(|r| r.sampled.seconds() > change.at - 3600.0)
            .and_then(|r| r.value)
        else {
            return Ok(None);
        };
        let after = readings.get(first..last).unwrap_or_default();
        let seen: Vec<(f64, f64)> = after
            .iter()
            .filter(usable)
            .filter_map(|r| Some((r.sampled.seconds() - change.at, r.value?)))
            .collect();
        let Some(&(nearest, _)) = seen.first() else {
            return Ok(None);
        };
        let sign = change.by.signum();
        // What other wells do meanwhile is taken off as the model has it.
        let times: Vec<f64> = seen.iter().map(|s| s.0).collect();
        let model = self.model(change, &times)?;
        let others = model.first().map_or(0.0, |m| m.1);
        let points: Vec<(f64, f64)> = seen
            .iter()
            .zip(model.iter().skip(1))
            .map(|(&(dt, p), (_, other))| (dt, sign * (p - rest - (other - others))))
            .collect();
        let points = binned(&points);
        if points.len() < FEWEST {
            return Ok(None);
        }
        let step = (change.held / nearest).ln() / f64::from(INSTANTS - 1);
        let times: Vec<f64> = (0..INSTANTS)
            .map(|k| nearest * (step * f64::from(k)).exp())
            .collect();
        let model = self.model(change, &times)?;
        let start = model.first().map_or(0.0, |m| m.0);
        let curve: Vec<(f64, f64)> = times
            .iter()
            .zip(model.iter().skip(1))
            .map(|(&dt, (own, _))| (dt, sign * (own - start)))
            .collect();
        Ok(Some(LogLog {
            title: String::new(),
            units: site.units,
            slopes: self.slopes(change, &points),
            model_slopes: self.slopes(change, &curve),
            points,
            model: curve,
        }))
    }

    /// Slopes by superposition time, at the times of the points.
    fn slopes(&self, change: &Change, points: &[(f64, f64)]) -> Vec<(f64, f64)> {
        let lines: Vec<(f64, f64)> = points
            .iter()
            .map(|&(dt, p)| (superposition_time(self.levels, change, dt), p))
            .collect();
        // Where earlier changes outweigh this one superposition time turns back; no slope has a meaning there.
        let ascending = lines
            .windows(2)
            .take_while(|pair| matches!(pair, [a, b] if b.0 > a.0))
            .count();
        let usable = lines.get(..=ascending).unwrap_or_default();
        bourdet(usable, APART)
            .into_iter()
            .filter_map(|(index, slope)| Some((points.get(index)?.0, slope)))
            .collect()
    }
}

/// Means of points in bins even in the logarithm of time.
fn binned(points: &[(f64, f64)]) -> Vec<(f64, f64)> {
    let mut bins: Vec<(f64, f64, f64, f64)> = Vec::new();
    for &(dt, p) in points {
        if dt <= 0.0 {
            continue;
        }
        let bin = (dt.ln() / BIN).floor();
        match bins.last_mut() {
            Some(last) if last.0 == bin => {
                last.1 += dt.ln();
                last.2 += p;
                last.3 += 1.0;
            }
            _ => bins.push((bin, dt.ln(), p, 1.0)),
        }
    }
    bins.iter()
        .map(|&(_, logs, sum, count)| ((logs / count).exp(), sum / count))
        .collect()
}
