//! The fit: damped Gauss-Newton in the logarithms of the parameters, everything else linear.

use nalgebra::DVector;

use super::aside::gross;
use super::history::{History, Keep, Regression};
use super::moves::Move;
use super::rates::{Rates, typical_count};
use super::refuse;
use super::suspect::{STRENGTH_SD, Suspect, best_line};
use super::{CommissionSettings, GroundKind, Tried};
use crate::ModelError;
use crate::block::Block;
use crate::expect::columns::{Columns, Priors};
use crate::expect::frame::{Frame, free_parameters};
use crate::expect::noise::{Noise, Path};
use crate::expect::patched::Patched;
use crate::expect::whitener::Whitener;
use crate::ground::Ground;
use crate::reduce::{Factors, Reduced, layer_of};

/// The same of a meter's gain in one rate epoch.
pub(super) const TYPICAL_GAIN: f64 = 0.005;
/// Spread between patches before history is asked.
pub(super) const TYPICAL_PATCH: f64 = 0.1;
/// Longest step of a logarithm in one round, at first.
const FIRST_RADIUS: f64 = 0.4;
/// What becomes of it after a step that made the evidence worse by more than [`WORSE`], and after any other.
const SHORTER: f64 = 0.3;
const LONGER: f64 = 1.5;
const WORSE: f64 = 2.0;
/// Rounds since patches were let in after which the noise is learned anew: what parameters could not explain yet had passed for it.
const RELEARNED: [usize; 4] = [0, 1, 3, 6];
/// By which factors its figures are then tried larger and smaller.
const STRIDES: [&[f64]; 4] = [&[2.0], &[1.4, 1.2], &[2.0, 1.4], &[1.4, 1.2]];
/// A step of a logarithm that is no news.
const SETTLED: f64 = 2e-3;
/// Times that readings which are missing are worked out anew before anything is learned.
const FILLS: usize = 2;
/// Rounds in which all pairs are taken to see one ground; what makes them differ is learned about the best such ground,
/// or parameters and differences would run off against each other.
const PLAIN_ROUNDS: usize = 4;
/// Rounds by which scales are learned later where a barrier is looked for: first it is to be found. In the first of them
/// the whole fan is searched, then to the end about the last one found.
const SEARCH_ROUNDS: usize = 3;
/// The first of them: parameters have come near their best without a barrier.
const SEARCH_FROM: usize = 3;
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

/// Rows of blocks and gauges, ascending.
fn rows_of(aside: &[(i64, usize)], history: &[Block], gauges: usize) -> Vec<usize> {
    let mut rows: Vec<usize> = aside
        .iter()
        .filter_map(|&(index, gauge)| {
            let block = history.binary_search_by_key(&index, |b| b.index).ok()?;
            (gauge < gauges).then_some(block * gauges + gauge)
        })
        .collect();
    rows.sort_unstable();
    rows.dedup();
    rows
}

/// The state of the fit.
pub(super) struct Fit<'a> {
    pub(super) ground: &'a Ground,
    pub(super) reduced: &'a Reduced,
    pub(super) history: &'a [Block],
    pub(super) settings: &'a CommissionSettings,
    pub(super) block: f64,
    pub(super) priors: Priors,
    /// Whether an undeclared barrier is sought.
    pub(super) sought: bool,
    /// Whether it is known which readings to set aside.
    pub(super) known_aside: bool,
    pub(super) state: State,
    /// Log marginal likelihood of the history in the last round.
    pub(super) log_evidence: f64,
}

/// What the rounds move.
#[derive(Debug, Clone)]
pub(super) struct State {
    pub(super) factors: Factors,
    pub(super) skins: Vec<f64>,
    pub(super) noise: Noise,
    pub(super) scales: Scales,
    /// The barrier that history asks for, where one was sought and found.
    pub(super) suspect: Option<Suspect>,
    /// Coefficients of the last round less what it moved into parameters and skins.
    pub(super) rest: Option<DVector<f64>>,
    /// Rows set aside, ascending.
    pub(super) aside: Vec<usize>,
}

/// Scales of groups of nuisances.
#[derive(Debug, Clone)]
pub(super) struct Scales {
    /// Discrepancy of each pair, as a share of its response.
    pub(super) share: Vec<f64>,
    /// A meter's gain in one rate epoch.
    pub(super) gain: f64,
    /// Rates before the record, as a share of the largest.
    pub(super) past: f64,
    /// Spread of the logarithm of transmissivity and storativity between patches.
    pub(super) patch: [f64; 2],
}

