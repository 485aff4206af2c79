//! The fit: damped Gauss-Newton in the logarithms of the parameters, everything else linear.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over columns, gauges and wells laid out by the same code"
)]

use nalgebra::{DMatrix, DVector};

use super::history::{History, Regression, Solved};
use super::places::Places;
use super::relevance::{Group, learn};
use super::suspect::{BELIEVED, OCCAM, STRENGTH_SD, Suspect, best_line};
use super::unsteady::relative_square;
use super::{Calibration, CommissionSettings, Unsteady, calm};
use crate::ModelError;
use crate::block::Block;
use crate::expect::columns::{Columns, Kind, LAGS, LONG_LAGS, Priors};
use crate::expect::drive::Sampled;
use crate::expect::frame::{Frame, factor, free_parameters, with_factor};
use crate::expect::noise::{Noise, Path};
use crate::expect::patched::Patched;
use crate::expect::whitener::Whitener;
use crate::ground::Ground;
use crate::reduce::{Factors, Reduced, layer_of};
use crate::weak_form::Parameter;
use crate::weigh::barrier::{Images, SEALING};

/// Share of a pair's response that its discrepancy is thought to be before history is asked.
const TYPICAL_DISCREPANCY: f64 = 0.001;
/// The same of a meter's gain in one rate epoch.
const TYPICAL_GAIN: f64 = 0.005;
/// Discrepancy at lags of weeks, and of the ground beyond the array, as multiples of the share of a pair as a rule.
const LONG: f64 = 1.0;
const FAR: f64 = 1.0;
/// Spread between patches before history is asked.
const TYPICAL_PATCH: f64 = 0.1;
/// Error of a source's response by what is not known of the ground next to it, as a share of the spread between patches.
const UNSEEN: f64 = 0.15;
/// Largest step of a logarithm in one round.
const LONGEST_STEP: f64 = 0.4;
/// Times that readings which are missing are worked out anew before anything is learned.
const FILLS: usize = 2;
/// Rounds in which all pairs are taken to see one ground; what makes them differ is learned about the best such ground,
/// or parameters and differences would run off against each other.
const PLAIN_ROUNDS: usize = 4;
/// Rounds in which a barrier is looked for, where one is: in the first the whole fan, then about the last one found.
const SEARCH_ROUNDS: usize = 3;
/// The first of them: parameters have come near their best without a barrier.
const SEARCH_FROM: usize = 3;
/// Spread between patches while a barrier is looked for.
const EVEN: f64 = 1e-3;
/// Spread between patches from which a barrier is looked for.
const UNEVEN: f64 = 0.15;
/// Largest step of a logarithm in a later round.
const SHORT_STEP: f64 = 0.05;
/// Least history \[s\].
const LEAST_HISTORY: f64 = 5.0 * 86_400.0;

/// Calibrates a ground on quiet history.
///
/// `progress` is told the share done, 0 to 1.
///
/// # Errors
/// [`ModelError::History`] where history is too short or a gauge is silent in it, others where the mathematics fails.
pub fn commission(
    ground: &Ground,
    reduced: &Reduced,
    history: &[Block],
    settings: &CommissionSettings,
    progress: &mut dyn FnMut(f64),
) -> Result<Calibration, ModelError> {
    let (Some(first), Some(last)) = (history.first(), history.last()) else {
        return Err(ModelError::History("there is none".to_owned()));
    };
    let block = first.length;
    let length = history.len() as f64 * block;
    if length < LEAST_HISTORY {
        return Err(ModelError::History(format!(
            "it lasts {:.1} days, but at least {:.0} days are needed",
            length / 86_400.0,
            LEAST_HISTORY / 86_400.0
        )));
    }
    let mut fit = Fit::start(ground, reduced, history, settings, block)?;
    fit.settle(&mut |share| progress(0.05 + 0.45 * share))?;
    if fit.state.scales.patch.iter().copied().fold(0.0, f64::max) > UNEVEN {
        // So uneven a ground may be an even one with a barrier.
        let mut other = Fit::start(ground, reduced, history, settings, block)?;
        other.state.barrier = Some(None);
        other.state.scales.patch = [EVEN; 2];
        other.settle(&mut |share| progress(0.5 + 0.3 * share))?;
        let log_evidence = other.log_evidence - fit.log_evidence - OCCAM;
        if let Some(Some(suspect)) = &mut other.state.barrier {
            suspect.log_evidence = log_evidence;
            if log_evidence > BELIEVED {
                fit = other;
            }
        }
    }
    progress(0.8);
    let calibration = fit.finish(history, (first.index, last.index))?;
    progress(1.0);
    Ok(calibration)
}

