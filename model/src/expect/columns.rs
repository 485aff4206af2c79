//! The constant-coefficient nuisances as columns: everything a gauge can show that is no cause.
//!
//! Every column is scaled by its prior standard deviation, so that all coefficients have a standard normal prior.
//! Fixed columns exist from the first block on: offset, drift within specification and settling of each gauge, skin
//! of each well with a gauge in it, error of each fitted parameter, bias of each meter, what the ground may be like in
//! each patch, discrepancy of each pair, and
//! the rates before the record. Further columns come and go: a meter's gain in each rate epoch (a meter errs in
//! proportion to its rate, and differently at each), readings that are missing, rates that are unknown.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges, wells and columns laid out by the same code"
)]

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};

use super::drive::{Drive, Driven, Sampled, Tables, gain};
use super::epochs::Epochs;
use super::frame::{Frame, held, means, seen};
use super::patched::{self, Patched};
use crate::ModelError;
use crate::block::Block;
use crate::ground::Gauge;
use crate::lagged::columns::{self as lagged, Beyond, Lagged};
use crate::weak_form::Parameter;

/// What is known before the record of the size of each nuisance; learned at commissioning where marked.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Priors {
    /// Offset of each gauge about its reference \[Pa\].
    pub offset: f64,
    /// Drift of each gauge within its specification \[Pa/s\].
    pub drift: Vec<f64>,
    /// Final settling of each gauge \[Pa\].
    pub settling: Vec<f64>,
    /// Skin of a well.
    pub skin: f64,
    /// Logarithm of a parameter.
    pub parameter: f64,
    /// Bias of a meter, as a share.
    pub bias: f64,
    /// Gain of a meter in one rate epoch, as a share (learned).
    pub gain: f64,
    /// What each input is counted from: zero for a rate, its mean in the history for the pressure of open water \[Pa\].
    pub rest: Vec<f64>,
    /// Rates before the record, as a share of each well's largest rate (learned).
    pub past: f64,
    /// Declared rates of each well before the record: how long before it each stretch began and ended \[s\], and its
    /// rate \[m3/s\].
    pub declared: Vec<Vec<(f64, f64, f64)>>,
    /// Spread of the logarithm of transmissivity and of storativity between patches of the ground (learned).
    pub patch: [f64; 2],
    /// Relative error of the response to a source somewhere in the ground (tied to the shares and spreads learned).
    pub mismatch: f64,
    /// Discrepancy of each pair as a share of its response (learned; gauge by well, row-major by gauge).
    pub discrepancy: Vec<f64>,
    /// The same at lags of weeks and months, of all pairs (tied to the shares learned at shorter lags).
    pub long: f64,
    /// Discrepancy that all gauges feel alike, or growing across the array, at lags of days and longer: the ground beyond
    /// the array is not that within (tied to the shares learned).
    pub far: f64,
    /// Spread of each pair's response over the history \[Pa\], in the same order.
    pub pair_spread: Vec<f64>,
    /// Spread of each well's lagged rate over the history \[m3/s\] (lag by well, row-major by lag).
    pub lag_spread: Vec<f64>,
    /// Root mean square rate of each well in the history \[m3/s\].
    pub rate_rms: Vec<f64>,
    /// Largest rate of each well in the history \[m3/s\].
    pub rate: Vec<f64>,
}

