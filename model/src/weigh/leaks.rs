//! Leaks in detail: at every place, between places, and growing at every pace.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over candidates laid out here"
)]

use super::bank::{GROWTHS, Source};
use super::between::Candidates;
use super::evidence::{amplitude, log_bayes_positive};
use super::ladder::Onset;
use super::verdict::{Hypothesis, Weights, radius_90};
use crate::commission::places::distance;
use crate::finding::Place;

/// Log evidence by which a place may fall short and still be looked at.
const HOPELESS: f64 = 1_000.0;
/// Parts of the way from one pace of growth to the next.
const BETWEEN: [f64; 4] = [0.0, 0.25, 0.5, 0.75];
/// Relative error of a leak's signature between paces of growth even in the plainest ground, and of its size.
const PACES: f64 = 0.01;
const SIZE: f64 = 0.03;
/// Radius that holds 90 % of a round normal distribution, in standard deviations.
const NINETY: f64 = 2.146;
/// Least radius that holds a place with 90 %, in half-widths of the array.
const FINEST: f64 = 0.02;

impl Weights<'_> {
    /// Leaks at every candidate, growing at every pace: between two of [`GROWTHS`] a signature is a mix of theirs.
    fn leaks(&self, onset: &Onset, now: i64, candidates: &Candidates, all: &mut Vec<Hypothesis>) {
        let age = (now + 1 - onset.block) as f64 * self.block / 86_400.0;
        let grown = |days: f64| {
            if days > 0.0 {
                (age / days).min(1.0)
            } else {
                1.0
            }
        };
        let paces = (GROWTHS.len() - 1) * BETWEEN.len() + 1;
        let share = -((self.scales.leak.len() * paces) as f64).ln();
        let mut best = f64::NEG_INFINITY;
        for (growth, (coefficients, days)) in
            candidates.coefficients.iter().zip(GROWTHS).enumerate()
        {
            let next = candidates
                .coefficients
                .get(growth + 1)
                .zip(GROWTHS.get(growth + 1));
            let turned = &onset.sources.n * coefficients;
            let c = coefficients.tr_mul(&onset.sources.c);
            let c_next = next.map(|(next, _)| next.tr_mul(&onset.sources.c));
            let turned_next = next.map(|(next, _)| &onset.sources.n * next);
            for (index, &(place, at, weight)) in candidates.each.iter().enumerate() {
                let n = coefficients.column(index).dot(&turned.column(index));
                for &part in BETWEEN
                    .iter()
                    .take(if next.is_some() { BETWEEN.len() } else { 1 })
                {
                    let (mut c, mut n, mut grown_to) = (c[index], n, grown(days));
                    if let (Some((_, days)), Some(c_next), Some(turned_next)) =
                        (next, &c_next, &turned_next)
                        && let Some((other, _)) = next
                        && part > 0.0
                    {
                        let rest = 1.0 - part;
                        let across = coefficients.column(index).dot(&turned_next.column(index));
                        let beyond = other.column(index).dot(&turned_next.column(index));
                        c = rest * c + part * c_next[index];
                        n = rest * rest * n + 2.0 * rest * part * across + part * part * beyond;
                        grown_to = rest * grown_to + part * grown(*days);
                    }
                    // The most that any size could explain: hopeless places are passed over.
                    let most = 0.5 * c * c / n.max(f64::MIN_POSITIVE);
                    if c > 0.0 || most < best - HOPELESS {
                        continue;
                    }
                    best = best.max(most);
                    for variance in &self.scales.leak {
                        let (mean, sd) = amplitude(-c, n.max(0.0), *variance);
                        all.push(Hypothesis {
                            log: log_bayes_positive(-c, n.max(0.0), *variance) + weight + share,
                            onset: onset.block,
                            part: 0.5,
                            index: place,
                            at,
                            mean: mean * grown_to,
                            sd: sd * grown_to,
                        });
                    }
                }
            }
        }
    }

    /// Leaks with the onsets given: on the lattice, and finer about the places that lead.
    pub(super) fn all_leaks(&self, near: &[&Onset], index: usize, now: i64) -> Vec<Hypothesis> {
        let over = |candidates: &Candidates| {
            let mut all = Vec::new();
            for onset in near {
                let from = all.len();
                self.leaks(onset, now, candidates, &mut all);
                let weight = onset.weight.get(index).copied().unwrap_or(0.0);
                for hypothesis in all.iter_mut().skip(from) {
                    hypothesis.log += weight;
                }
            }
            all
        };
        let lattice = self.lattice();
        let mut all = over(&lattice);
        let mut leading: Vec<(usize, f64)> = Vec::new();
        for hypothesis in &all {
            match leading
                .iter_mut()
                .find(|(place, _)| *place == hypothesis.index)
            {
                Some((_, log)) => *log = log.max(hypothesis.log),
                None => leading.push((hypothesis.index, hypothesis.log)),
            }
        }
        let (finer, stood_for) = self.between.about(&lattice, &mut leading, self.places);
        all.retain(|hypothesis| !stood_for.contains(&hypothesis.index));
        all.extend(over(&finer));
        all
    }

    /// What is not known of signatures makes places and sizes less sure: one that is off by a share of itself may lose that share
    /// squared of its evidence by chance.
    pub(super) fn doubt(&self, all: &mut [Hypothesis]) {
        let Some(best) = all.iter().max_by(|a, b| a.log.total_cmp(&b.log)) else {
            return;
        };
        let (at, best) = (best.at, best.log.max(0.0));
        let share = self.mismatch.max(PACES).max(self.between.error(at));
        let doubt = 1.0 + share.powi(2) * best / self.gauges.max(1) as f64;
        for hypothesis in all {
            hypothesis.log = best + (hypothesis.log - best) / doubt;
            let of_size = share.max(SIZE) * hypothesis.mean;
            hypothesis.sd = (doubt * hypothesis.sd.powi(2) + of_size.powi(2)).sqrt();
        }
    }

    /// The candidates of the lattice.
    fn lattice(&self) -> Candidates {
        let weights = self.leak_weights();
        let columns: Vec<usize> = weights.iter().map(|(column, ..)| *column).collect();
        Candidates {
            coefficients: self
                .bank
                .coefficients
                .iter()
                .map(|all| all.select_columns(columns.iter()))
                .collect(),
            each: weights
                .into_iter()
                .map(|(_, place, weight)| {
                    let at = self
                        .places
                        .all
                        .get(place)
                        .map_or([f64::NAN; 2], |(at, _)| *at);
                    (place, at, weight)
                })
                .collect(),
        }
    }

    /// Sources that may be a leak, with their places and the log of their prior weight.
    fn leak_weights(&self) -> Vec<(usize, usize, f64)> {
        let sources = self.bank.sources.iter().enumerate();
        self.weighted(sources.filter_map(|(index, source)| match source {
            Source::Place(place) => Some((index, *place)),
            Source::Neighbour(_) => None,
        }))
    }

    /// Places with the log of their share of the prior weight of all that are given.
    pub(super) fn weighted(
        &self,
        places: impl Iterator<Item = (usize, usize)>,
    ) -> Vec<(usize, usize, f64)> {
        let weights: Vec<(usize, usize, f64)> = places
            .map(|(index, place)| (index, place, self.inside(place)))
            .collect();
        let total: f64 = weights.iter().map(|(_, _, w)| w).sum();
        weights
            .into_iter()
            .map(|(index, place, weight)| (index, place, (weight / total).ln()))
            .collect()
    }

    /// Posterior of a leak's place, in the layer that leads.
    pub(super) fn place(&self, all: &[Hypothesis], total: f64) -> Option<Place> {
        let mut by_layer: Vec<f64> = Vec::new();
        for hypothesis in all {
            let layer = self.places.all.get(hypothesis.index)?.1;
            if by_layer.len() <= layer {
                by_layer.resize(layer + 1, 0.0);
            }
            if let Some(sum) = by_layer.get_mut(layer) {
                *sum += (hypothesis.log - total).exp();
            }
        }
        let layer = by_layer
            .iter()
            .enumerate()
            .max_by(|a, b| a.1.total_cmp(b.1))
            .map(|(i, _)| i)?;
        let mut weights: Vec<([f64; 2], f64)> = Vec::new();
        let mut sum = 0.0;
        let mut centre = [0.0; 2];
        for hypothesis in all {
            let at = hypothesis.at;
            if self.places.all.get(hypothesis.index)?.1 != layer {
                continue;
            }
            let share = (hypothesis.log - total).exp();
            if share > 1e-9 {
                sum += share;
                centre = [centre[0] + share * at[0], centre[1] + share * at[1]];
                weights.push((at, share));
            }
        }
        let centre = [centre[0] / sum, centre[1] / sum];
        let mut spread: Vec<(f64, f64)> = weights
            .iter()
            .map(|(at, share)| (distance(*at, centre), share / sum))
            .collect();
        // Where the ground is known only so well, a leak's distances are.
        let moved = NINETY * self.mismatch * self.places.half_width;
        let least = FINEST * self.places.half_width;
        Some(Place {
            x: centre[0],
            y: centre[1],
            layer,
            radius_90: radius_90(&mut spread).max(least).hypot(moved),
        })
    }
}