/// Declared rates as stretches before the record: when each began and ended before it, and its rate.
fn declared(past: &[Vec<(f64, f64)>], record: f64) -> Vec<Vec<(f64, f64, f64)>> {
    past.iter()
        .map(|rates| {
            let ends = rates.iter().skip(1).map(|r| r.0).chain([record]);
            rates
                .iter()
                .zip(ends)
                .map(|(&(began, rate), ended)| (record - began, (record - ended).max(0.0), rate))
                .filter(|(began, ended, _)| began > ended)
                .collect()
        })
        .collect()
}

/// 1 for storage, 0 for conduction.
fn storage(parameter: Parameter) -> usize {
    usize::from(matches!(parameter, Parameter::PatchStorativity(..)))
}

/// The state of the fit.
struct Fit<'a> {
    ground: &'a Ground,
    reduced: &'a Reduced,
    history: &'a [Block],
    settings: &'a CommissionSettings,
    block: f64,
    priors: Priors,
    state: State,
    /// Log marginal likelihood of the history in the last round.
    log_evidence: f64,
}

/// What the rounds move.
#[derive(Debug, Clone)]
struct State {
    factors: Factors,
    skins: Vec<f64>,
    noise: Noise,
    scales: Scales,
    /// Whether a barrier is looked for, and the one found.
    barrier: Option<Option<Suspect>>,
    /// Coefficients of the last round less what it moved into parameters and skins.
    rest: Option<DVector<f64>>,
}

/// Scales of groups of nuisances.
#[derive(Debug, Clone)]
struct Scales {
    /// Discrepancy of each pair, as a share of its response.
    share: Vec<f64>,
    /// A meter's gain in one rate epoch.
    gain: f64,
    /// Rates before the record, as a share of the largest.
    past: f64,
    /// Spread of the logarithm of transmissivity and storativity between patches.
    patch: [f64; 2],
}

impl<'a> Fit<'a> {
    fn start(
        ground: &'a Ground,
        reduced: &'a Reduced,
        history: &'a [Block],
        settings: &'a CommissionSettings,
        block: f64,
    ) -> Result<Self, ModelError> {
        let (gauges, wells) = (ground.gauges.len(), ground.wells.len());
        let rates = Rates::of(history, wells);
        let count = typical_count(history, gauges);
        let noise = Noise {
            gauge: ground
                .gauges
                .iter()
                .zip(&count)
                .map(|(g, n)| g.noise.max(1e-3) / n.sqrt())
                .collect(),
            wander: ground
                .gauges
                .iter()
                .zip(&count)
                .map(|(g, n)| 0.5 * g.noise.max(1e-3) / n.sqrt())
                .collect(),
            wander_memory: 5.0 * 86_400.0,
            meter: rates.largest.iter().map(|q| 0.005 * q).collect(),
            meter_memory: 86_400.0,
            meter_fresh: rates.largest.iter().map(|q| 0.002 * q).collect(),
        };
        let priors = Priors {
            offset: 1e5,
            drift: ground.gauges.iter().map(|g| 0.5 * g.drift).collect(),
            settling: ground
                .gauges
                .iter()
                .map(|g| 0.5 * g.drift * 0.25 * 365.25 * 86_400.0)
                .collect(),
            skin: settings.skin_sd,
            parameter: settings.parameter_sd,
            bias: settings.meter_bias,
            gain: 1.0,
            past: 1.0,
            declared: declared(&settings.past, history.first().map_or(0.0, Block::start)),
            patch: [1.0; 2],
            mismatch: 0.0,
            long: 1.0,
            far: 1.0,
            rate_rms: rates.rms.clone(),
            discrepancy: vec![1.0; gauges * wells],
            pair_spread: vec![0.0; gauges * wells],
            lag_spread: rates.lag_spread.clone(),
            rate: rates.largest.clone(),
        };
        let skins = ground.wells.iter().map(|w| w.skin.max(0.0)).collect();
        let factors = free_parameters(reduced)
            .into_iter()
            .map(|p| (p, 1.0))
            .collect();
        Ok(Self {
            ground,
            reduced,
            history,
            settings,
            block,
            priors,
            state: State {
                factors,
                skins,
                noise,
                scales: Scales {
                    share: vec![0.003; gauges * wells],
                    gain: TYPICAL_GAIN,
                    past: 0.01,
                    patch: [TYPICAL_PATCH; 2],
                },
                barrier: None,
                rest: None,
            },
            log_evidence: f64::NEG_INFINITY,
        })
    }