/// Time constants of the discrepancy, two a decade \[s\]; the first [`OWN_LAGS`] act at a well's own gauge only.
pub(crate) const LAGS: [f64; 10] = [
    360.0,
    1_138.4,
    3_600.0,
    11_384.0,
    36_000.0,
    113_840.0,
    360_000.0,
    1_138_400.0,
    3_600_000.0,
    11_384_000.0,
];
/// From which of [`LAGS`] on the discrepancy is too slow for a season's history to show.
pub(crate) const LONG_LAGS: usize = 7;
/// From which of [`LAGS`] on what lies beyond the array is felt by all gauges alike.
pub(crate) const FAR_LAGS: usize = 6;
/// How many of [`LAGS`] are for a well's own gauge only.
pub(crate) const OWN_LAGS: usize = 2;
/// Time constant of a new gauge's settling \[s\].
const SETTLING: f64 = 15.0 * 86_400.0;
/// A meter's error jumps by this much of its standard deviation when its rate changes by its root mean square.
const RENEWED: f64 = 1.5;
/// Time in which the discrepancy's prior variance is regained \[s\].
const FORGOTTEN: f64 = 1e5 * 86_400.0;
/// The same of an embankment's answers, whose prior is many times what they are.
const LAGGED_FORGOTTEN: f64 = 1e8 * 86_400.0;
/// Ends of the windows of past rates \[s before the record\].
const PAST: [f64; 8] = [
    21_600.0,
    86_400.0,
    345_600.0,
    1_382_400.0,
    5_529_600.0,
    22_118_400.0,
    88_473_600.0,
    353_894_400.0,
];

/// Which nuisance a fixed column is.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Kind {
    Offset(usize),
    Drift(usize),
    Settling(usize),
    Skin(usize),
    Parameter(usize),
    Bias(usize),
    Patch(usize),
    Discrepancy {
        gauge: usize,
        well: usize,
        lag: usize,
    },
    Far {
        well: usize,
        lag: usize,
        moment: usize,
    },
    Past {
        well: usize,
    },
    /// A column of an embankment, by order.
    Lagged(usize),
}

/// The fixed columns of a site.
#[derive(Debug, Clone)]
pub(crate) struct Columns {
    pub(crate) frame: Frame,
    pub(crate) kinds: Vec<Kind>,
    pub(crate) priors: Priors,
    pub(crate) patched: Patched,
    lags: Drive,
    patch_lags: Drive,
    skins: Vec<f64>,
    /// Answers to drives, where the site is an embankment.
    pub(crate) lagged: Option<Lagged>,
}

/// What the columns remember from block to block.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Memory {
    /// Seconds since the record's first block.
    pub(crate) elapsed: f64,
    /// Unit-port states of the calibrated ground (modes by wells).
    pub(crate) base: DMatrix<f64>,
    /// The same for each tilted ground.
    tilted: Vec<DMatrix<f64>>,
    /// States of the lags (lags by wells).
    lags: DMatrix<f64>,
    /// States of the patches' lags (lags by wells).
    patch_lags: DMatrix<f64>,
    /// Well and state of each window of the past.
    past: Vec<(usize, DVector<f64>)>,
    /// Rate of each well at the end of the last block \[m3/s\].
    pub(crate) entering: Vec<f64>,
    /// Rate epochs.
    pub(crate) epochs: Epochs,
    /// What an embankment's columns remember.
    lagged: Option<lagged::Memory>,
}

/// One block of raw columns.
#[derive(Debug, Clone)]
pub(crate) struct Raw {
    /// Prediction of the calibrated ground \[Pa\].
    pub(crate) base: DVector<f64>,
    /// Response of each pair, skin included \[Pa\] (gauges by wells).
    pub(crate) pairs: DMatrix<f64>,
    /// Fixed columns (gauges by columns).
    pub(crate) fixed: DMatrix<f64>,
    /// Columns of the rate epochs, in their order (gauges by epochs with a column).
    pub(crate) epochs: DMatrix<f64>,
    /// Means of the unit-port states, by class.
    pub(crate) means: Vec<DMatrix<f64>>,
    /// How the block's geometry acts on the modes.
    pub(crate) tables: Tables,
    /// What the block's rates drove.
    pub(crate) driven: Driven,
    /// Wells whose rate changed level in the block, with the jump of their meter's error in its standard deviations.
    pub(crate) renewals: Vec<(usize, f64)>,
    /// Rate of each well before the block \[m3/s\].
    pub(crate) entering: Vec<f64>,
    /// How far an embankment's pool lies beyond what history has seen.
    pub(crate) beyond: Option<Beyond>,
}

