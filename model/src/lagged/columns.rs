//! The columns of an embankment: for each gauge its answer to pool, rain and the rest, the season, and ageing.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges, inputs and lags laid out by the same code"
)]

use std::f64::consts::TAU;

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use super::input::{Input, LAGS, Scaling, inputs};
use super::{Driver, Embankment};
use crate::ModelError;
use crate::block::{Block, RateKnown};
use crate::expect::drive::{Drive, Sampled, size};
use crate::expect::frame::means;

/// A year \[s\].
pub(crate) const YEAR: f64 = 365.25 * 86_400.0;
/// Waves of the season a year: sine and cosine of one and of two.
const WAVES: usize = 4;
/// Shapes of ageing.
pub(crate) const AGES: usize = 3;
/// Time after which ageing slows \[s\], of its logarithm and of its exponential (common practice, no source).
const AGED: (f64, f64) = (30.0 * 86_400.0, 180.0 * 86_400.0);
/// From which of [`LAGS`] on the pool before the record still matters.
const BEFORE: usize = 4;
/// Share of the pool's range by which it may leave that range before a gauge is blind.
const OUTSIDE: f64 = 0.05;

/// How long a pool beyond it is felt \[s\].
const FELT: f64 = 30.0 * 86_400.0;
/// What of it no longer matters \[Pa\]: a centimetre.
const LITTLE: f64 = 100.0;

/// Columns that share a scale at one gauge.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub(crate) enum Group {
    /// Answers to one input, by order.
    Input(usize),
    /// The pool before the record.
    Before,
    Season,
    Ageing,
}

/// Which column of a gauge.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Term {
    /// An input, at once.
    Direct(usize),
    /// An input through a lag, by order.
    Lagged(usize, usize),
    /// What is left of the pool before the record, through a lag.
    Before(usize),
    /// A wave of the season.
    Wave(usize),
    /// A shape of ageing.
    Age(usize),
}

impl Term {
    fn group(self) -> Group {
        match self {
            Self::Direct(input) | Self::Lagged(input, _) => Group::Input(input),
            Self::Before(_) => Group::Before,
            Self::Wave(_) => Group::Season,
            Self::Age(_) => Group::Ageing,
        }
    }
}

/// The columns of an embankment, alike for every gauge.
#[derive(Debug, Clone)]
pub(crate) struct Lagged {
    inputs: Vec<Input>,
    /// Columns of each gauge, in order.
    pub(crate) terms: Vec<Term>,
    /// Groups of them, each once.
    pub(crate) groups: Vec<Group>,
    /// Group of each term, by order.
    pub(crate) group_of: Vec<usize>,
    pub(crate) scaling: Scaling,
    pool: usize,
    drives: usize,
    gauges: usize,
    lags: Drive,
}

/// What the columns remember from block to block.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Memory {
    /// Inputs through the lags (lags by inputs); `None` before the first block.
    state: Option<DMatrix<f64>>,
    /// Each input at the end of the last block.
    entering: Vec<f64>,
    /// How far the pool lay beyond the range of history, as it is still felt \[Pa\].
    beyond: f64,
}

/// How far the pool lies beyond what history has seen.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Beyond {
    /// Variance that this adds to each gauge's expectation \[Pa^2\].
    pub(crate) variance: Vec<f64>,
    /// Whether it is too far to judge any gauge.
    pub(crate) blind: bool,
}

impl Lagged {
    /// Lays out the columns.
    ///
    /// # Errors
    /// [`ModelError::Size`] where the scaling is of another embankment, [`ModelError::Parameter`] without a pool.
    pub(crate) fn new(
        embankment: &Embankment,
        scaling: &Scaling,
        gauges: usize,
        block: f64,
    ) -> Result<Self, ModelError> {
        let pools: Vec<usize> = (0..embankment.drives.len())
            .filter(|&d| embankment.drives[d] == Driver::Pool)
            .collect();
        let &[pool] = pools.as_slice() else {
            return Err(ModelError::Size {
                what: "pools of the embankment",
                found: pools.len(),
                expected: 1,
            });
        };
        let drives = embankment.drives.len();
        size("drives of the scaling", scaling.centre.len(), drives)?;
        let inputs = Input::all(embankment);
        let mut terms = Vec::new();
        for (index, input) in inputs.iter().enumerate() {
            if input.direct() {
                terms.push(Term::Direct(index));
            }
            terms.extend(
                input
                    .lags(block)
                    .into_iter()
                    .map(|lag| Term::Lagged(index, lag)),
            );
        }
        terms.extend((BEFORE..LAGS.len()).map(Term::Before));
        if embankment.season {
            terms.extend((0..WAVES).map(Term::Wave));
        }
        if embankment.ageing {
            terms.extend((0..AGES).map(Term::Age));
        }
        let mut groups: Vec<Group> = terms.iter().map(|t| t.group()).collect();
        groups.sort();
        groups.dedup();
        let group_of = terms
            .iter()
            .map(|t| groups.iter().position(|g| *g == t.group()).unwrap_or(0))
            .collect();
        let mut scaling = scaling.clone();
        if scaling.share.is_empty() {
            scaling.share = vec![1.0; gauges * groups.len()];
        }
        size(
            "shares of the scaling",
            scaling.share.len(),
            gauges * groups.len(),
        )?;
        size("gauges of the scaling", scaling.gauge.len(), gauges)?;
        Ok(Self {
            inputs,
            terms,
            groups,
            group_of,
            scaling,
            pool,
            drives,
            gauges,
            lags: Drive::new(DVector::from_iterator(
                LAGS.len(),
                LAGS.iter().map(|t| 1.0 / t),
            )),
        })
    }