    fn suspect(&self) -> Option<Suspect> {
        self.state.barrier.flatten()
    }

    /// First round in which scales are learned.
    fn let_in(&self) -> usize {
        PLAIN_ROUNDS
            + if self.state.barrier.is_some() {
                SEARCH_ROUNDS
            } else {
                0
            }
    }

    /// All rounds.
    fn settle(&mut self, progress: &mut dyn FnMut(f64)) -> Result<(), ModelError> {
        let let_in = self.let_in();
        let rounds = self.settings.rounds + let_in - PLAIN_ROUNDS;
        let mut best = (f64::NEG_INFINITY, None);
        for round in 0..rounds {
            progress(round as f64 / rounds as f64);
            if round == let_in {
                self.state.scales.patch = [TYPICAL_PATCH; 2];
            }
            let before = self.state.clone();
            let moved = self.round(round)?;
            if round > let_in && self.log_evidence > best.0 {
                // The evidence is that of the parameters before this round's step, under the scales learned in it.
                let (scales, barrier) = (self.state.scales.clone(), self.state.barrier);
                let state = State {
                    scales,
                    barrier,
                    ..before
                };
                best = (self.log_evidence, Some(state));
            }
            if round >= let_in + 2 && moved < 2e-3 {
                break;
            }
        }
        if let (log_evidence, Some(state)) = best {
            self.log_evidence = log_evidence;
            self.state = state;
        }
        Ok(())
    }

    fn columns(&self) -> Result<Columns, ModelError> {
        let frame = Frame::new(self.ground, self.reduced, &self.state.factors)?;
        let patched = Patched::of(self.reduced, &frame.modal, &self.state.factors)?;
        Ok(Columns::new(
            frame,
            patched,
            self.priors.clone(),
            &self.state.skins,
        ))
    }

    /// Prior standard deviation and mean of every coefficient.
    fn spread(&self, columns: &Columns, width: usize, tail: usize) -> (DVector<f64>, DVector<f64>) {
        let mut spread = DVector::from_element(width, 1.0);
        let mut centre = DVector::zeros(width);
        for (index, kind) in columns.kinds.iter().enumerate() {
            match *kind {
                Kind::Discrepancy { gauge, well, lag } => {
                    spread[index] = if lag < LONG_LAGS {
                        self.state.scales.share[gauge * columns.frame.wells + well]
                    } else {
                        LONG * self.usual_share()
                    };
                }
                Kind::Past { .. } => spread[index] = self.state.scales.past,
                Kind::Far { .. } => spread[index] = FAR * self.usual_share(),
                // The prior is about the described value, wherever the fit now stands.
                Kind::Parameter(i) => {
                    if let Some(tilted) = columns.frame.tilted.get(i) {
                        centre[index] = -factor(&self.state.factors, tilted.parameter).ln()
                            / self.priors.parameter;
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i)
                        && let (Some(skin), Some(described)) =
                            (self.state.skins.get(well), self.ground.wells.get(well))
                    {
                        centre[index] = (described.skin.max(0.0) - skin) / self.priors.skin;
                    }
                }
                Kind::Patch(i) => {
                    if let Some(parameter) = columns.patch(i) {
                        spread[index] = self.state.scales.patch[storage(parameter)];
                        centre[index] = -factor(&self.state.factors, parameter).ln();
                    }
                }
                _ => {}
            }
        }
        for index in columns.len()..width - tail {
            spread[index] = self.state.scales.gain;
        }
        if self.suspect().is_some() {
            centre[width - 1] = SEALING / STRENGTH_SD;
        }
        (spread, centre)
    }

