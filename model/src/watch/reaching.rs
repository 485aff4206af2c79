//! Reach: the smallest leak that would be noticed, by place and by time since it began.
//!
//! From where the watch stands it is stepped on under the rates of some weeks gone by, as if every gauge delivered; the
//! bank's directions with an onset at the first block are whitened and cleared of the nuisances block by block, as the
//! ladder does, and what is left of them says how small a leak each place may hide. A gauge that is not there is added by
//! reciprocity: the port of a place is the functional of a gauge at it.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges, wells and columns laid out by the same code"
)]

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use super::conclude::KINDS;
use super::step::{BATCH, Watch};
use super::{Basis, Foundation, WatchSettings};
use crate::ModelError;
use crate::block::{Block, GaugeBlock};
use crate::commission::places::distance;
use crate::commission::{Commissioned, Places, calm};
use crate::expect::columns::{Kind, Memory};
use crate::expect::frame::span;
use crate::expect::posterior::{Cleared, Posterior};
use crate::ground::{Gauge, Point, Seat};
use crate::weigh::bank::Source;
use crate::weigh::reach::Detection;
use crate::weigh::verdict::Weights;

/// One delay.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct ReachDelay {
    /// Time since the leak began \[s\].
    pub after: f64,
    /// Whole blocks that are certainly judged by then.
    pub blocks: usize,
}

/// The smallest leak noticed at one place.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct PlaceReach {
    /// East and north of the local origin \[m\].
    pub at: Point,
    /// Layer.
    pub layer: usize,
    /// Whether it lies within the array's outline, a circle a tenth wider than its outermost well or gauge.
    pub inside: bool,
    /// Size noticed with 90 % probability by each delay \[m3/s\]; `None` where nothing would be seen of any.
    pub smallest: Vec<Option<f64>>,
}

/// The reach of a site.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Reach {
    /// Delays, ascending; those sooner than the watch judges are left out.
    pub delays: Vec<ReachDelay>,
    /// Every place.
    pub places: Vec<PlaceReach>,
    /// Centre of the array \[m\].
    pub centre: Point,
    /// Largest distance of a well or gauge from it \[m\].
    pub half_width: f64,
}

impl Reach {
    /// The order of the place nearest to a point in a layer.
    #[must_use]
    pub fn nearest(&self, at: Point, layer: usize) -> Option<usize> {
        self.places
            .iter()
            .enumerate()
            .filter(|(_, p)| p.layer == layer)
            .min_by(|a, b| distance(a.1.at, at).total_cmp(&distance(b.1.at, at)))
            .map(|(index, _)| index)
    }
}

/// A gauge that might be added.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct AddedGauge {
    /// Where it is wanted \[m\].
    pub at: Point,
    /// Layer.
    pub layer: usize,
    /// Noise of a block mean \[Pa\].
    pub noise: f64,
    /// Drift within its specification \[Pa/s\].
    pub drift: f64,
}

/// A watch with one more gauge, and the same without.
#[derive(Debug, Clone)]
pub struct WithGauge {
    /// Where the gauge sits \[m\].
    pub at: Point,
    /// Without it.
    pub without: Watch,
    /// With it.
    pub with: Watch,
}

impl Watch {
    /// Reach after each of `delays` \[s\], if rates go on as in `pattern`, blocks in order; wells keep their last rates where
    /// it is empty. `learn` blocks of it pass before the leak begins.
    ///
    /// # Errors
    /// [`ModelError::History`] before the first block, [`ModelError::Size`] for a pattern of another site.
    pub fn reach(
        &self,
        pattern: &[Block],
        delays: &[f64],
        learn: usize,
    ) -> Result<Reach, ModelError> {
        let mut watch = self.clone();
        let mut memory = watch.state.memory.take().ok_or_else(|| {
            ModelError::History("the watch has seen no block to go on from".to_owned())
        })?;
        watch.learn_pending()?;
        let held = [watch.block_to_come(
            0,
            &crate::forecast::RatePlan::default(),
            &[],
            &watch.as_read(&memory.entering),
        )];
        let pattern = if pattern.is_empty() {
            &held[..]
        } else {
            pattern
        };
        let delays = watch.delays(delays);
        let last = delays.iter().map(|d| d.blocks).max().unwrap_or(0);
        let mut signatures = Cleared::new(watch.state.posterior.len(), watch.bank.width());
        let first = watch.state.next.unwrap_or(0);
        let mut energies = Vec::new();
        for (next, step) in (first..).zip(0..learn + last) {
            let block = whole(
                &pattern[step % pattern.len()],
                next,
                watch.columns.frame.gauges,
            );
            let lag = step.checked_sub(learn);
            watch.clear(&block, &mut memory, lag, &mut signatures)?;
            if let Some(lag) = lag
                && delays.iter().any(|d| d.blocks == lag + 1)
            {
                energies.push((lag + 1, signatures.sums.n.clone()));
            }
        }
        Ok(watch.summary(delays, &energies))
    }

