//! One block after another: columns, whitening, learning, weighing.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges and columns checked at construction"
)]

use nalgebra::{DMatrix, DVector};

use super::expected::affected;
use super::prepare::Prepared;
use super::stuck::Stuck;
use super::{
    Adoption, Basis, Blind, Foundation, Live, Step, WatchSettings, WatchState, band::Band,
};
use crate::ModelError;
use crate::block::{Block, RateKnown};
use crate::commission::{Places, Unsteady, calm};
use crate::expect::adopted::Adopted;
use crate::expect::columns::{Columns, Raw};
use crate::expect::drive::size;
use crate::expect::posterior::Posterior;
use crate::expect::whitener::Whitener;
use crate::finding::{Cause, Subject};
use crate::weigh::bank::Bank;
use crate::weigh::barrier::{Barriers, Images};
use crate::weigh::between::Between;
use crate::weigh::ladder::{Ladder, Meters};
use crate::weigh::scales::Scales;

/// Blocks learned and weighed at a time.
pub(super) const BATCH: i64 = 3;
/// Missing readings of one gauge that keep a column.
const MISSING: usize = 24;
/// What the threshold is raised by, for a null that is never quite right: chosen by hand, until a simulated null says it.
const MARGIN: f64 = 3.0;
/// What it is raised by further where sources' responses are off by all of themselves.
const VARIETY: f64 = 30.0;

/// The watch over one site's one tier.
#[derive(Debug, Clone)]
pub struct Watch {
    pub(super) columns: Columns,
    pub(super) whitener: Whitener,
    pub(super) images: Images,
    pub(super) bank: Bank,
    pub(super) scales: Scales,
    pub(super) places: Places,
    pub(super) between: Between,
    pub(super) adopted: Vec<Adopted>,
    /// Gauges whose repeating of one value is accepted, with the block from which it is.
    pub(super) quiet_stuck: Vec<(usize, i64)>,
    pub(super) skins: Vec<(usize, usize, f64)>,
    pub(super) reference: Vec<f64>,
    pub(super) inflate: Vec<f64>,
    pub(super) unsteady: Vec<Unsteady>,
    pub(super) forgetting: Vec<f64>,
    pub(super) longest_unchanged: Vec<u32>,
    pub(super) block: f64,
    /// Relative error of a signature.
    pub(super) mismatch: f64,
    pub(super) log_threshold: f64,
    pub(super) state: WatchState,
}

impl Watch {
    /// A watch before its first block.
    ///
    /// # Errors
    /// [`ModelError`] where the commissioned ground does not fit together.
    pub fn new(
        basis: &impl Basis,
        settings: &WatchSettings,
        adoptions: &[Adoption],
    ) -> Result<Self, ModelError> {
        let Foundation {
            ground,
            columns,
            path,
            places,
            stochastic,
            noise,
            reference,
            inflate,
            unsteady,
            longest_unchanged,
            flow,
            block,
            horizon,
        } = basis.foundation()?;
        let gauges = ground.gauges.len();
        let skins = columns.skin_paths();
        let mut whitener = Whitener::new(&path, &stochastic, &skins, block)?;
        whitener.inflate(&inflate);
        let horizon = whole(horizon / block);
        let bank = Bank::new(
            &columns.frame.modal,
            &whitener,
            places.candidates,
            block,
            horizon,
        );
        let images = Images::new(&columns.frame.modal, &places.lines);
        let fixed = columns.len();
        let mismatch = columns.priors.mismatch;
        let adopted: Vec<Adopted> = adoptions
            .iter()
            .map(|a| Adopted::new(a, &ground, &columns.frame, &places, block, mismatch, &noise))
            .collect();
        let quiet_stuck = adoptions
            .iter()
            .filter_map(|a| match (a.cause, a.subject) {
                (Cause::GaugeStuck, Some(Subject::Gauge(gauge))) => {
                    Some((gauge, floor(a.onset / block)?))
                }
                _ => None,
            })
            .collect();
        let state = WatchState {
            next: None,
            memory: None,
            adopted: vec![DMatrix::zeros(0, 0); adopted.len()],
            filter: DMatrix::zeros(whitener.states(), 1 + fixed),
            pending: DMatrix::zeros(0, 1 + fixed),
            live: Vec::new(),
            posterior: Posterior::prior(fixed),
            band: Band::new(),
            stuck: Stuck::new(gauges),
            ladder: Ladder::new(),
            barriers: Barriers::new(fixed, images.lines(), &whitener),
            log_mixture: 0.0,
            finding: None,
            calm: Vec::new(),
            first_onset: settings.first_onset,
        };
        Ok(Self {
            adopted,
            quiet_stuck,
            scales: Scales::of(
                &ground.gauges,
                &stochastic.gauge,
                flow,
                &columns.priors.rate,
            ),
            reference,
            inflate,
            unsteady,
            forgetting: columns.forgetting(),
            mismatch,
            longest_unchanged,
            block,
            log_threshold: (settings.false_alarm_interval / block).max(1.0).ln()
                + MARGIN
                + VARIETY * mismatch,
            columns,
            whitener,
            images,
            bank,
            between: Between::new(&ground, &places),
            places,
            skins,
            state,
        })
    }