    /// Discrepancy of a pair as a rule, as a share of its response.
    fn usual_share(&self) -> f64 {
        let count = self.state.scales.share.len().max(1) as f64;
        (self.state.scales.share.iter().map(|s| s * s).sum::<f64>() / count).sqrt()
    }

    fn whitener(&self, columns: &Columns) -> Result<Whitener, ModelError> {
        let path = Path::of(&columns.frame.modal, self.block);
        Whitener::new(&path, &self.state.noise, &columns.skin_paths(), self.block)
    }

    /// One round: columns at the present parameters, scales learned, parameters and skins moved. Returns the longest move.
    fn round(&mut self, round: usize) -> Result<f64, ModelError> {
        let mut columns = self.columns()?;
        let let_in = self.let_in();
        let searched = self.state.barrier.is_some() && round >= SEARCH_FROM;
        let images = (searched || self.suspect().is_some()).then(|| self.images(&columns));
        let mut history = History::run(&mut columns, self.history, images.as_ref())?;
        self.priors.pair_spread.clone_from(&history.pair_spread);
        if round == 0 {
            columns = self.columns()?;
            history = History::run(&mut columns, self.history, None)?;
        }
        if self.suspect().is_some() && !searched {
            history.take(0, STRENGTH_SD);
        }
        match &self.state.rest {
            Some(rest) => history.fill(rest),
            None => history.fill(&DVector::zeros(0)),
        }
        let whitener = self.whitener(&columns)?;
        let mut regression = history.whiten(&whitener);
        if round == 0 && !history.missing.is_empty() {
            // Before anything is learned, what was not read must fit in with what was.
            for _ in 0..FILLS {
                let (spread, centre) = self.spread(&columns, regression.z.len(), history.tail());
                history.fill(&regression.solve(&spread, &centre)?.mean);
                regression = history.whiten(&whitener);
            }
        }
        if searched {
            self.search(&columns, &mut history, &regression, &whitener)?;
            regression = history.whiten(&whitener);
        }
        let solved = self.learn_scales(&columns, &regression, history.tail(), round)?;
        self.log_evidence =
            solved.log_likelihood - whitener.log_scale() * self.history.len() as f64;
        let mut rest = solved.mean.clone();
        let longest = if round < let_in {
            LONGEST_STEP
        } else {
            SHORT_STEP
        };
        let mut moved = 0.0_f64;
        for (index, kind) in columns.kinds.iter().enumerate() {
            match *kind {
                Kind::Parameter(i) => {
                    if let Some(tilted) = columns.frame.tilted.get(i) {
                        let step =
                            (solved.mean[index] * self.priors.parameter).clamp(-longest, longest);
                        moved = moved.max(step.abs());
                        rest[index] -= step / self.priors.parameter;
                        let value = factor(&self.state.factors, tilted.parameter) * step.exp();
                        self.state.factors =
                            with_factor(&self.state.factors, tilted.parameter, value);
                    }
                }
                Kind::Patch(i) => {
                    if let Some(parameter) = columns.patch(i) {
                        let step = solved.mean[index].clamp(-longest, longest);
                        moved = moved.max(0.1 * step.abs());
                        rest[index] -= step;
                        let value = factor(&self.state.factors, parameter) * step.exp();
                        self.state.factors = with_factor(&self.state.factors, parameter, value);
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i)
                        && let Some(skin) = self.state.skins.get_mut(well)
                    {
                        *skin += solved.mean[index] * self.priors.skin;
                        rest[index] = 0.0;
                    }
                }
                _ => {}
            }
        }
        self.state.factors.sort_by_key(|(p, _)| *p);
        let strides: &[f64] = match round {
            1 => &[2.0],
            2 => &[1.4],
            _ if round == let_in => &[2.0],
            _ if round == let_in + 1 => &[1.4, 1.2],
            _ => &[],
        };
        if !strides.is_empty() {
            self.learn_noise(&columns, &history, &solved, strides)?;
        }
        self.state.rest = Some(rest);
        Ok(moved)
    }