    /// Delays that the watch can judge by: a leak begins anywhere in a batch, and is weighed when a later one is full.
    fn delays(&self, wanted: &[f64]) -> Vec<ReachDelay> {
        let wait = usize::try_from(BATCH - 1).unwrap_or(0);
        wanted
            .iter()
            .filter_map(|&after| {
                #[expect(
                    clippy::cast_possible_truncation,
                    clippy::cast_sign_loss,
                    reason = "a positive count far below 2^53"
                )]
                let whole = (after / self.block + 1e-9).max(0.0).floor() as usize;
                let blocks = whole.saturating_sub(wait).min(self.bank.horizon);
                (blocks > 0).then_some(ReachDelay { after, blocks })
            })
            .collect()
    }

    /// Steps through a block as if all was as foreseen, and clears the directions `lag` blocks after the onset.
    fn clear(
        &mut self,
        block: &Block,
        memory: &mut Memory,
        lag: Option<usize>,
        signatures: &mut Cleared,
    ) -> Result<(), ModelError> {
        let gauges = self.columns.frame.gauges;
        let sampled = self.columns.sample(block)?;
        let had = self.state.posterior.len();
        let raw = self.columns.step(memory, &sampled)?;
        let mut prepared = self.prepare(block, &sampled, &raw, memory, &[]);
        signatures.append(self.state.posterior.len() - had);
        prepared.row.column_mut(0).fill(0.0);
        let mut white = self.whitener.step(&mut self.state.filter, &prepared.row);
        let largest = &self.columns.priors.rate;
        let calm = calm(&self.unsteady, &sampled, largest, gauges);
        for (gauge, factor) in calm.iter().enumerate() {
            white.row_mut(gauge).scale_mut(*factor);
        }
        let lost: Vec<f64> = self.forgetting.iter().map(|f| f * self.block).collect();
        self.state.posterior.forget(&lost);
        let lesson = self.state.posterior.learn(
            white.columns(1, white.ncols() - 1).into_owned(),
            &DVector::zeros(gauges),
        )?;
        if let Some(lag) = lag
            && lag < self.bank.horizon
        {
            let mut rows = self.bank.directions_at(lag).into_owned();
            for (mut row, factor) in rows.row_iter_mut().zip(&calm) {
                row *= *factor;
            }
            signatures.learn(&lesson, rows);
        }
        Ok(())
    }

    fn summary(&self, delays: Vec<ReachDelay>, energies: &[(usize, DMatrix<f64>)]) -> Reach {
        let weights = Weights {
            bank: &self.bank,
            scales: &self.scales,
            places: &self.places,
            between: &self.between,
            gauges: self.columns.frame.gauges,
            wells: self.columns.frame.wells,
            meters: self.columns.frame.meters,
            block: self.block,
            mismatch: self.mismatch,
        };
        let detections: Vec<Detection> = delays
            .iter()
            .filter_map(|delay| energies.iter().find(|(blocks, _)| *blocks == delay.blocks))
            .map(|(_, energy)| Detection::new(&weights, energy.clone(), self.log_threshold, KINDS))
            .collect();
        let mut places = Vec::new();
        if let Some(coefficients) = self.bank.coefficients.first() {
            for (index, source) in self.bank.sources.iter().enumerate() {
                let Source::Place(place) = source else {
                    continue;
                };
                let Some(&(at, layer)) = self.places.all.get(*place) else {
                    continue;
                };
                let mine = coefficients.column(index).into_owned();
                places.push(PlaceReach {
                    at,
                    layer,
                    inside: distance(at, self.places.centre) <= 1.1 * self.places.half_width,
                    smallest: detections.iter().map(|d| d.smallest(&mine)).collect(),
                });
            }
        }
        Reach {
            delays,
            places,
            centre: self.places.centre,
            half_width: self.places.half_width,
        }
    }

    /// The same watch with one more gauge and, to be held against it, without: both keep what they have learned of all that
    /// lasts, and begin anew with what comes and goes. The gauge sits at the place of the reduction nearest to where it is
    /// wanted. Of it only specifications and priors are known; its share of model error is the usual one of gauges apart from
    /// wells, and what the ground's patches do to it is taken from its nearest neighbour.
    ///
    /// # Errors
    /// As [`Watch::new`]; [`ModelError::History`] before the first block or where the layer has no place.
    pub fn with_gauge(
        &self,
        commissioned: &Commissioned,
        settings: &WatchSettings,
        pattern: &[Block],
        added: &AddedGauge,
    ) -> Result<WithGauge, ModelError> {
        let places = Places::of(&commissioned.ground);
        let (order, at) = places
            .all
            .iter()
            .enumerate()
            .filter(|(_, (_, layer))| *layer == added.layer)
            .min_by(|a, b| distance(a.1.0, added.at).total_cmp(&distance(b.1.0, added.at)))
            .map(|(order, (at, _))| (order, *at))
            .ok_or_else(|| ModelError::History("that layer has no place".to_owned()))?;
        let mut with = enlarged(commissioned, order, at, added);
        let mut memory = self
            .state
            .memory
            .clone()
            .ok_or_else(|| ModelError::History("the watch has seen no block".to_owned()))?;
        let mut trial = Self::new(&Placed(&with, &places), settings, &[])?;
        // How much the new gauge feels of each well, which its share of model error is a share of.
        let (gauges, wells) = (with.ground.gauges.len(), with.ground.inputs());
        let mut felt: Vec<Vec<f64>> = vec![Vec::new(); wells];
        for block in pattern {
            let sampled = trial.columns.sample(&whole(block, block.index, gauges))?;
            let raw = trial.columns.step(&mut memory, &sampled)?;
            for (well, felt) in felt.iter_mut().enumerate() {
                felt.push(raw.pairs[(gauges - 1, well)]);
            }
        }
        let spread = &mut with.calibration.priors.pair_spread;
        for (well, felt) in felt.into_iter().enumerate() {
            if felt.len() > 1 {
                let slot = spread.len() - wells + well;
                // No less than the remotest gauge feels: columns felt by all are sized by that.
                let others = spread.iter().take(slot).skip(well).step_by(wells);
                let least = others.copied().fold(f64::INFINITY, f64::min);
                spread[slot] = DVector::from_vec(felt).variance().sqrt().max(least);
            }
        }
        let plain = Self::new(commissioned, settings, &[])?;
        let mut with = Self::new(&Placed(&with, &places), settings, &[])?;
        // What was learned of columns across the array was learned of it as it is.
        let (centre, width) = span(&commissioned.ground);
        let mut moments = self.columns.frame.moments.clone();
        moments.push([
            1.0,
            (at[0] - centre[0]) / width,
            (at[1] - centre[1]) / width,
        ]);
        with.columns.frame.moments = moments;
        Ok(WithGauge {
            at,
            without: self.carried(plain),
            with: self.carried(with),
        })
    }

    /// Another watch of the same wells that takes over what this one has learned of all that lasts.
    fn carried(&self, mut fresh: Self) -> Self {
        let find = |kind: &Kind, nth: usize| {
            let all = fresh.columns.kinds.iter().enumerate();
            let mut alike = all.filter(|(_, k)| *k == kind);
            alike.nth(nth).map(|(index, _)| index)
        };
        // Windows of the past of one well share a kind: they come in the same order in both.
        let old = &self.columns.kinds;
        let place: Vec<Option<usize>> = old
            .iter()
            .enumerate()
            .map(|(index, kind)| {
                let nth = old[..index].iter().filter(|k| *k == kind).count();
                find(kind, nth)
            })
            .collect();
        let mut posterior = Posterior::prior(fresh.columns.len());
        let known = &self.state.posterior;
        for (i, to) in place.iter().enumerate() {
            let Some(to) = *to else { continue };
            posterior.mean[to] = known.mean[i];
            for (j, other) in place.iter().enumerate() {
                if let Some(other) = *other {
                    posterior.covariance[(to, other)] = known.covariance[(i, j)];
                }
            }
        }
        fresh.state.posterior = posterior;
        fresh.state.memory.clone_from(&self.state.memory);
        fresh.state.next = self.state.next;
        fresh
    }
}