    /// Number of drives in a block.
    pub(crate) fn drives(&self) -> usize {
        self.drives
    }

    /// Number of columns, of all gauges.
    pub(crate) fn len(&self) -> usize {
        self.gauges * self.terms.len()
    }

    /// Gauge of a column, by order.
    pub(crate) fn gauge_of(&self, column: usize) -> usize {
        column / self.terms.len()
    }

    /// Whether a term is an answer to the pool's level, which a lasting change of it would bring in full.
    pub(crate) fn of_pool(&self, term: Term) -> bool {
        let (Term::Direct(input) | Term::Lagged(input, _)) = term else {
            return false;
        };
        self.inputs[input].driver == Driver::Pool && !self.inputs[input].square
    }

    /// Standard deviation of the pool over the history \[Pa\].
    pub(crate) fn pool_spread(&self) -> f64 {
        self.scaling.spread[self.pool]
    }

    /// Memory before the first block.
    pub(crate) fn start(&self) -> Memory {
        Memory {
            state: None,
            entering: Vec::new(),
            beyond: 0.0,
        }
    }

    /// Last value of every drive, each in its own unit; the mean where it is rain, or where nothing was seen yet.
    pub(crate) fn last(&self, memory: &Memory) -> Vec<f64> {
        let mut last = self.scaling.centre.clone();
        for (input, unit) in self.inputs.iter().zip(&memory.entering) {
            if !input.square && input.driver != Driver::Rain {
                last[input.drive] += unit * self.scaling.spread[input.drive];
            }
        }
        last
    }

    /// Puts the mean in place of drives of a block that have lapsed.
    pub(crate) fn as_usual_where_lapsed(&self, block: &Block, drives: &mut Sampled) {
        let paths = block.rates.iter().zip(&mut drives.rates);
        for ((path, values), centre) in paths.zip(&self.scaling.centre) {
            if path.known == RateKnown::Lapsed {
                values.fill(*centre);
            }
        }
    }

    /// Columns of a block (gauges by columns); `elapsed` is the time from the record's start to the block's middle.
    pub(crate) fn step(
        &mut self,
        memory: &mut Memory,
        drives: &Sampled,
        elapsed: f64,
    ) -> DMatrix<f64> {
        let sampled = inputs(drives, &self.inputs, &self.scaling);
        let (count, width) = (self.inputs.len(), self.len());
        let tables = self.lags.tables(&sampled.geometry);
        let mut state = memory.state.take().unwrap_or_else(|| {
            // The record begins in mid-flow: rain had been as usual, the rest as it was first read.
            memory.entering = self
                .inputs
                .iter()
                .zip(&sampled.rates)
                .map(|(input, values)| match input.driver {
                    Driver::Rain => 0.0,
                    _ => values.first().copied().unwrap_or(0.0),
                })
                .collect();
            DMatrix::from_fn(LAGS.len(), count, |lag, input| {
                LAGS[lag] * memory.entering[input]
            })
        });
        let driven = tables.drive(&sampled, &|_, _| true);
        let seen = means(tables, &state, &driven.mean);
        let held: Vec<Vec<f64>> = (0..count)
            .map(|input| sampled.held(input, memory.entering[input], &|_| true))
            .collect();
        let turn = TAU * (sampled.start + 0.5 * sampled.geometry.length) / YEAR;
        let mut out = DMatrix::zeros(self.gauges, width);
        for gauge in 0..self.gauges {
            let class = sampled.class[gauge];
            for (index, &term) in self.terms.iter().enumerate() {
                let unit = match term {
                    Term::Direct(input) => held[input][class],
                    Term::Lagged(input, lag) => seen[class][(lag, input)] / LAGS[lag],
                    Term::Before(lag) => (-elapsed / LAGS[lag]).exp(),
                    Term::Wave(0) => turn.sin(),
                    Term::Wave(1) => turn.cos(),
                    Term::Wave(2) => (2.0 * turn).sin(),
                    Term::Wave(_) => (2.0 * turn).cos(),
                    Term::Age(0) => (elapsed / AGED.0).ln_1p() / (YEAR / AGED.0).ln_1p(),
                    Term::Age(1) => -(-elapsed / AGED.1).exp_m1(),
                    Term::Age(_) => elapsed / YEAR,
                };
                let share = self.scaling.share[gauge * self.groups.len() + self.group_of[index]];
                out[(gauge, gauge * self.terms.len() + index)] =
                    self.scaling.gauge[gauge] * share * unit;
            }
        }
        for mut column in state.column_iter_mut() {
            column.component_mul_assign(&tables.decay);
        }
        memory.state = Some(state + driven.end);
        for (entering, values) in memory.entering.iter_mut().zip(&sampled.rates) {
            *entering = values.last().copied().unwrap_or(*entering);
        }
        out
    }

    /// How far the pool lies beyond what history has seen, or has lain lately; `None` where it does not.
    pub(crate) fn beyond(&self, memory: &mut Memory, drives: &Sampled) -> Option<Beyond> {
        let (least, greatest) = self.scaling.range[self.pool];
        let over = |value: &f64| (value - greatest).max(least - value);
        let excess = drives.rates[self.pool]
            .iter()
            .map(over)
            .fold(0.0_f64, f64::max);
        let felt = memory.beyond * (-drives.geometry.length / FELT).exp();
        memory.beyond = excess.max(felt);
        (memory.beyond > LITTLE).then(|| Beyond {
            variance: self
                .scaling
                .beyond
                .iter()
                .map(|doubt| (doubt * memory.beyond).powi(2))
                .collect(),
            blind: excess > OUTSIDE * (greatest - least),
        })
    }
}