    /// The images behind the barrier that history asks for.
    fn images(&self, columns: &Columns) -> Images {
        let places = Places::of(self.ground);
        let line = self
            .suspect()
            .and_then(|s| places.line(self.ground, s.azimuth, s.distance));
        Images::new(&columns.frame.modal, line.as_slice())
    }

    /// Looks for the barrier that explains most of what is left without one, and takes it in.
    fn search(
        &mut self,
        columns: &Columns,
        history: &mut History,
        regression: &Regression,
        whitener: &Whitener,
    ) -> Result<(), ModelError> {
        let tail = history.tail();
        let known = self.state.barrier.take();
        let (spread, centre) = self.spread(columns, regression.z.len(), tail);
        let solved = regression.solve(&spread, &centre)?;
        let from = known.flatten();
        let found = best_line(
            self.ground,
            columns,
            history,
            whitener,
            (regression, &solved),
            from.as_ref(),
        );
        self.state.barrier = Some(found);
        if found.is_some() {
            history.take(0, STRENGTH_SD);
        }
        Ok(())
    }

    /// Groups of columns whose scale is learned.
    fn groups(&self, columns: &Columns, width: usize, tail: usize) -> Vec<Group> {
        let (gauges, wells) = (columns.frame.gauges, columns.frame.wells);
        let mut groups: Vec<Group> = (0..gauges * wells)
            .map(|pair| Group {
                columns: Vec::new(),
                scale: self.state.scales.share[pair],
                typical: TYPICAL_DISCREPANCY,
                weight: 1.0,
            })
            .collect();
        let mut past = Group {
            columns: Vec::new(),
            scale: self.state.scales.past,
            typical: 0.003,
            weight: 1.0,
        };
        for (index, kind) in columns.kinds.iter().enumerate() {
            match *kind {
                // What history is too short to show is tied to how much pairs differ otherwise.
                Kind::Discrepancy { lag, .. } if lag >= LONG_LAGS => {}
                Kind::Discrepancy { gauge, well, .. } => {
                    if let Some(group) = groups.get_mut(gauge * wells + well) {
                        group.columns.push(index);
                    }
                }
                Kind::Past { .. } => past.columns.push(index),
                _ => {}
            }
        }
        groups.push(past);
        for side in [0, 1] {
            let members = columns
                .kinds
                .iter()
                .enumerate()
                .filter(|(_, kind)| match **kind {
                    Kind::Patch(i) => columns.patch(i).is_some_and(|p| storage(p) == side),
                    _ => false,
                });
            groups.push(Group {
                columns: members.map(|(index, _)| index).collect(),
                scale: self.state.scales.patch[side],
                typical: TYPICAL_PATCH,
                weight: 1.0,
            });
        }
        groups.push(Group {
            columns: (columns.len()..width - tail).collect(),
            scale: self.state.scales.gain,
            typical: TYPICAL_GAIN,
            weight: 4.0,
        });
        groups
    }

    fn learn_scales(
        &mut self,
        columns: &Columns,
        regression: &Regression,
        tail: usize,
        round: usize,
    ) -> Result<Solved, ModelError> {
        let width = regression.z.len();
        let (mut spread, centre) = self.spread(columns, width, tail);
        if round < self.let_in() {
            return regression.solve(&spread, &centre);
        }
        let mut groups = self.groups(columns, width, tail);
        let solved = learn(regression, &mut groups, &mut spread, &centre)?;
        let pairs = self.state.scales.share.len();
        for (share, group) in self.state.scales.share.iter_mut().zip(&groups) {
            *share = group.scale;
        }
        if let Some([past, conduction, storage, gain]) = groups.get(pairs..) {
            self.state.scales.past = past.scale.min(1.0);
            self.state.scales.patch = [conduction.scale, storage.scale];
            self.state.scales.gain = gain.scale;
        }
        Ok(solved)
    }

