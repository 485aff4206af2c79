//! Exact stepping of decaying modes under piecewise constant rates, seen through block means.
//!
//! A mode obeys `x' = -lambda x + q(t)`. With `q` held on pieces, state and samples are sums of
//! `g(t) = (1 - exp(-lambda t)) / lambda`, so nothing is lost to a time step. A gauge's block mean is the weighted
//! mean of samples at the block's own instants, so prediction and reading are taken at the same moments: an
//! offset of one sample between them is a false signature after every change of rate.

#![expect(
    clippy::indexing_slicing,
    reason = "all indices run over lengths taken from the same geometry"
)]

use nalgebra::{DMatrix, DVector};

use crate::ModelError;
use crate::block::{Block, RatePath};

/// When things happen inside a block: shared by all blocks that are sampled alike.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Geometry {
    /// Length of the block \[s\].
    pub(crate) length: f64,
    /// Sample instants \[s from the block's start\].
    pub(crate) instants: Vec<f64>,
    /// Distinct weightings of the instants.
    pub(crate) classes: Vec<Vec<f64>>,
    /// Ends of the pieces of each well's rate \[s from the block's start\].
    pub(crate) cuts: Vec<Vec<f64>>,
}

/// A block as the columns use it.
#[derive(Debug, Clone)]
pub(crate) struct Sampled {
    /// Its geometry.
    pub(crate) geometry: Geometry,
    /// Weighting of each gauge, by order in [`Geometry::classes`].
    pub(crate) class: Vec<usize>,
    /// Rates of each well on its pieces \[m3/s\].
    pub(crate) rates: Vec<Vec<f64>>,
    /// Start of the block \[s since the epoch\].
    pub(crate) start: f64,
    /// The same block as drives see it, in place of wells.
    pub(crate) drives: Option<Box<Sampled>>,
}

impl Sampled {
    /// Takes a block apart whose paths are rates of wells, then values of drives.
    ///
    /// # Errors
    /// [`ModelError::Size`] or [`ModelError::NotFinite`] where the block does not fit the ground.
    pub(crate) fn of(
        block: &Block,
        wells: usize,
        drives: usize,
        gauges: usize,
    ) -> Result<Self, ModelError> {
        size("rates in a block", block.rates.len(), wells + drives)?;
        let (rates, values) = block.rates.split_at(wells);
        let mut sampled = Self::along(block, rates, gauges)?;
        if drives > 0 {
            sampled.drives = Some(Box::new(Self::along(block, values, gauges)?));
        }
        Ok(sampled)
    }

    fn along(block: &Block, paths: &[RatePath], gauges: usize) -> Result<Self, ModelError> {
        size("gauges in a block", block.gauges.len(), gauges)?;
        let count = block.instants.len();
        if count == 0 {
            return Err(ModelError::Size {
                what: "instants in a block",
                found: 0,
                expected: 1,
            });
        }
        let even = vec![1.0 / count as f64; count];
        let mut classes: Vec<Vec<f64>> = Vec::new();
        let mut class = Vec::with_capacity(gauges);
        for gauge in &block.gauges {
            let weights = match gauge {
                Some(read) => {
                    size("weights of a gauge", read.weights.len(), count)?;
                    if !read.mean.is_finite() {
                        return Err(ModelError::NotFinite("a block mean"));
                    }
                    &read.weights
                }
                None => &even,
            };
            let known = classes.iter().position(|c| c == weights);
            class.push(known.unwrap_or(classes.len()));
            if known.is_none() {
                classes.push(weights.clone());
            }
        }
        let mut cuts = Vec::with_capacity(paths.len());
        let mut rates = Vec::with_capacity(paths.len());
        for path in paths {
            if path
                .pieces
                .iter()
                .any(|(until, rate)| !until.is_finite() || !rate.is_finite())
            {
                return Err(ModelError::NotFinite("a rate"));
            }
            if path.pieces.is_empty() {
                return Err(ModelError::Size {
                    what: "pieces of a rate",
                    found: 0,
                    expected: 1,
                });
            }
            cuts.push(path.pieces.iter().map(|p| p.0).collect());
            rates.push(path.pieces.iter().map(|p| p.1).collect());
        }
        Ok(Self {
            geometry: Geometry {
                length: block.length,
                instants: block.instants.clone(),
                classes,
                cuts,
            },
            class,
            rates,
            start: block.start(),
            drives: None,
        })
    }