impl Priors {
    /// Of gauges alone.
    pub(crate) fn of_gauges(gauges: &[Gauge]) -> Self {
        Self {
            offset: 1e5,
            drift: gauges.iter().map(|g| 0.5 * g.drift).collect(),
            settling: gauges
                .iter()
                .map(|g| 0.5 * g.drift * 0.25 * 365.25 * 86_400.0)
                .collect(),
            skin: 0.0,
            parameter: 0.0,
            bias: 0.0,
            gain: 0.0,
            past: 0.0,
            declared: Vec::new(),
            patch: [0.0; 2],
            mismatch: 0.0,
            discrepancy: Vec::new(),
            long: 0.0,
            far: 0.0,
            pair_spread: Vec::new(),
            lag_spread: Vec::new(),
            rate_rms: Vec::new(),
            rate: Vec::new(),
            rest: Vec::new(),
        }
    }
}

impl Columns {
    /// Lays out the columns of an embankment.
    pub(crate) fn of_embankment(frame: Frame, priors: Priors, lagged: Lagged) -> Self {
        let mut columns = Self::new(frame, Patched::default(), priors, &[]);
        columns.kinds.extend((0..lagged.len()).map(Kind::Lagged));
        columns.lagged = Some(lagged);
        columns
    }

    /// The columns that only one gauge shows, in order.
    pub(crate) fn of_gauge(&self, gauge: usize) -> Vec<usize> {
        let shows = |kind: &Kind| match (*kind, &self.lagged) {
            (Kind::Offset(g) | Kind::Drift(g) | Kind::Settling(g), _) => g == gauge,
            (Kind::Lagged(column), Some(lagged)) => lagged.gauge_of(column) == gauge,
            _ => false,
        };
        let kinds = self.kinds.iter().enumerate();
        kinds.filter(|(_, k)| shows(k)).map(|(i, _)| i).collect()
    }

    /// Lays out the columns.
    pub(crate) fn new(frame: Frame, patched: Patched, priors: Priors, skins: &[f64]) -> Self {
        let mut kinds = Vec::new();
        let (gauges, wells) = (frame.gauges, frame.wells);
        kinds.extend((0..gauges).map(Kind::Offset));
        kinds.extend((0..gauges).map(Kind::Drift));
        kinds.extend((0..gauges).map(Kind::Settling));
        kinds.extend((0..frame.in_wells.len()).map(Kind::Skin));
        kinds.extend((0..frame.tilted.len()).map(Kind::Parameter));
        kinds.extend((0..wells).map(Kind::Bias));
        kinds.extend((0..patched.len()).map(Kind::Patch));
        for gauge in 0..gauges {
            for well in 0..wells {
                let own = frame.well_of(gauge).is_some_and(|(w, _)| w == well);
                let first = if own { 0 } else { OWN_LAGS };
                kinds.extend((first..LAGS.len()).map(|lag| Kind::Discrepancy { gauge, well, lag }));
            }
        }
        for well in 0..wells {
            for lag in FAR_LAGS..LAGS.len() {
                kinds.extend((0..3).map(|moment| Kind::Far { well, lag, moment }));
            }
        }
        for well in 0..wells {
            kinds.extend(PAST.iter().map(|_| Kind::Past { well }));
        }
        let lags = Drive::new(DVector::from_iterator(
            LAGS.len(),
            LAGS.iter().map(|t| 1.0 / t),
        ));
        let patch_lags = Drive::new(patched::lags().map(f64::recip));
        Self {
            frame,
            kinds,
            priors,
            patched,
            lags,
            patch_lags,
            skins: skins.to_vec(),
            lagged: None,
        }
    }

    /// Takes a block apart, its inputs counted from where they rest.
    ///
    /// # Errors
    /// As [`Sampled::of`].
    pub(crate) fn sample(&self, block: &Block) -> Result<Sampled, ModelError> {
        let mut sampled = Sampled::of(block, self.frame.wells, self.drives(), self.frame.gauges)?;
        sampled.count_from(&self.priors.rest);
        if let (Some(lagged), Some(drives)) = (&self.lagged, &mut sampled.drives) {
            lagged.as_usual_where_lapsed(block, drives);
        }
        Ok(sampled)
    }