    /// Log marginal likelihood under other noise.
    fn try_noise(
        &self,
        columns: &Columns,
        path: &Path,
        part: &History,
        spread: &DVector<f64>,
        noise: &Noise,
    ) -> Result<f64, ModelError> {
        let whitener = Whitener::new(path, noise, &columns.skin_paths(), self.block)?;
        let regression = part.whiten(&whitener);
        let solved = regression.solve(spread, &DVector::zeros(spread.len()))?;
        Ok(solved.log_likelihood - whitener.log_scale() * self.history.len() as f64)
    }

    /// Moves each figure of the noise while the marginal likelihood grows. What could pass for a meter's or a gauge's slow
    /// error is marginalised, or it would make that error look shorter than it is; the rest is taken as fitted.
    fn learn_noise(
        &mut self,
        columns: &Columns,
        history: &History,
        solved: &Solved,
        strides: &[f64],
    ) -> Result<(), ModelError> {
        let width = history.raw.ncols() - 1;
        let (spread, _) = self.spread(columns, width, history.tail());
        let kept: Vec<usize> = (0..width)
            .filter(|&index| {
                !matches!(
                    columns.kinds.get(index),
                    Some(
                        Kind::Patch(_)
                            | Kind::Discrepancy { .. }
                            | Kind::Far { .. }
                            | Kind::Past { .. }
                    )
                )
            })
            .collect();
        let part = history.part(&kept, &solved.mean);
        let spread = DVector::from_iterator(kept.len(), kept.iter().map(|&i| spread[i]));
        let path = Path::of(&columns.frame.modal, self.block);
        let mut best = self.try_noise(columns, &path, &part, &spread, &self.state.noise)?;
        let gauges = self.state.noise.gauge.len();
        let mut knobs: Vec<Knob> = vec![
            Knob::Gauges,
            Knob::Wander,
            Knob::Meter,
            Knob::MeterMemory,
            Knob::MeterFresh,
        ];
        // A gauge's own noise is told from the common figure only once the rest is settled.
        if strides.len() > 1 {
            knobs.extend((0..gauges).map(Knob::Gauge));
        }
        for &stride in strides {
            for &knob in &knobs {
                for factor in [stride, 1.0 / stride] {
                    let mut improved = false;
                    for _ in 0..3 {
                        let mut next = self.state.noise.clone();
                        knob.turn(&mut next, factor);
                        let value = self.try_noise(columns, &path, &part, &spread, &next)?;
                        if value <= best + 0.5 {
                            break;
                        }
                        best = value;
                        self.state.noise = next;
                        improved = true;
                    }
                    if improved {
                        break;
                    }
                }
            }
        }
        Ok(())
    }

