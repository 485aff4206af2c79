//! What is said: evidence by cause, and the leading cause in detail.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over signatures laid out by the ladder"
)]

use nalgebra::{DMatrix, DVector};

use super::bank::{Bank, COARSE, Source};
use super::barrier::{Barriers, SEALING};
use super::between::Between;
use super::evidence::{amplitude, joint, log_bayes, log_bayes_joint, log_bayes_positive, log_sum};
use super::ladder::{CAUSES, Ladder, Onset};
use super::scales::Scales;
use crate::commission::Places;
use crate::commission::places::distance;
use crate::expect::posterior::Sums;
use crate::finding::{Cause, Place, Size, SizeUnit, Subject};
use crate::ground::Point;

/// Prior covariance, as a share of an abrupt cause's variance, of its full effect and of its effect within the onset's
/// block: it begins anywhere in that block.
const ABRUPT: [[f64; 2]; 2] = [[1.0, 0.5], [0.5, 1.0 / 3.0]];
/// Of a cause that has no place.
const NOWHERE: Point = [f64::NAN; 2];
/// Weight of a leak outside the outline, beside one inside.
const OUTSIDE: f64 = 0.1;

/// What is needed to weigh, and never changes.
pub(crate) struct Weights<'a> {
    pub(crate) bank: &'a Bank,
    pub(crate) scales: &'a Scales,
    pub(crate) places: &'a Places,
    pub(crate) between: &'a Between,
    pub(crate) gauges: usize,
    /// Inputs, and how many of them are wells with a meter.
    pub(crate) wells: usize,
    pub(crate) meters: usize,
    /// Length of a block \[s\].
    pub(crate) block: f64,
    /// Relative error of a source's signature in a ground that is known only so well.
    pub(crate) mismatch: f64,
}

/// A leading cause in detail.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Detail {
    pub(crate) cause: Cause,
    pub(crate) subject: Option<Subject>,
    pub(crate) log_evidence: f64,
    pub(crate) onset: f64,
    pub(crate) onset_sd: f64,
    pub(crate) size: Option<Size>,
    pub(crate) place: Option<Place>,
}

/// One hypothesis with its posterior.
pub(super) struct Hypothesis {
    pub(super) log: f64,
    pub(super) onset: i64,
    pub(super) part: f64,
    pub(super) index: usize,
    /// Where it is, where it has a place.
    pub(super) at: Point,
    pub(super) mean: f64,
    pub(super) sd: f64,
}