    /// Counts each input from a value of its own.
    pub(crate) fn count_from(&mut self, rest: &[f64]) {
        for (rates, rest) in self.rates.iter_mut().zip(rest).filter(|(_, r)| **r != 0.0) {
            rates.iter_mut().for_each(|rate| *rate -= rest);
        }
    }

    /// Weighted mean of the rate in force just before each instant, by class: what acts at once through skin.
    /// `entering` is the rate of the well at the end of the block before; `keep` says which pieces count.
    pub(crate) fn held(
        &self,
        well: usize,
        entering: f64,
        keep: &dyn Fn(usize) -> bool,
    ) -> Vec<f64> {
        let (cuts, rates) = (&self.geometry.cuts[well], &self.rates[well]);
        let before: Vec<f64> = self
            .geometry
            .instants
            .iter()
            .map(|&t| {
                if t <= 1e-6 {
                    return entering;
                }
                let piece = cuts.iter().position(|&c| t <= c + 1e-6);
                let piece = piece.unwrap_or(cuts.len() - 1);
                if keep(piece) { rates[piece] } else { 0.0 }
            })
            .collect();
        self.geometry
            .classes
            .iter()
            .map(|w| w.iter().zip(&before).map(|(a, b)| a * b).sum())
            .collect()
    }
}

pub(crate) fn size(what: &'static str, found: usize, expected: usize) -> Result<(), ModelError> {
    if found == expected {
        Ok(())
    } else {
        Err(ModelError::Size {
            what,
            found,
            expected,
        })
    }
}

/// `(1 - exp(-lambda t)) / lambda`, and `t` where lambda vanishes.
pub(crate) fn gain(lambda: f64, t: f64) -> f64 {
    if lambda * t > 1e-10 {
        -(-lambda * t).exp_m1() / lambda
    } else {
        t
    }
}

/// What one geometry does to a set of modes.
#[derive(Debug, Clone)]
pub(crate) struct Tables {
    /// Decay over the block, by mode.
    pub(crate) decay: DVector<f64>,
    /// Weighted mean of the decay at the instants, by class.
    pub(crate) mean_decay: Vec<DVector<f64>>,
    /// Group of wells with equal cuts, by well.
    group: Vec<usize>,
    /// `[group][piece]`: state at the block's end after a unit rate on the piece.
    end: Vec<Vec<DVector<f64>>>,
    /// `[group][class]`: block mean under a unit rate on each piece (modes by pieces).
    mean: Vec<Vec<DMatrix<f64>>>,
}

/// Modes with their decay rates, stepped together; tables of the last geometry are kept.
#[derive(Debug, Clone)]
pub(crate) struct Drive {
    lambda: DVector<f64>,
    last: Option<(Geometry, Tables)>,
}

/// One block of a unit-port response: end of block and block means by class (modes by wells).
#[derive(Debug, Clone)]
pub(crate) struct Driven {
    /// Added to the decayed state.
    pub(crate) end: DMatrix<f64>,
    /// Added to the decayed means, by class.
    pub(crate) mean: Vec<DMatrix<f64>>,
}

impl Drive {
    /// Unit-port states (modes by wells) at the end of declared stretches: how long before it each began and ended
    /// \[s\], and its rate \[m3/s\].
    pub(crate) fn after(&self, declared: &[Vec<(f64, f64, f64)>], wells: usize) -> DMatrix<f64> {
        let mut state = DMatrix::zeros(self.lambda.len(), wells);
        for (mut column, stretches) in state.column_iter_mut().zip(declared) {
            for &(began, ended, rate) in stretches {
                column += self
                    .lambda
                    .map(|l| rate * (-l * ended).exp() * gain(l, began - ended));
            }
        }
        state
    }

    /// Modes with decay rates `lambda` \[1/s\].
    pub(crate) fn new(lambda: DVector<f64>) -> Self {
        Self { lambda, last: None }
    }

    /// Number of modes.
    pub(crate) fn len(&self) -> usize {
        self.lambda.len()
    }

    /// Tables of a geometry.
    pub(crate) fn tables(&mut self, geometry: &Geometry) -> &Tables {
        let fits = self
            .last
            .as_ref()
            .is_some_and(|(known, _)| known == geometry);
        if !fits {
            self.last = None;
        }
        let lambda = &self.lambda;
        &self
            .last
            .get_or_insert_with(|| (geometry.clone(), tables(lambda, geometry)))
            .1
    }
}