    fn finish(&mut self, blocks: &[Block], span: (i64, i64)) -> Result<Calibration, ModelError> {
        let mut columns = self.columns()?;
        let images = self.suspect().map(|_| self.images(&columns));
        let mut history = History::run(&mut columns, self.history, images.as_ref())?;
        if self.suspect().is_some() {
            history.take(0, STRENGTH_SD);
        }
        if let Some(rest) = &self.state.rest {
            history.fill(rest);
        }
        let mut whitener = self.whitener(&columns)?;
        let mut regression = history.whiten(&whitener);
        let width = regression.z.len();
        let (spread, centre) = self.spread(&columns, width, history.tail());
        let solved = regression.solve(&spread, &centre)?;
        let (gauges, wells) = (columns.frame.gauges, columns.frame.wells);
        let sampled: Vec<Sampled> = blocks
            .iter()
            .map(|b| Sampled::of(b, wells, gauges))
            .collect::<Result<_, _>>()?;
        let left = regression.left(&solved.mean);
        let unsteady: Vec<Unsteady> = columns
            .frame
            .in_wells
            .iter()
            .map(|&(gauge, well, _)| {
                let squares: Vec<(f64, f64)> = sampled
                    .iter()
                    .enumerate()
                    .map(|(block, s)| {
                        (
                            relative_square(s, well, &self.priors.rate),
                            left[block * gauges + gauge].powi(2),
                        )
                    })
                    .collect();
                Unsteady::fit(gauge, well, &squares)
            })
            .collect();
        for (block, s) in sampled.iter().enumerate() {
            for (gauge, factor) in calm(&unsteady, s, &self.priors.rate, gauges)
                .into_iter()
                .enumerate()
            {
                regression
                    .rows
                    .row_mut(block * gauges + gauge)
                    .scale_mut(factor);
            }
        }
        let regression = Regression::of(regression.rows);
        let solved = regression.solve(&spread, &centre)?;
        let left = regression.left(&solved.mean);
        let summary = |left: &DVector<f64>| -> Vec<(f64, f64)> {
            (0..gauges)
                .map(|gauge| {
                    let series: Vec<f64> =
                        left.iter().skip(gauge).step_by(gauges).copied().collect();
                    spread_and_correlation(&series)
                })
                .collect()
        };
        let inflate: Vec<f64> = summary(&left).iter().map(|(sd, _)| sd.max(0.7)).collect();
        whitener.inflate(&inflate);
        let scaled = DVector::from_iterator(
            left.len(),
            left.iter()
                .enumerate()
                .map(|(i, v)| v / inflate[i % gauges]),
        );
        let inverse: DMatrix<f64> = solved.factor.inverse();
        let sd = |index: usize| inverse[(index, index)].max(0.0).sqrt();
        let layers: Factors = self
            .state
            .factors
            .iter()
            .filter(|(p, _)| layer_of(*p) == *p)
            .copied()
            .collect();
        let mut factor_sd = vec![0.0; layers.len()];
        let mut skin_sd = vec![self.settings.skin_sd; self.state.skins.len()];
        for (index, kind) in columns.kinds.iter().enumerate() {
            match *kind {
                Kind::Parameter(i) => {
                    if let Some(tilted) = columns.frame.tilted.get(i)
                        && let Some(at) = layers.iter().position(|(p, _)| *p == tilted.parameter)
                    {
                        factor_sd[at] = sd(index) * self.priors.parameter;
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i) {
                        skin_sd[well] = sd(index) * self.priors.skin;
                    }
                }
                _ => {}
            }
        }
        let innovation = whitener.innovation();
        let mut priors = self.priors.clone();
        priors.gain = self.state.scales.gain;
        priors.past = self.state.scales.past;
        priors.patch = self.state.scales.patch;
        priors.long = LONG * self.usual_share();
        priors.far = FAR * self.usual_share();
        priors.mismatch = self.usual_share() + UNSEEN * self.state.scales.patch[0];
        priors.discrepancy.clone_from(&self.state.scales.share);
        let rates = Rates::of(blocks, columns.frame.wells);
        let (factors, patches) = std::mem::take(&mut self.state.factors)
            .into_iter()
            .partition(|(p, _)| layer_of(*p) == *p);
        Ok(Calibration {
            factors,
            factor_sd,
            patches,
            patched: columns.patched.clone(),
            suspect: self.suspect(),
            skins: self.state.skins.clone(),
            skin_sd,
            noise: (0..gauges).map(|g| innovation[(g, g)].sqrt()).collect(),
            discrepancy: self.state.scales.share.clone(),
            block: self.block,
            blocks: span,
            left: summary(&scaled),
            reference: history.reference,
            stochastic: self.state.noise.clone(),
            priors,
            inflate,
            unsteady,
            longest_unchanged: longest_unchanged(blocks, gauges),
            flow: rates.flow,
        })
    }
}

/// A figure of the noise that is tried larger and smaller.
#[derive(Debug, Clone, Copy)]
enum Knob {
    Gauges,
    Wander,
    Meter,
    MeterMemory,
    MeterFresh,
    Gauge(usize),
}