impl Weights<'_> {
    /// Weighs all causes with this onset.
    pub(crate) fn weigh(&self, onset: &mut Onset, now: i64) {
        let mut leaks = Vec::new();
        let mut others = Vec::new();
        for growth in COARSE {
            for (source, weight, c, n) in self.sources(onset, growth) {
                let share = -(COARSE.len() as f64).ln();
                match source {
                    Source::Place(_) => {
                        for variance in &self.scales.leak {
                            leaks.push(
                                log_bayes_positive(-c, n, *variance) + weight + share
                                    - (self.scales.leak.len() as f64).ln(),
                            );
                        }
                    }
                    Source::Neighbour(_) => {}
                }
                if growth == 0 {
                    let log_weight = self.interference_weight(source);
                    if log_weight.is_finite() {
                        for variance in &self.scales.interference {
                            others.push(
                                log_bayes(c, n, *variance) + log_weight
                                    - (self.scales.interference.len() as f64).ln(),
                            );
                        }
                    }
                }
            }
        }
        let steps: Vec<f64> = self.steps(onset).iter().map(|h| h.log).collect();
        let drifts: Vec<f64> = self.drifts(onset).iter().map(|h| h.log).collect();
        let meters: Vec<f64> = self.meters(onset).iter().map(|h| h.log).collect();
        for (cause, evidence) in CAUSES.iter().zip(&mut onset.evidence) {
            *evidence = match cause {
                Cause::Leak => log_sum(&leaks),
                Cause::Interference => log_sum(&others),
                Cause::GaugeStep => log_sum(&steps),
                Cause::GaugeDrift => log_sum(&drifts),
                Cause::MeterScale => log_sum(&meters),
                _ => f64::NEG_INFINITY,
            };
        }
        let unexplained = self.unexplained(&onset.own);
        if let Some(last) = onset.evidence.last_mut() {
            *last = unexplained;
        }
        onset.asked = now;
    }

    /// Cleared sums of the sources weighed for detection, of one growth: source, log prior weight as a leak, c, n (per unit of injection).
    fn sources(&self, onset: &Onset, growth: usize) -> Vec<(Source, f64, f64, f64)> {
        let Some(coefficients) = self.bank.thinned.get(growth) else {
            return Vec::new();
        };
        let chosen = &self.bank.chosen;
        let c = coefficients.tr_mul(&onset.sources.c);
        let turned = &onset.sources.n * coefficients;
        let mut total = 0.0;
        let weights: Vec<f64> = chosen
            .iter()
            .map(|&i| {
                let weight = match self.bank.sources.get(i) {
                    Some(Source::Place(p)) => self.inside(*p),
                    _ => 0.0,
                };
                total += weight;
                weight
            })
            .collect();
        chosen
            .iter()
            .enumerate()
            .filter_map(|(at, &i)| {
                let source = *self.bank.sources.get(i)?;
                let n = coefficients.column(at).dot(&turned.column(at));
                let weight = weights.get(at).copied().unwrap_or(0.0);
                Some((source, (weight / total).ln(), c[at], n.max(0.0)))
            })
            .collect()
    }

    /// Places weighed as leaks for detection: order among the bank's thinned sources, and log prior weight.
    pub(crate) fn thinned_leak_weights(&self) -> Vec<(usize, f64)> {
        let chosen = self.bank.chosen.iter().enumerate();
        let places = chosen.filter_map(|(at, &i)| match self.bank.sources.get(i) {
            Some(Source::Place(place)) => Some((at, *place)),
            _ => None,
        });
        let weights = self.weighted(places).into_iter();
        weights.map(|(at, _, log)| (at, log)).collect()
    }

    pub(super) fn inside(&self, place: usize) -> f64 {
        let far = self.places.all.get(place).is_some_and(|(at, _)| {
            distance(*at, self.places.centre) > 1.1 * self.places.half_width
        });
        if far { OUTSIDE } else { 1.0 }
    }

    /// Log prior weight of a source as interference.
    fn interference_weight(&self, source: Source) -> f64 {
        match source {
            Source::Neighbour(_) => -(self.bank.neighbours() as f64).ln(),
            Source::Place(_) => f64::NEG_INFINITY,
        }
    }

    /// A step of each gauge.
    fn steps(&self, onset: &Onset) -> Vec<Hypothesis> {
        (0..self.gauges)
            .filter_map(|gauge| {
                let variances = self.scales.step.get(gauge)?;
                Some(self.abrupt(&onset.own, gauge, self.gauges, onset.block, variances))
            })
            .flatten()
            .collect()
    }

    /// A drift of each gauge.
    fn drifts(&self, onset: &Onset) -> Vec<Hypothesis> {
        let mut out = Vec::new();
        for gauge in 0..self.gauges {
            let Some(variances) = self.scales.drift.get(gauge) else {
                continue;
            };
            let at = 2 * self.gauges + gauge;
            let (c, n) = (onset.own.c[at], onset.own.n[(at, at)]);
            for variance in variances {
                let (mean, sd) = amplitude(c, n, *variance);
                out.push(Hypothesis {
                    log: log_bayes(c, n, *variance) - ((self.gauges * variances.len()) as f64).ln(),
                    onset: onset.block,
                    part: 0.0,
                    index: gauge,
                    at: NOWHERE,
                    mean,
                    sd,
                });
            }
        }
        out
    }

    /// A change of each meter's scale.
    fn meters(&self, onset: &Onset) -> Vec<Hypothesis> {
        (0..self.meters)
            .flat_map(|well| {
                self.abrupt(
                    &onset.meters,
                    well,
                    self.wells,
                    onset.block,
                    &self.scales.meter,
                )
            })
            .collect()
    }

    /// Hypotheses of an abrupt cause of one among `count`: its column acts from the block after the onset's, the column
    /// `count` further in the onset's block, by the part of that block that was left.
    fn abrupt(
        &self,
        sums: &Sums,
        index: usize,
        count: usize,
        onset: i64,
        variances: &[f64],
    ) -> Vec<Hypothesis> {
        let pair = [index, count + index];
        let c = DVector::from_fn(2, |i, _| sums.c[pair[i]]);
        let n = DMatrix::from_fn(2, 2, |i, j| sums.n[(pair[i], pair[j])]);
        let prior = -((count * variances.len()) as f64).ln();
        variances
            .iter()
            .filter_map(|variance| {
                let prior_of = DMatrix::from_fn(2, 2, |i, j| variance * ABRUPT[i][j]);
                let (log, mean, covariance) = joint(&c, &n, &prior_of)?;
                Some(Hypothesis {
                    log: log + prior,
                    onset,
                    // Without any effect yet nothing tells when in the block it began.
                    part: if mean[0] == 0.0 {
                        0.5
                    } else {
                        1.0 - (mean[1] / mean[0]).clamp(0.0, 1.0)
                    },
                    index,
                    at: NOWHERE,
                    mean: mean[0],
                    sd: covariance[(0, 0)].max(0.0).sqrt(),
                })
            })
            .collect()
    }

    /// Independent step and ramp at every gauge.
    fn unexplained(&self, own: &Sums) -> f64 {
        let gauges = self.gauges;
        let scales = self.scales.step.first().map_or(0, Vec::len);
        let each: Vec<f64> = (0..scales)
            .map(|scale| {
                let of = |list: &[Vec<f64>], gauge: usize| {
                    list.get(gauge)
                        .and_then(|v| v.get(scale))
                        .copied()
                        .unwrap_or(1.0)
                };
                let mut prior = DMatrix::zeros(3 * gauges, 3 * gauges);
                for gauge in 0..gauges {
                    let step = of(&self.scales.step, gauge);
                    for (i, row) in ABRUPT.iter().enumerate() {
                        for (j, share) in row.iter().enumerate() {
                            prior[(i * gauges + gauge, j * gauges + gauge)] = step * share;
                        }
                    }
                    let ramp = 2 * gauges + gauge;
                    prior[(ramp, ramp)] = of(&self.scales.drift, gauge);
                }
                log_bayes_joint(&own.c, &own.n, &prior)
            })
            .collect();
        log_sum(&each) - (scales.max(1) as f64).ln()
    }

    /// The log of the Shiryaev-Roberts sum of each cause with an onset.
    pub(crate) fn sums(ladder: &Ladder) -> Vec<(Cause, f64)> {
        CAUSES
            .iter()
            .enumerate()
            .map(|(index, &cause)| {
                let terms: Vec<f64> = ladder
                    .onsets
                    .iter()
                    .filter_map(|o| Some(o.weight.get(index)? + o.evidence.get(index)?))
                    .collect();
                (cause, log_sum(&terms))
            })
            .collect()
    }

    /// The leading hypotheses of a cause, in detail.
    pub(crate) fn detail(
        &self,
        cause: Cause,
        ladder: &Ladder,
        barriers: &Barriers,
        now: i64,
    ) -> Option<Detail> {
        if cause == Cause::Barrier {
            return self.barrier(barriers);
        }
        let index = CAUSES.iter().position(|&c| c == cause)?;
        let strength = |o: &Onset| {
            o.weight.get(index).copied().unwrap_or(0.0)
                + o.evidence.get(index).copied().unwrap_or(f64::NEG_INFINITY)
        };
        let best = ladder
            .onsets
            .iter()
            .map(strength)
            .fold(f64::NEG_INFINITY, f64::max);
        let mut near: Vec<&Onset> = ladder
            .onsets
            .iter()
            .filter(|o| strength(o) > best - 10.0)
            .collect();
        near.sort_by(|a, b| strength(b).total_cmp(&strength(a)));
        near.truncate(5);
        let mut all = Vec::new();
        if cause == Cause::Leak {
            all = self.all_leaks(&near, index, now);
        }
        for onset in near.iter().filter(|_| cause != Cause::Leak) {
            let weight = onset.weight.get(index).copied().unwrap_or(0.0);
            let from = all.len();
            match cause {
                Cause::Interference => self.neighbours(onset, &mut all),
                Cause::GaugeStep => all.extend(self.steps(onset)),
                Cause::GaugeDrift => all.extend(self.drifts(onset)),
                Cause::MeterScale => all.extend(self.meters(onset)),
                _ => all.push(Hypothesis {
                    log: strength(onset) - weight,
                    onset: onset.block,
                    part: 0.0,
                    index: 0,
                    at: NOWHERE,
                    mean: 0.0,
                    sd: 0.0,
                }),
            }
            for hypothesis in all.iter_mut().skip(from) {
                hypothesis.log += weight;
            }
        }
        if cause == Cause::Leak {
            self.doubt(&mut all);
        }
        self.summary(cause, ladder, &all)
    }

    fn neighbours(&self, onset: &Onset, all: &mut Vec<Hypothesis>) {
        for (source, _, c, n) in self.sources(onset, 0) {
            let Source::Neighbour(neighbour) = source else {
                continue;
            };
            for variance in &self.scales.interference {
                let (mean, sd) = amplitude(c, n, *variance);
                all.push(Hypothesis {
                    log: log_bayes(c, n, *variance) + self.interference_weight(source)
                        - (self.scales.interference.len() as f64).ln(),
                    onset: onset.block,
                    part: 0.5,
                    index: neighbour,
                    at: NOWHERE,
                    mean,
                    sd,
                });
            }
        }
    }

    fn barrier(&self, barriers: &Barriers) -> Option<Detail> {
        let (log_evidence, each) = barriers.evidence(self.scales.barrier);
        let line = each
            .iter()
            .enumerate()
            .max_by(|a, b| a.1.total_cmp(b.1))
            .map(|(i, _)| i)?;
        let n = barriers.cleared.sums.n[(line, line)];
        let (off, sd) = amplitude(
            barriers.cleared.sums.c[line] - n * SEALING,
            n,
            self.scales.barrier,
        );
        let mean = SEALING + off;
        let at = self.places.lines.get(line)?;
        let foot = at.foot(self.places.centre);
        let total = log_sum(each.as_slice());
        let mut spread: Vec<(f64, f64)> = each
            .iter()
            .zip(&self.places.lines)
            .map(|(log, l)| {
                let other = l.foot(self.places.centre);
                (distance(other, foot), (log - total).exp())
            })
            .collect();
        Some(Detail {
            cause: Cause::Barrier,
            subject: Some(Subject::Place),
            log_evidence,
            onset: f64::NAN,
            onset_sd: 0.0,
            size: Some(Size {
                value: mean,
                sd,
                unit: SizeUnit::Ratio,
            }),
            place: Some(Place {
                x: foot[0],
                y: foot[1],
                layer: 0,
                radius_90: radius_90(&mut spread).max(0.1 * at.distance),
            }),
        })
    }

    /// Posterior means over hypotheses.
    fn summary(&self, cause: Cause, ladder: &Ladder, all: &[Hypothesis]) -> Option<Detail> {
        let logs: Vec<f64> = all.iter().map(|h| h.log).collect();
        let total = log_sum(&logs);
        let best = all.iter().max_by(|a, b| a.log.total_cmp(&b.log))?;
        let share = |h: &Hypothesis| (h.log - total).exp();
        // Only hypotheses about the same gauge, well or neighbour share a size.
        let alike = |h: &&Hypothesis| cause == Cause::Leak || h.index == best.index;
        let weight: f64 = all.iter().filter(alike).map(share).sum();
        let mean_of = |value: &dyn Fn(&Hypothesis) -> f64| {
            all.iter()
                .filter(alike)
                .map(|h| share(h) * value(h))
                .sum::<f64>()
                / weight
        };
        let onset_of = |h: &Hypothesis| (h.onset as f64 + h.part) * self.block;
        let onset = mean_of(&onset_of);
        let onset_variance = mean_of(&|h| (onset_of(h) - onset).powi(2));
        let gap = gap_round(ladder, best.onset) * self.block;
        let value = mean_of(&|h| h.mean);
        let sd = mean_of(&|h| h.sd * h.sd + (h.mean - value).powi(2)).sqrt();
        let unit = match cause {
            Cause::Leak | Cause::Interference => Some((SizeUnit::CubicMetrePerSecond, 1.0)),
            Cause::GaugeStep => Some((SizeUnit::Pascal, 1.0)),
            Cause::GaugeDrift => Some((SizeUnit::PascalPerSecond, 1.0 / 86_400.0)),
            Cause::MeterScale => Some((SizeUnit::Ratio, 1.0)),
            _ => None,
        };
        let subject = match cause {
            Cause::Leak => Some(Subject::Place),
            Cause::Interference => Some(Subject::Neighbour(best.index)),
            Cause::GaugeStep | Cause::GaugeDrift => Some(Subject::Gauge(best.index)),
            Cause::MeterScale => Some(Subject::Well(best.index)),
            _ => None,
        };
        let place = if cause == Cause::Leak {
            self.place(all, total)
        } else {
            None
        };
        Some(Detail {
            cause,
            subject,
            log_evidence: best.log,
            onset,
            onset_sd: (onset_variance + gap * gap / 12.0).sqrt(),
            size: unit.map(|(unit, factor)| Size {
                value: value * factor,
                sd: sd * factor,
                unit,
            }),
            place,
        })
    }
}

/// Blocks between the onsets on either side of one.
fn gap_round(ladder: &Ladder, onset: i64) -> f64 {
    let before = ladder
        .onsets
        .iter()
        .rev()
        .find(|o| o.block < onset)
        .map_or(onset, |o| o.block);
    let after = ladder
        .onsets
        .iter()
        .find(|o| o.block > onset)
        .map_or(onset, |o| o.block);
    (0.5 * (after - before) as f64).max(1.0)
}

/// Radius that holds 90 % of the weight.
pub(super) fn radius_90(spread: &mut [(f64, f64)]) -> f64 {
    spread.sort_by(|a, b| a.0.total_cmp(&b.0));
    let mut sum = 0.0;
    for (radius, share) in spread.iter() {
        sum += share;
        if sum >= 0.9 {
            return *radius;
        }
    }
    spread.last().map_or(0.0, |s| s.0)
}