    /// What an embankment's drives go on from; `None` of a ground.
    pub(crate) fn last_drives(&self, memory: &Memory) -> Option<Vec<f64>> {
        let lagged = self.lagged.as_ref()?;
        Some(lagged.last(memory.lagged.as_ref()?))
    }

    /// Number of drives.
    pub(crate) fn drives(&self) -> usize {
        self.lagged.as_ref().map_or(0, Lagged::drives)
    }

    /// Number of fixed columns.
    pub(crate) fn len(&self) -> usize {
        self.kinds.len()
    }

    /// Prior variance that each fixed column regains in a second: what is known of a ground unlike the model wears off,
    /// because its columns only stand for it as rates have been.
    pub(crate) fn forgetting(&self) -> Vec<f64> {
        self.kinds
            .iter()
            .map(|kind| match kind {
                Kind::Patch(_) | Kind::Discrepancy { .. } | Kind::Far { .. } => 1.0 / FORGOTTEN,
                Kind::Lagged(_) => 1.0 / LAGGED_FORGOTTEN,
                _ => 0.0,
            })
            .collect()
    }

    /// Pressure per rate through skin, of each gauge in a well: gauge, well, Pa per m3/s.
    pub(crate) fn skin_paths(&self) -> Vec<(usize, usize, f64)> {
        self.frame
            .in_wells
            .iter()
            .map(|&(gauge, well, unit)| (gauge, well, unit * self.skin(well)))
            .collect()
    }

    fn skin(&self, well: usize) -> f64 {
        self.skins.get(well).copied().unwrap_or(0.0)
    }

    /// Memory before the first block.
    pub(crate) fn start(&self) -> Memory {
        let wells = self.frame.wells;
        let declared = &self.priors.declared;
        let lambda = &self.frame.modal.lambda;
        let mut past = Vec::new();
        for well in 0..wells {
            let mut from = 0.0;
            for until in PAST {
                let state = lambda.map(|l| (-l * from).exp() * gain(l, until - from));
                past.push((well, state));
                from = until;
            }
        }
        Memory {
            elapsed: 0.0,
            base: self.frame.base.drive.after(declared, wells),
            tilted: self
                .frame
                .tilted
                .iter()
                .map(|t| t.stepped.drive.after(declared, wells))
                .collect(),
            lags: self.lags.after(declared, wells),
            patch_lags: self.patch_lags.after(declared, wells),
            past,
            entering: vec![0.0; wells],
            epochs: Epochs::new(wells),
            lagged: self.lagged.as_ref().map(Lagged::start),
        }
    }

    /// Prior standard deviation of the logarithm of a patch's factor.
    pub(crate) fn patch_spread(&self, index: usize) -> f64 {
        let [transmissivity, storativity] = self.priors.patch;
        match self.patched.parameters.get(index) {
            Some(Parameter::PatchStorativity(..)) => storativity,
            _ => transmissivity,
        }
    }

    /// Which patch a column of [`Kind::Patch`] is about.
    pub(crate) fn patch(&self, index: usize) -> Option<Parameter> {
        self.patched.parameters.get(index).copied()
    }

    /// Columns of the patches for a block (gauges by patches), and the states of their lags at its end.
    fn patches(&mut self, memory: &Memory, sampled: &Sampled) -> (DMatrix<f64>, DMatrix<f64>) {
        let (gauges, wells) = (self.frame.gauges, self.frame.wells);
        let lags = patched::lags();
        let mut out = DMatrix::zeros(gauges, self.patched.len());
        if self.patched.len() == 0 {
            return (out, memory.patch_lags.clone());
        }
        let tables = self.patch_lags.tables(&sampled.geometry);
        let driven = tables.drive(sampled, &|_, _| true);
        let mut seen = means(tables, &memory.patch_lags, &driven.mean);
        for mean in &mut seen {
            for mut column in mean.column_iter_mut() {
                column.component_div_assign(&lags);
            }
        }
        for (patch, shares) in self.patched.shares.iter().enumerate() {
            for gauge in 0..gauges {
                let Some(mean) = sampled.class.get(gauge).and_then(|&c| seen.get(c)) else {
                    continue;
                };
                out[(gauge, patch)] = (0..wells)
                    .map(|well| {
                        let row = shares.row(gauge * wells + well);
                        row.iter()
                            .zip(mean.column(well).iter())
                            .map(|(a, b)| a * b)
                            .sum::<f64>()
                    })
                    .sum();
            }
        }
        let mut end = memory.patch_lags.clone();
        decay(&mut end, &tables.decay);
        (out, end + driven.end)
    }