/// A commissioned ground with places that were laid out for another array.
struct Placed<'a>(&'a Commissioned, &'a Places);

impl Basis for Placed<'_> {
    fn foundation(&self) -> Result<Foundation, ModelError> {
        self.0.founded(self.1.clone())
    }
}

/// A block as if every gauge delivered, under another number.
fn whole(block: &Block, index: i64, gauges: usize) -> Block {
    let count = block.instants.len();
    let even = GaugeBlock {
        mean: 0.0,
        count: 1,
        weights: vec![1.0 / count.max(1) as f64; count],
        changed: true,
    };
    Block {
        index,
        gauges: vec![Some(even); gauges],
        ..block.clone()
    }
}

/// The commissioned ground with one more gauge.
fn enlarged(
    commissioned: &Commissioned,
    place: usize,
    at: Point,
    added: &AddedGauge,
) -> Commissioned {
    let mut with = commissioned.clone();
    let (gauges, wells) = (with.ground.gauges.len(), with.ground.inputs());
    let apart: Vec<usize> = (0..gauges)
        .filter(|&g| matches!(with.ground.gauges[g].seat, Seat::InGround { .. }))
        .collect();
    let likes: Vec<usize> = if apart.is_empty() {
        (0..gauges).collect()
    } else {
        apart
    };
    let away = |g: &usize| {
        let seat = with.ground.gauge_at(*g);
        seat.map_or(f64::MAX, |(p, _)| distance(p, at))
    };
    let nearest = likes
        .iter()
        .copied()
        .min_by(|a, b| away(a).total_cmp(&away(b)))
        .unwrap_or(0);
    let mean = |list: &[f64]| {
        let all = likes.iter().filter_map(|g| list.get(*g));
        all.sum::<f64>() / likes.len().max(1) as f64
    };
    with.ground.gauges.push(Gauge {
        name: "added".to_owned(),
        seat: Seat::InGround {
            at,
            layer: added.layer,
        },
        noise: added.noise,
        drift: added.drift,
    });
    let reduced = &mut with.reduced;
    let modes = reduced.gauges.nrows();
    reduced.gauges = std::mem::replace(&mut reduced.gauges, DMatrix::zeros(0, 0))
        .resize_horizontally(gauges + 1, 0.0);
    for mode in 0..modes {
        reduced.gauges[(mode, gauges)] = reduced.place_ports[(mode, place)];
    }
    let calibration = &mut with.calibration;
    let wander = mean(&calibration.stochastic.wander);
    let settling = mean(&calibration.priors.settling);
    calibration.stochastic.gauge.push(added.noise);
    calibration.stochastic.wander.push(wander);
    calibration.noise.push(added.noise);
    calibration.left.push((1.0, 0.0));
    calibration.reference.push(0.0);
    calibration.inflate.push(1.0);
    calibration.longest_unchanged.push(0);
    calibration.priors.drift.push(added.drift);
    calibration.priors.settling.push(settling);
    for well in 0..wells {
        let usual = |list: &[f64]| {
            let all = likes.iter().filter_map(|g| list.get(g * wells + well));
            all.sum::<f64>() / likes.len().max(1) as f64
        };
        let share = usual(&calibration.priors.discrepancy);
        let spread = usual(&calibration.priors.pair_spread);
        calibration.priors.discrepancy.push(share);
        calibration.priors.pair_spread.push(spread);
        calibration.discrepancy.push(share);
    }
    for shares in &mut calibration.patched.shares {
        let rows = shares.nrows();
        let copied = shares.rows(nearest * wells, wells).into_owned();
        *shares =
            std::mem::replace(shares, DMatrix::zeros(0, 0)).resize_vertically(rows + wells, 0.0);
        shares.rows_mut(rows, wells).copy_from(&copied);
    }
    with
}