    /// All that must be kept to go on later.
    #[must_use]
    pub fn save(&self) -> WatchState {
        self.state.clone()
    }

    /// Goes on from a kept state.
    ///
    /// # Errors
    /// As [`Watch::new`], and [`ModelError::Size`] where the state is of another ground.
    pub fn restore(
        basis: &impl Basis,
        settings: &WatchSettings,
        adoptions: &[Adoption],
        state: WatchState,
    ) -> Result<Self, ModelError> {
        let mut watch = Self::new(basis, settings, adoptions)?;
        size(
            "states of the filter",
            state.filter.nrows(),
            watch.state.filter.nrows(),
        )?;
        watch.state = state;
        let adopted = watch.adopted.len();
        watch.state.adopted.resize(adopted, DMatrix::zeros(0, 0));
        Ok(watch)
    }

    /// Log of the threshold the mixture is held against.
    #[must_use]
    pub fn log_threshold(&self) -> f64 {
        self.log_threshold
    }

    /// Steps through one block.
    ///
    /// # Errors
    /// [`ModelError::History`] for a block out of order, [`ModelError::Size`] for one that does not fit.
    pub fn step(&mut self, block: &Block) -> Result<Step, ModelError> {
        if let Some(next) = self.state.next
            && next != block.index
        {
            return Err(ModelError::History(format!(
                "block {} came where block {next} is due",
                block.index
            )));
        }
        if (block.length - self.block).abs() > 1e-6 {
            return Err(ModelError::Parameter {
                what: "length of a block".to_owned(),
                value: block.length,
                must: "must be that of commissioning",
            });
        }
        let gauges = self.columns.frame.gauges;
        let sampled = self.columns.sample(block)?;
        self.state.stuck.step(block);
        let mut memory = match self.state.memory.take() {
            Some(memory) => memory,
            None => self.columns.start(),
        };
        let raw = self.columns.step(&mut memory, &sampled)?;
        let blind = self.blind(block, &raw);
        let missing: Vec<usize> = (0..gauges)
            .filter(|&g| {
                // What the model does not reach tells nothing of causes.
                block.gauges.get(g).is_none_or(Option::is_none)
                    || self.stuck_since(g).is_some()
                    || matches!(blind.get(g), Some(Some(Blind::Model)))
            })
            .collect();
        let Prepared { images, row } = self.prepare(block, &sampled, &raw, &memory, &missing);
        let mut white = self.whitener.step(&mut self.state.filter, &row);
        let mut calm = calm(&self.unsteady, &sampled, &self.columns.priors.rate, gauges);
        if let Some(beyond) = &raw.beyond {
            for ((gauge, factor), variance) in calm.iter_mut().enumerate().zip(&beyond.variance) {
                let known = self.whitener.innovation()[(gauge, gauge)];
                *factor *= (1.0 + variance / known).sqrt().recip();
            }
        }
        for (gauge, factor) in calm.iter().enumerate() {
            white.row_mut(gauge).scale_mut(*factor);
        }
        self.state.calm.extend(calm);
        let at = self.state.pending.nrows();
        self.state.pending.resize_vertically_mut(at + gauges, 0.0);
        self.state.pending.rows_mut(at, gauges).copy_from(&white);

        if block.index >= self.state.first_onset {
            self.state.ladder.open(
                block.index,
                self.state.posterior.len(),
                &self.bank,
                &self.columns.frame,
                &self.whitener,
            );
        }
        self.state.ladder.step(
            block.index,
            &Meters {
                frame: &self.columns.frame,
                tables: &raw.tables,
                driven: &raw.driven,
                sampled: &sampled,
                entering: &raw.entering,
                whitener: &self.whitener,
                skins: &self.skins,
            },
        );
        self.state.barriers.step(&images, &self.whitener);

        let (expectations, departures) = self.expectation(block, &raw, &row, &blind);
        if (block.index + 1).rem_euclid(BATCH) == 0 {
            self.learn(block, &mut memory)?;
        }
        self.state.memory = Some(memory);
        self.state.next = Some(block.index + 1);
        let log_mixture = self.state.log_mixture;
        let finding = self.state.finding.clone().map(|mut finding| {
            finding.block = block.index;
            finding.gauges = affected(&departures, &expectations);
            finding
        });
        Ok(Step {
            block: block.index,
            expectations,
            departures,
            blind,
            log_mixture,
            log_threshold: self.log_threshold,
            finding,
        })
    }

    fn stuck_since(&self, gauge: usize) -> Option<i64> {
        let longest = self.longest_unchanged.get(gauge).copied().unwrap_or(0);
        self.state.stuck.since(gauge, longest)
    }