    /// Computes the raw columns of a block and moves the memory to its end.
    ///
    /// # Errors
    /// [`ModelError`] where the block does not fit.
    pub(crate) fn step(
        &mut self,
        memory: &mut Memory,
        sampled: &Sampled,
    ) -> Result<Raw, ModelError> {
        let gauges = self.frame.gauges;
        let class = &sampled.class;
        if memory.elapsed == 0.0 {
            // The record begins in mid-flow: the rate before it is taken to be the first one read.
            for (entering, rates) in memory.entering.iter_mut().zip(&sampled.rates) {
                *entering = rates.first().copied().unwrap_or(0.0);
            }
        }
        let entering = memory.entering.clone();
        let held = held(sampled, &memory.entering);
        let tables = self.frame.base.drive.tables(&sampled.geometry).clone();
        let driven = tables.drive(sampled, &|_, _| true);
        let base_means = means(&tables, &memory.base, &driven.mean);
        let mut pairs = self.frame.base.pairs(&base_means, class);
        let bare = pairs.clone();
        let held_at =
            |gauge: usize, well: usize| held[(class.get(gauge).copied().unwrap_or(0), well)];
        for &(gauge, well, unit) in &self.frame.in_wells {
            pairs[(gauge, well)] += unit * self.skin(well) * held_at(gauge, well);
        }
        let base = pairs.column_sum();

        let mut tilts = Vec::with_capacity(self.frame.tilted.len());
        for (tilted, state) in self.frame.tilted.iter_mut().zip(&mut memory.tilted) {
            let tables = tilted.stepped.drive.tables(&sampled.geometry).clone();
            let driven = tables.drive(sampled, &|_, _| true);
            let means = means(&tables, state, &driven.mean);
            tilts.push((tilted.stepped.pairs(&means, class) - &bare) / tilted.step);
            decay(state, &tables.decay);
            *state += driven.end;
        }
        let lag_tables = self.lags.tables(&sampled.geometry).clone();
        let lag_driven = lag_tables.drive(sampled, &|_, _| true);
        let lag_means = means(&lag_tables, &memory.lags, &lag_driven.mean);
        let (patches, patch_end) = self.patches(memory, sampled);

        let mid = memory.elapsed + 0.5 * sampled.geometry.length;
        let priors = &self.priors;
        let mut fixed = DMatrix::zeros(gauges, self.kinds.len());
        let at = |list: &[f64], index: usize| list.get(index).copied().unwrap_or(0.0);
        let mut past_index = 0;
        for (column, kind) in self.kinds.iter().enumerate() {
            match *kind {
                Kind::Offset(g) => fixed[(g, column)] = priors.offset,
                Kind::Drift(g) => fixed[(g, column)] = at(&priors.drift, g) * mid,
                Kind::Settling(g) => {
                    fixed[(g, column)] = at(&priors.settling, g) * (-mid / SETTLING).exp()
                }
                Kind::Skin(i) => {
                    if let Some(&(gauge, well, unit)) = self.frame.in_wells.get(i) {
                        fixed[(gauge, column)] = priors.skin * unit * held_at(gauge, well);
                    }
                }
                Kind::Parameter(i) => {
                    if let Some(tilt) = tilts.get(i) {
                        fixed
                            .column_mut(column)
                            .axpy(priors.parameter, &tilt.column_sum(), 0.0);
                    }
                }
                Kind::Bias(w) => fixed
                    .column_mut(column)
                    .axpy(priors.bias, &pairs.column(w), 0.0),
                Kind::Patch(i) => {
                    fixed
                        .column_mut(column)
                        .axpy(self.patch_spread(i), &patches.column(i), 0.0)
                }
                Kind::Discrepancy { gauge, well, lag } => {
                    let pair = gauge * self.frame.wells + well;
                    let spread = at(&priors.lag_spread, lag * self.frame.wells + well);
                    let share = if lag < LONG_LAGS {
                        at(&priors.discrepancy, pair)
                    } else {
                        priors.long
                    };
                    let size = share * at(&priors.pair_spread, pair);
                    let mean = class.get(gauge).and_then(|&c| lag_means.get(c));
                    if let (Some(mean), Some(time), true) = (mean, LAGS.get(lag), spread > 0.0) {
                        fixed[(gauge, column)] = size * mean[(lag, well)] / time / spread;
                    }
                }
                Kind::Far { well, lag, moment } => {
                    let spread = at(&priors.lag_spread, lag * self.frame.wells + well);
                    let size =
                        priors.far * remote_spread(&priors.pair_spread, well, self.frame.wells);
                    for gauge in 0..gauges {
                        let mean = class.get(gauge).and_then(|&c| lag_means.get(c));
                        let place = self.frame.moments.get(gauge).and_then(|m| m.get(moment));
                        if let (Some(mean), Some(time), Some(place), true) =
                            (mean, LAGS.get(lag), place, spread > 0.0)
                        {
                            fixed[(gauge, column)] =
                                size * place * mean[(lag, well)] / time / spread;
                        }
                    }
                }
                Kind::Past { well } => {
                    if let Some((_, state)) = memory.past.get(past_index) {
                        let means: Vec<DVector<f64>> = tables
                            .mean_decay
                            .iter()
                            .map(|decay| state.component_mul(decay))
                            .collect();
                        let seen = seen(&self.frame.base, well, &means, class);
                        let size = priors.past * at(&priors.rate, well);
                        fixed.column_mut(column).axpy(size, &seen, 0.0);
                    }
                    past_index += 1;
                }
                Kind::Lagged(_) => {}
            }
        }
        let mut beyond = None;
        if let (Some(lagged), Some(memory), Some(drives)) =
            (&mut self.lagged, &mut memory.lagged, &sampled.drives)
        {
            let first = self.kinds.len() - lagged.len();
            beyond = lagged.beyond(memory, drives);
            fixed
                .columns_mut(first, lagged.len())
                .copy_from(&lagged.step(memory, drives, mid));
        }
        let epochs = memory.epochs.step(
            &self.frame,
            &tables,
            sampled,
            &memory.entering,
            priors,
            &|well| self.skins.get(well).copied().unwrap_or(0.0),
        );
        let renewals = memory
            .epochs
            .changes
            .iter()
            .map(|&(well, change)| {
                (
                    well,
                    RENEWED * change.abs() / at(&priors.rate_rms, well).max(f64::MIN_POSITIVE),
                )
            })
            .collect();
        decay(&mut memory.base, &tables.decay);
        memory.base += &driven.end;
        decay(&mut memory.lags, &lag_tables.decay);
        memory.lags += lag_driven.end;
        memory.patch_lags = patch_end;
        for (_, state) in &mut memory.past {
            state.component_mul_assign(&tables.decay);
        }
        for (entering, rates) in memory.entering.iter_mut().zip(&sampled.rates) {
            *entering = rates.last().copied().unwrap_or(*entering);
        }
        memory.elapsed += sampled.geometry.length;
        Ok(Raw {
            base,
            pairs,
            fixed,
            epochs,
            means: base_means,
            tables,
            driven,
            entering,
            renewals,
            beyond,
        })
    }
}

/// Smallest spread of a well's pairs: what comes from beyond the array is felt no more than by its remotest gauge.
fn remote_spread(pair_spread: &[f64], well: usize, wells: usize) -> f64 {
    let mine = pair_spread.iter().skip(well).step_by(wells.max(1));
    let least = mine.copied().fold(f64::INFINITY, f64::min);
    if least.is_finite() { least } else { 0.0 }
}

fn decay(state: &mut DMatrix<f64>, by: &DVector<f64>) {
    for mut column in state.column_iter_mut() {
        column.component_mul_assign(by);
    }
}