impl Knob {
    fn turn(self, noise: &mut Noise, factor: f64) {
        let all = |list: &mut Vec<f64>| list.iter_mut().for_each(|v| *v *= factor);
        match self {
            Self::Gauges => all(&mut noise.gauge),
            Self::Wander => all(&mut noise.wander),
            Self::Meter => all(&mut noise.meter),
            Self::MeterMemory => noise.meter_memory *= factor,
            Self::MeterFresh => all(&mut noise.meter_fresh),
            Self::Gauge(g) => {
                if let Some(value) = noise.gauge.get_mut(g) {
                    *value *= factor;
                }
            }
        }
    }
}

/// What the rates of the history are like.
struct Rates {
    /// Root mean square rate of each well \[m3/s\].
    rms: Vec<f64>,
    /// Largest rate of each well \[m3/s\].
    largest: Vec<f64>,
    /// Spread of each well's lagged rate (lag by well) \[m3/s\].
    lag_spread: Vec<f64>,
    /// Mean total injection \[m3/s\].
    flow: f64,
}

impl Rates {
    fn of(history: &[Block], wells: usize) -> Self {
        let mut largest = vec![0.0_f64; wells];
        let mut lag_spread = vec![0.0; LAGS.len() * wells];
        let mut flow = 0.0;
        let mut rms = Vec::with_capacity(wells);
        for well in 0..wells {
            let mut series = Vec::with_capacity(history.len());
            for block in history {
                let mut from = 0.0;
                let mut sum = 0.0;
                for &(until, rate) in block.rates.get(well).map_or(&[][..], |p| &p.pieces) {
                    sum += rate * (until - from);
                    from = until;
                    largest[well] = largest[well].max(rate.abs());
                }
                series.push(sum / block.length);
            }
            let length = history.first().map_or(1.0, |b| b.length);
            for (lag, time) in LAGS.iter().enumerate() {
                let keep = (-length / time).exp();
                let mut value = 0.0;
                let lagged: Vec<f64> = series
                    .iter()
                    .map(|rate| {
                        value = keep * value + (1.0 - keep) * rate;
                        value
                    })
                    .collect();
                lag_spread[lag * wells + well] = spread_and_correlation(&lagged).0;
            }
            rms.push(
                (series.iter().map(|q| q * q).sum::<f64>() / series.len().max(1) as f64).sqrt(),
            );
            flow += series.iter().map(|q| q.abs()).sum::<f64>() / series.len().max(1) as f64;
        }
        Self {
            rms,
            largest,
            lag_spread,
            flow,
        }
    }
}

/// Readings in a block of each gauge, as a rule.
fn typical_count(history: &[Block], gauges: usize) -> Vec<f64> {
    (0..gauges)
        .map(|gauge| {
            let counts = history
                .iter()
                .filter_map(|b| b.gauges.get(gauge).and_then(Option::as_ref))
                .map(|g| f64::from(g.count))
                .collect();
            super::history::median(counts).max(1.0)
        })
        .collect()
}

/// Longest run of blocks without a change of the raw value, by gauge.
fn longest_unchanged(history: &[Block], gauges: usize) -> Vec<u32> {
    (0..gauges)
        .map(|gauge| {
            let (mut run, mut longest) = (0, 0);
            for block in history {
                if let Some(Some(read)) = block.gauges.get(gauge) {
                    run = if read.changed { 0 } else { run + 1 };
                    longest = longest.max(run);
                }
            }
            longest
        })
        .collect()
}

/// Standard deviation and lag-1 correlation of a series.
pub(crate) fn spread_and_correlation(series: &[f64]) -> (f64, f64) {
    let count = series.len().max(2) as f64;
    let mean = series.iter().sum::<f64>() / count;
    let variance = series.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / count;
    let together: f64 = series
        .iter()
        .zip(series.iter().skip(1))
        .map(|(a, b)| (a - mean) * (b - mean))
        .sum::<f64>()
        / count;
    (
        variance.sqrt(),
        if variance > 0.0 {
            together / variance
        } else {
            0.0
        },
    )
}