    fn blind(&self, block: &Block, raw: &Raw) -> Vec<Option<Blind>> {
        let beyond = raw.beyond.as_ref().is_some_and(|b| b.blind);
        let stale = block.rates.iter().any(|r| r.known == RateKnown::Stale);
        block
            .gauges
            .iter()
            .map(|gauge| match gauge {
                None => Some(Blind::NoData),
                Some(_) if stale => Some(Blind::StaleRate),
                Some(_) if beyond => Some(Blind::Model),
                Some(_) => None,
            })
            .collect()
    }

    /// Takes the batch in, weighs, and tidies up.
    fn learn(
        &mut self,
        block: &Block,
        memory: &mut crate::expect::columns::Memory,
    ) -> Result<(), ModelError> {
        let gauges = self.columns.frame.gauges;
        let state = &mut self.state;
        let width = state.pending.ncols();
        let pending = std::mem::replace(&mut state.pending, DMatrix::zeros(0, width));
        let blocks = i64::try_from(pending.nrows() / gauges.max(1)).unwrap_or(0);
        let calm = std::mem::take(&mut state.calm);
        let readings: DVector<f64> = pending.column(0).into_owned();
        let elapsed = blocks as f64 * self.block;
        let lost: Vec<f64> = self.forgetting.iter().map(|f| f * elapsed).collect();
        state.posterior.forget(&lost);
        let lesson = state
            .posterior
            .learn(pending.columns(1, width - 1).into_owned(), &readings)?;
        state
            .ladder
            .learn(&lesson, block.index, blocks, &self.bank, gauges, &calm);
        state.barriers.learn(&lesson, &calm);

        // Columns whose influence has passed.
        let mut struck: Vec<Live> = memory
            .epochs
            .give_up()
            .into_iter()
            .map(Live::Epoch)
            .collect();
        let fixed = self.columns.len();
        for gauge in 0..gauges {
            let mine: Vec<Live> = state
                .live
                .iter()
                .filter(|l| matches!(l, Live::Missing { gauge: g, .. } if *g == gauge))
                .copied()
                .collect();
            struck.extend(mine.iter().take(mine.len().saturating_sub(MISSING)));
            for live in mine {
                let Live::Missing { block: of, .. } = live else {
                    continue;
                };
                let Some(index) = state.live.iter().position(|l| *l == live) else {
                    continue;
                };
                let sd = state.posterior.covariance[(fixed + index, fixed + index)]
                    .max(0.0)
                    .sqrt();
                // What is left of its response: the filter's state is all that later rows can feel.
                let left = self.whitener.echo(&state.filter, 1 + fixed + index);
                if of < block.index && sd * left < 0.02 {
                    struck.push(live);
                }
            }
        }
        for (index, live) in state.live.iter().enumerate() {
            if let Live::Renewal { block: of, .. } = *live {
                let sd = state.posterior.covariance[(fixed + index, fixed + index)]
                    .max(0.0)
                    .sqrt();
                let left = self.whitener.echo(&state.filter, 1 + fixed + index);
                if (block.index - of) as f64 * self.block > 5.0 * 86_400.0 && sd * left < 0.01 {
                    struck.push(*live);
                }
            }
        }
        let mut indices: Vec<usize> = struck
            .iter()
            .filter_map(|s| state.live.iter().position(|l| l == s))
            .collect();
        indices.sort_unstable();
        indices.dedup();
        if !indices.is_empty() {
            let mut at = 0;
            state.live.retain(|_| {
                at += 1;
                !indices.contains(&(at - 1))
            });
            let columns: Vec<usize> = indices.iter().map(|i| fixed + i).collect();
            let shifted: Vec<usize> = columns.iter().map(|c| c + 1).collect();
            state.filter = std::mem::replace(&mut state.filter, DMatrix::zeros(0, 0))
                .remove_columns_at(&shifted);
            state.pending = DMatrix::zeros(0, state.filter.ncols());
            state.posterior.strike(&columns);
            state.ladder.strike(&columns);
            state.barriers.cleared.strike(&columns);
        }
        let day = days(1.0, self.block);
        state
            .band
            .keep(block.index, day, &state.live, &state.posterior);
        self.weigh(block.index);
        Ok(())
    }

    /// Bytes of the running sums (for capacity planning).
    #[must_use]
    pub fn running_bytes(&self) -> usize {
        self.state.ladder.bytes()
            + self.state.barriers.cleared.bytes()
            + 8 * self.state.posterior.covariance.len()
    }
}

#[expect(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "a positive count far below 2^53"
)]
fn whole(value: f64) -> usize {
    value.max(1.0).round() as usize
}

#[expect(clippy::cast_possible_truncation, reason = "a count far below 2^53")]
fn days(days: f64, block: f64) -> i64 {
    (days * 86_400.0 / block).round().max(1.0) as i64
}

#[expect(
    clippy::cast_possible_truncation,
    reason = "a block number far below 2^53"
)]
pub(super) fn floor(value: f64) -> Option<i64> {
    value.is_finite().then(|| value.floor() as i64)
}