impl<'a> Fit<'a> {
    pub(super) fn start(
        ground: &'a Ground,
        reduced: &'a Reduced,
        history: &'a [Block],
        settings: &'a CommissionSettings,
        block: f64,
    ) -> Result<Self, ModelError> {
        let (gauges, wells) = (ground.gauges.len(), ground.inputs());
        let rates = Rates::of(history, ground);
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
            rest: rates.rest.clone(),
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
            sought: false,
            known_aside: settings.aside.is_some(),
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
                suspect: None,
                rest: None,
                aside: rows_of(
                    settings.aside.as_deref().unwrap_or_default(),
                    history,
                    gauges,
                ),
            },
            log_evidence: f64::NEG_INFINITY,
        })
    }

    /// The larger of the spreads between patches.
    pub(super) fn spread_between_patches(&self) -> f64 {
        let [conduction, storage] = self.state.scales.patch;
        conduction.max(storage)
    }

    /// What stands now, as a ground tried.
    pub(super) fn tried(&self, kind: GroundKind, log_evidence: f64) -> Tried {
        let factors = self.state.factors.iter().copied();
        Tried {
            kind,
            log_evidence,
            factors: factors.filter(|(p, _)| layer_of(*p) == *p).collect(),
            leakance: None,
        }
    }

    /// First round in which scales are learned.
    pub(super) fn let_in(&self) -> usize {
        if self.sought {
            PLAIN_ROUNDS + SEARCH_ROUNDS
        } else {
            PLAIN_ROUNDS
        }
    }

    /// All rounds.
    pub(super) fn settle(&mut self, progress: &mut dyn FnMut(f64)) -> Result<(), ModelError> {
        let let_in = self.let_in();
        let rounds = self.settings.rounds + let_in - PLAIN_ROUNDS;
        let mut radius = FIRST_RADIUS;
        // The best state met, by the evidence at it, with the step that it asks for and the share of it tried.
        let mut best: Option<(f64, State, Move, f64)> = None;
        for round in 0..rounds {
            progress(round as f64 / rounds as f64);
            if round == let_in {
                self.state.scales.patch = [TYPICAL_PATCH; 2];
            }
            let aside = self.state.aside.clone();
            let step = self.round(round)?;
            if aside != self.state.aside {
                // Evidence of other readings is no measure.
                best = None;
            }
            if let Some((evidence, state, step, share)) = &mut best {
                if self.log_evidence < *evidence - WORSE {
                    // The share of the step went too far: from the same state a shorter one.
                    *share *= SHORTER;
                    radius *= SHORTER;
                    if *share * step.length() < SETTLED {
                        break;
                    }
                    self.state = state.clone();
                    step.take(&mut self.state, *share);
                    continue;
                }
                radius = (radius * LONGER).min(FIRST_RADIUS);
            }
            let share = step.share_within(radius);
            let length = step.length();
            // Until scales are learned, and across a change of the noise, one round's evidence says nothing of another's.
            let settled = round
                .checked_sub(let_in)
                .is_some_and(|r| !RELEARNED.contains(&r));
            if !settled {
                best = None;
            } else if best.as_ref().is_none_or(|b| self.log_evidence > b.0) {
                // The evidence is that of the parameters before this round's step, under the scales learned in it.
                best = Some((self.log_evidence, self.state.clone(), step.clone(), share));
            }
            step.take(&mut self.state, share);
            if settled && length < SETTLED {
                break;
            }
        }
        if let Some((log_evidence, state, ..)) = best {
            self.log_evidence = log_evidence;
            self.state = state;
        }
        Ok(())
    }

    pub(super) fn columns(&self) -> Result<Columns, ModelError> {
        let frame = Frame::new(self.ground, self.reduced, &self.state.factors)?;
        let patched = Patched::of(self.reduced, &frame.modal, &self.state.factors)?;
        Ok(Columns::new(
            frame,
            patched,
            self.priors.clone(),
            &self.state.skins,
        ))
    }

    pub(super) fn whitener(&self, columns: &Columns) -> Result<Whitener, ModelError> {
        let path = Path::of(&columns.frame.modal, self.block);
        Whitener::new(&path, &self.state.noise, &columns.skin_paths(), self.block)
    }

    /// One round: columns at the present parameters, scales learned. Returns what parameters and skins ask to be moved by.
    fn round(&mut self, round: usize) -> Result<Move, ModelError> {
        let mut columns = self.columns()?;
        let let_in = self.let_in();
        let searched = self.sought && round >= SEARCH_FROM;
        let keep = if searched { Keep::Means } else { Keep::Columns };
        let mut history = History::run(&mut columns, self.history, keep)?;
        self.priors.pair_spread.clone_from(&history.pair_spread);
        if round == 0 {
            columns = self.columns()?;
            history = History::run(&mut columns, self.history, keep)?;
            if !self.known_aside {
                self.state.aside = gross(&history);
            }
            history.set_aside(&self.state.aside);
            refuse::signs(self.ground, &history)?;
        }
        history.set_aside(&self.state.aside);
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
            if let Some(rest) = &self.state.rest {
                history.fill(rest);
            }
            regression = history.whiten(&whitener);
        }
        let mut solved = self.learn_scales(&columns, &regression, history.tail(), round)?;
        if !self.known_aside && [1, 2, let_in, let_in + 1].contains(&round) {
            let left = regression.left(&solved.mean);
            let settled = round >= let_in;
            let found = self.standing_out(&columns, &history, &whitener, &left, settled)?;
            if found != self.state.aside {
                self.state.aside = found;
                history.set_aside(&self.state.aside);
                history.fill(&solved.mean);
                regression = history.whiten(&whitener);
                solved = self.learn_scales(&columns, &regression, history.tail(), round)?;
            }
        }
        self.log_evidence =
            solved.log_likelihood - whitener.log_scale() * self.history.len() as f64;
        let step = Move::of(&columns, &self.priors, solved.mean.clone());
        let strides: &[f64] = match round.checked_sub(let_in) {
            Some(since) => RELEARNED
                .iter()
                .zip(STRIDES)
                .find(|(r, _)| **r == since)
                .map_or(&[], |(_, s)| s),
            None if round == 1 => &[2.0],
            None if round == 2 => &[1.4],
            None => &[],
        };
        if !strides.is_empty() {
            self.learn_noise(&columns, &history, &solved, strides)?;
        }
        Ok(step)
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
        let known = self.state.suspect.take();
        let (spread, centre) = self.spread(columns, regression.z.len(), tail);
        let solved = regression.solve(&spread, &centre)?;
        let found = best_line(
            self.ground,
            columns,
            history,
            whitener,
            (regression, &solved),
            known.as_ref(),
        );
        self.state.suspect = found;
        if found.is_some() {
            history.take(0, STRENGTH_SD);
        }
        Ok(())
    }
}