impl Tables {
    /// Response to the pieces of all wells that `keep(well, piece)` lets through.
    pub(crate) fn drive(&self, sampled: &Sampled, keep: &dyn Fn(usize, usize) -> bool) -> Driven {
        let modes = self.decay.len();
        let wells = sampled.rates.len();
        let mut end = DMatrix::zeros(modes, wells);
        let mut mean = vec![DMatrix::zeros(modes, wells); self.mean_decay.len()];
        for well in 0..wells {
            let group = self.group[well];
            for (piece, &rate) in sampled.rates[well].iter().enumerate() {
                if rate == 0.0 || !keep(well, piece) {
                    continue;
                }
                end.column_mut(well)
                    .axpy(rate, &self.end[group][piece], 1.0);
                for (class, out) in mean.iter_mut().enumerate() {
                    let unit = self.mean[group][class].column(piece);
                    out.column_mut(well).axpy(rate, &unit, 1.0);
                }
            }
        }
        Driven { end, mean }
    }

    /// Response of one well's pieces that `keep` lets through (modes; means by class).
    pub(crate) fn drive_one(
        &self,
        sampled: &Sampled,
        well: usize,
        keep: &dyn Fn(usize) -> bool,
    ) -> (DVector<f64>, Vec<DVector<f64>>) {
        let modes = self.decay.len();
        let mut end = DVector::zeros(modes);
        let mut mean = vec![DVector::zeros(modes); self.mean_decay.len()];
        let group = self.group[well];
        for (piece, &rate) in sampled.rates[well].iter().enumerate() {
            if rate == 0.0 || !keep(piece) {
                continue;
            }
            end.axpy(rate, &self.end[group][piece], 1.0);
            for (class, out) in mean.iter_mut().enumerate() {
                out.axpy(rate, &self.mean[group][class].column(piece), 1.0);
            }
        }
        (end, mean)
    }
}

fn tables(lambda: &DVector<f64>, geometry: &Geometry) -> Tables {
    let length = geometry.length;
    let at = |t: f64| lambda.map(|l| (-l * t).exp());
    let at_instants: Vec<DVector<f64>> = geometry.instants.iter().map(|&t| at(t)).collect();
    let mean_decay = geometry
        .classes
        .iter()
        .map(|weights| {
            let mut sum = DVector::zeros(lambda.len());
            for (weight, decay) in weights.iter().zip(&at_instants) {
                sum.axpy(*weight, decay, 1.0);
            }
            sum
        })
        .collect();
    let mut group = Vec::new();
    let mut distinct: Vec<&Vec<f64>> = Vec::new();
    for cuts in &geometry.cuts {
        let known = distinct.iter().position(|d| *d == cuts);
        group.push(known.unwrap_or(distinct.len()));
        if known.is_none() {
            distinct.push(cuts);
        }
    }
    let mut end = Vec::new();
    let mut mean = Vec::new();
    for cuts in distinct {
        let starts: Vec<f64> = std::iter::once(0.0).chain(cuts.iter().copied()).collect();
        let pieces: Vec<(f64, f64)> = starts.iter().copied().zip(cuts.iter().copied()).collect();
        let unit = |(from, until): (f64, f64), t: f64| {
            let until = until.min(t);
            lambda.map(|l| {
                if until <= from {
                    0.0
                } else {
                    (-l * (t - until)).exp() * gain(l, until - from)
                }
            })
        };
        end.push(pieces.iter().map(|&p| unit(p, length)).collect());
        let mut by_class = vec![DMatrix::zeros(lambda.len(), pieces.len()); geometry.classes.len()];
        for (index, &piece) in pieces.iter().enumerate() {
            for (instant, &t) in geometry.instants.iter().enumerate() {
                if t <= piece.0 {
                    continue;
                }
                let response = unit(piece, t);
                for (class, out) in by_class.iter_mut().enumerate() {
                    let weight = geometry.classes[class][instant];
                    out.column_mut(index).axpy(weight, &response, 1.0);
                }
            }
        }
        mean.push(by_class);
    }
    Tables {
        decay: at(length),
        mean_decay,
        group,
        end,
        mean,
    }
}
