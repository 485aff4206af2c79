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
/// Round in which the noise is settled.
const ROUND_FINE: usize = PLAIN_ROUNDS + 1;
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
    for round in 0..settings.rounds {
        progress(0.05 + 0.6 * round as f64 / settings.rounds as f64);
        let moved = fit.round(round)?;
        if round >= PLAIN_ROUNDS + 2 && moved < 2e-3 {
            break;
        }
    }
    progress(0.7);
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
    factors: Factors,
    skins: Vec<f64>,
    noise: Noise,
    priors: Priors,
    share: Vec<f64>,
    gain: f64,
    past: f64,
    /// Spread of the logarithm of transmissivity and storativity between patches.
    patch: [f64; 2],
    /// A barrier that history asks for.
    suspect: Option<Suspect>,
    /// Coefficients of the last round less what it moved into parameters and skins.
    rest: Option<DVector<f64>>,
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
            factors,
            skins,
            noise,
            priors,
            share: vec![0.003; gauges * wells],
            gain: TYPICAL_GAIN,
            past: 0.01,
            patch: [TYPICAL_PATCH; 2],
            suspect: None,
            rest: None,
        })
    }

    fn columns(&self) -> Result<Columns, ModelError> {
        let frame = Frame::new(self.ground, self.reduced, &self.factors)?;
        let patched = Patched::of(self.reduced, &frame.modal, &self.factors)?;
        Ok(Columns::new(
            frame,
            patched,
            self.priors.clone(),
            &self.skins,
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
                        self.share[gauge * columns.frame.wells + well]
                    } else {
                        LONG * self.usual_share()
                    };
                }
                Kind::Past { .. } => spread[index] = self.past,
                Kind::Far { .. } => spread[index] = FAR * self.usual_share(),
                // The prior is about the described value, wherever the fit now stands.
                Kind::Parameter(i) => {
                    if let Some(tilted) = columns.frame.tilted.get(i) {
                        centre[index] =
                            -factor(&self.factors, tilted.parameter).ln() / self.priors.parameter;
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i)
                        && let (Some(skin), Some(described)) =
                            (self.skins.get(well), self.ground.wells.get(well))
                    {
                        centre[index] = (described.skin.max(0.0) - skin) / self.priors.skin;
                    }
                }
                Kind::Patch(i) => {
                    if let Some(parameter) = columns.patch(i) {
                        spread[index] = self.patch[storage(parameter)];
                        centre[index] = -factor(&self.factors, parameter).ln();
                    }
                }
                _ => {}
            }
        }
        for index in columns.len()..width - tail {
            spread[index] = self.gain;
        }
        if self.suspect.is_some() {
            centre[width - 1] = SEALING / STRENGTH_SD;
        }
        (spread, centre)
    }

    /// Discrepancy of a pair as a rule, as a share of its response.
    fn usual_share(&self) -> f64 {
        let count = self.share.len().max(1) as f64;
        (self.share.iter().map(|s| s * s).sum::<f64>() / count).sqrt()
    }

    fn whitener(&self, columns: &Columns) -> Result<Whitener, ModelError> {
        let path = Path::of(&columns.frame.modal, self.block);
        Whitener::new(&path, &self.noise, &columns.skin_paths(), self.block)
    }

    /// One round: columns at the present parameters, scales learned, parameters and skins moved. Returns the longest move.
    fn round(&mut self, round: usize) -> Result<f64, ModelError> {
        let mut columns = self.columns()?;
        let looked_for = round == PLAIN_ROUNDS;
        let images = (looked_for || self.suspect.is_some()).then(|| self.images(&columns));
        let mut history = History::run(&mut columns, self.history, images.as_ref())?;
        self.priors.pair_spread.clone_from(&history.pair_spread);
        if round == 0 {
            columns = self.columns()?;
            history = History::run(&mut columns, self.history, None)?;
        }
        if self.suspect.is_some() {
            history.take(0, STRENGTH_SD);
        }
        match &self.rest {
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
        let mut solved = None;
        if looked_for {
            let found = self.look_for_barrier(&columns, &mut history, &regression, &whitener)?;
            if let Some((with, learned)) = found {
                (regression, solved) = (with, Some(learned));
            }
        }
        let solved = match solved {
            Some(solved) => solved,
            None => self.learn_scales(&columns, &regression, history.tail(), round)?,
        };
        let mut rest = solved.mean.clone();
        // A barrier just found frees the parameters of what they stood for.
        let freed = self.suspect.is_some() && round <= PLAIN_ROUNDS + 1;
        let longest = if round < PLAIN_ROUNDS || freed {
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
                        let value = factor(&self.factors, tilted.parameter) * step.exp();
                        self.factors = with_factor(&self.factors, tilted.parameter, value);
                    }
                }
                Kind::Patch(i) => {
                    if let Some(parameter) = columns.patch(i) {
                        let step = solved.mean[index].clamp(-longest, longest);
                        moved = moved.max(0.1 * step.abs());
                        rest[index] -= step;
                        let value = factor(&self.factors, parameter) * step.exp();
                        self.factors = with_factor(&self.factors, parameter, value);
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i)
                        && let Some(skin) = self.skins.get_mut(well)
                    {
                        *skin += solved.mean[index] * self.priors.skin;
                        rest[index] = 0.0;
                    }
                }
                _ => {}
            }
        }
        self.factors.sort_by_key(|(p, _)| *p);
        let strides: &[f64] = match round {
            1 | PLAIN_ROUNDS => &[2.0],
            2 => &[1.4],
            ROUND_FINE => &[1.4, 1.2],
            _ => &[],
        };
        if !strides.is_empty() {
            self.learn_noise(&columns, &history, &solved, strides)?;
        }
        self.rest = Some(rest);
        Ok(moved)
    }

    /// The images behind the barrier that history asks for.
    fn images(&self, columns: &Columns) -> Images {
        let places = Places::of(self.ground);
        let line = self
            .suspect
            .and_then(|s| places.line(self.ground, s.azimuth, s.distance));
        Images::new(&columns.frame.modal, line.as_slice())
    }

    /// Asks history with and without the barrier that explains most. Where it is believed, it is taken in, and the
    /// regression with it comes back solved.
    fn look_for_barrier(
        &mut self,
        columns: &Columns,
        history: &mut History,
        regression: &Regression,
        whitener: &Whitener,
    ) -> Result<Option<(Regression, Solved)>, ModelError> {
        let typical = (self.share.clone(), self.past, self.patch, self.gain);
        let plain = self.learn_scales(columns, regression, history.tail(), PLAIN_ROUNDS)?;
        let bare = history.clone();
        let found = best_line(
            self.ground,
            columns,
            history,
            whitener,
            regression,
            &plain,
        );
        let Some(line) = found else {
            return Ok(None);
        };
        let without = (self.share.clone(), self.past, self.patch, self.gain);
        (self.share, self.past, self.patch, self.gain) = typical.clone();
        history.take(0, STRENGTH_SD);
        let mut suspect = Suspect {
            azimuth: line.azimuth,
            distance: line.distance,
            log_evidence: 0.0,
        };
        self.suspect = Some(suspect);
        let with = history.whiten(whitener);
        let learned = self.learn_scales(columns, &with, history.tail(), PLAIN_ROUNDS)?;
        suspect.log_evidence = learned.log_likelihood - plain.log_likelihood - OCCAM;
        if suspect.log_evidence > BELIEVED {
            self.suspect = Some(suspect);
            return Ok(Some((with, learned)));
        }
        *history = bare;
        self.suspect = None;
        (self.share, self.past, self.patch, self.gain) = without;
        Ok(None)
    }

    /// Groups of columns whose scale is learned.
    fn groups(&self, columns: &Columns, width: usize, tail: usize) -> Vec<Group> {
        let (gauges, wells) = (columns.frame.gauges, columns.frame.wells);
        let mut groups: Vec<Group> = (0..gauges * wells)
            .map(|pair| Group {
                columns: Vec::new(),
                scale: self.share[pair],
                typical: TYPICAL_DISCREPANCY,
                weight: 1.0,
            })
            .collect();
        let mut past = Group {
            columns: Vec::new(),
            scale: self.past,
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
                scale: self.patch[side],
                typical: TYPICAL_PATCH,
                weight: 1.0,
            });
        }
        groups.push(Group {
            columns: (columns.len()..width - tail).collect(),
            scale: self.gain,
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
        if round < PLAIN_ROUNDS {
            return regression.solve(&spread, &centre);
        }
        let mut groups = self.groups(columns, width, tail);
        let solved = learn(regression, &mut groups, &mut spread, &centre)?;
        let pairs = self.share.len();
        for (share, group) in self.share.iter_mut().zip(&groups) {
            *share = group.scale;
        }
        if let Some([past, conduction, storage, gain]) = groups.get(pairs..) {
            self.past = past.scale.min(1.0);
            self.patch = [conduction.scale, storage.scale];
            self.gain = gain.scale;
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
        let mut best = self.try_noise(columns, &path, &part, &spread, &self.noise)?;
        let gauges = self.noise.gauge.len();
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
                        let mut next = self.noise.clone();
                        knob.turn(&mut next, factor);
                        let value = self.try_noise(columns, &path, &part, &spread, &next)?;
                        if value <= best + 0.5 {
                            break;
                        }
                        best = value;
                        self.noise = next;
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
        let images = self.suspect.map(|_| self.images(&columns));
        let mut history = History::run(&mut columns, self.history, images.as_ref())?;
        if self.suspect.is_some() {
            history.take(0, STRENGTH_SD);
        }
        if let Some(rest) = &self.rest {
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
            .factors
            .iter()
            .filter(|(p, _)| layer_of(*p) == *p)
            .copied()
            .collect();
        let mut factor_sd = vec![0.0; layers.len()];
        let mut skin_sd = vec![self.settings.skin_sd; self.skins.len()];
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
        priors.gain = self.gain;
        priors.past = self.past;
        priors.patch = self.patch;
        priors.long = LONG * self.usual_share();
        priors.far = FAR * self.usual_share();
        priors.mismatch = self.usual_share() + UNSEEN * self.patch[0];
        priors.discrepancy.clone_from(&self.share);
        let rates = Rates::of(blocks, columns.frame.wells);
        let (factors, patches) = std::mem::take(&mut self.factors)
            .into_iter()
            .partition(|(p, _)| layer_of(*p) == *p);
        Ok(Calibration {
            factors,
            factor_sd,
            patches,
            patched: columns.patched.clone(),
            suspect: self.suspect,
            skins: self.skins.clone(),
            skin_sd,
            noise: (0..gauges).map(|g| innovation[(g, g)].sqrt()).collect(),
            discrepancy: self.share.clone(),
            block: self.block,
            blocks: span,
            left: summary(&scaled),
            reference: history.reference,
            stochastic: self.noise.clone(),
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
