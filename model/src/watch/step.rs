//! One block after another: columns, whitening, learning, weighing.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges and columns checked at construction"
)]

use nalgebra::{DMatrix, DVector};

use super::stuck::Stuck;
use super::{Adoption, Blind, Live, Step, WatchSettings, WatchState, band::Band};
use crate::ModelError;
use crate::block::{Block, RateKnown};
use crate::commission::{Commissioned, Places, Unsteady, calm};
use crate::expect::adopted::{Adopted, AdoptedBlock};
use crate::expect::columns::{Columns, Raw};
use crate::expect::drive::{Sampled, size};
use crate::expect::frame::Frame;
use crate::expect::noise::Path;
use crate::expect::posterior::{Cleared, Posterior};
use crate::expect::whitener::Whitener;
use crate::finding::{Cause, Expectation, Finding, Size, Subject, Weighed};
use crate::weigh::bank::Bank;
use crate::weigh::barrier::{Barriers, Images};
use crate::weigh::evidence::log_sum;
use crate::weigh::ladder::{Ladder, Meters};
use crate::weigh::scales::Scales;
use crate::weigh::verdict::{Detail, Weights};

/// Blocks learned and weighed at a time.
const BATCH: i64 = 3;
/// Longest age of an onset that is still weighed \[s\].
const HORIZON: f64 = 100.0 * 86_400.0;
/// Prior standard deviation of a missing reading about its expectation \[Pa\].
const UNKNOWN: f64 = 1e5;
/// Missing readings of one gauge that keep a column.
const MISSING: usize = 24;
/// An onset of age a is weighed again after a share of its age.
const AGAIN: i64 = 20;
/// Kinds of cause that share the prior.
const KINDS: f64 = 7.0;
/// Where sources' responses are off by this share, they look, as rates go, like images: the images' evidence counts half.
const IMAGED: f64 = 0.1;
/// What the threshold is raised by, for a null that is never quite right: chosen by hand, until a simulated null says it.
const MARGIN: f64 = 3.0;
/// What it is raised by further where sources' responses are off by all of themselves.
const VARIETY: f64 = 30.0;
/// Log evidence by which `unexplained` must lead: outright, and as a share of the leading cause's.
const LEEWAY: (f64, f64) = (5.0, 0.03);
/// Probability from which a cause may be named.
const NAMED: f64 = 0.9;

/// The watch over one site's one tier.
#[derive(Debug, Clone)]
pub struct Watch {
    columns: Columns,
    whitener: Whitener,
    images: Images,
    bank: Bank,
    scales: Scales,
    places: Places,
    adopted: Vec<Adopted>,
    /// Gauges whose repeating of one value is accepted, with the block from which it is.
    quiet_stuck: Vec<(usize, i64)>,
    skins: Vec<(usize, usize, f64)>,
    reference: Vec<f64>,
    inflate: Vec<f64>,
    unsteady: Vec<Unsteady>,
    forgetting: Vec<f64>,
    longest_unchanged: Vec<u32>,
    block: f64,
    /// Relative error of a signature.
    mismatch: f64,
    log_threshold: f64,
    state: WatchState,
}

impl Watch {
    /// A watch before its first block.
    ///
    /// # Errors
    /// [`ModelError`] where the commissioned ground does not fit together.
    pub fn new(
        commissioned: &Commissioned,
        settings: &WatchSettings,
        adoptions: &[Adoption],
    ) -> Result<Self, ModelError> {
        let (ground, calibration) = (&commissioned.ground, &commissioned.calibration);
        let (gauges, wells) = (ground.gauges.len(), ground.wells.len());
        size(
            "gauges of the calibration",
            calibration.reference.len(),
            gauges,
        )?;
        size("skins of the calibration", calibration.skins.len(), wells)?;
        let mut places = Places::of(ground);
        size(
            "places of the ground file",
            commissioned.reduced.places.len(),
            places.all.len(),
        )?;
        let frame = Frame::new(ground, &commissioned.reduced, &calibration.factors)?;
        let path = Path::of(&frame.modal, calibration.block);
        let columns = Columns::new(
            frame,
            calibration.patched.clone(),
            calibration.priors.clone(),
            &calibration.skins,
        );
        let skins = columns.skin_paths();
        let mut whitener =
            Whitener::new(&path, &calibration.stochastic, &skins, calibration.block)?;
        whitener.inflate(&calibration.inflate);
        let horizon = whole(HORIZON / calibration.block);
        let bank = Bank::new(
            &columns.frame.modal,
            &whitener,
            places.candidates,
            calibration.block,
            horizon,
        );
        if let Some(suspect) = &calibration.suspect {
            places
                .lines
                .extend(places.line(ground, suspect.azimuth, suspect.distance));
        }
        let images = Images::new(&columns.frame.modal, &places.lines);
        let fixed = columns.len();
        let mismatch = calibration.priors.mismatch;
        let adopted: Vec<Adopted> = adoptions
            .iter()
            .map(|a| {
                Adopted::new(
                    a,
                    ground,
                    &columns.frame,
                    &places,
                    calibration.block,
                    mismatch,
                    &calibration.noise,
                )
            })
            .collect();
        let quiet_stuck = adoptions
            .iter()
            .filter_map(|a| match (a.cause, a.subject) {
                (Cause::GaugeStuck, Some(Subject::Gauge(gauge))) => {
                    Some((gauge, floor(a.onset / calibration.block)?))
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
            scales: Scales::of(ground, calibration),
            reference: calibration.reference.clone(),
            inflate: calibration.inflate.clone(),
            unsteady: calibration.unsteady.clone(),
            forgetting: columns.forgetting(),
            mismatch,
            longest_unchanged: calibration.longest_unchanged.clone(),
            block: calibration.block,
            log_threshold: (settings.false_alarm_interval / calibration.block)
                .max(1.0)
                .ln()
                + MARGIN
                + VARIETY * mismatch,
            columns,
            whitener,
            images,
            bank,
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
        commissioned: &Commissioned,
        settings: &WatchSettings,
        adoptions: &[Adoption],
        state: WatchState,
    ) -> Result<Self, ModelError> {
        let mut watch = Self::new(commissioned, settings, adoptions)?;
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
        let (gauges, wells) = (self.columns.frame.gauges, self.columns.frame.wells);
        let sampled = Sampled::of(block, wells, gauges)?;
        self.state.stuck.step(block);
        let mut memory = match self.state.memory.take() {
            Some(memory) => memory,
            None => self.columns.start(),
        };
        let raw = self.columns.step(&mut memory, &sampled)?;
        let blind = self.blind(block);
        let missing: Vec<usize> = (0..gauges)
            .filter(|&g| {
                block.gauges.get(g).is_none_or(Option::is_none) || self.stuck_since(g).is_some()
            })
            .collect();
        let images = self
            .images
            .raw(&self.columns.frame.modal, &raw.means, &sampled.class);
        let adopted: Vec<DMatrix<f64>> = self
            .adopted
            .iter()
            .zip(&mut self.state.adopted)
            .map(|(one, memory)| {
                let with = AdoptedBlock {
                    frame: &self.columns.frame,
                    tables: &raw.tables,
                    sampled: &sampled,
                    entering: &raw.entering,
                    block: block.index,
                    skins: &self.skins,
                };
                one.rows(memory, &with, &images)
            })
            .collect();
        self.add_columns(
            &memory.epochs.list.iter().map(|e| e.id).collect::<Vec<_>>(),
            &missing,
            &raw.renewals,
            block.index,
        );
        let row = self.raw_row(
            block,
            &raw,
            &memory.epochs.list.iter().map(|e| e.id).collect::<Vec<_>>(),
            &missing,
            &adopted,
        );
        let fixed = self.columns.len();
        for (index, live) in self.state.live.iter().enumerate() {
            if let Live::Renewal {
                well,
                block: of,
                size,
                within,
            } = *live
                && block.index == if within { of } else { of + 1 }
            {
                self.whitener.renew(
                    &mut self.state.filter,
                    1 + fixed + index,
                    well,
                    size,
                    within,
                );
            }
        }
        let mut white = self.whitener.step(&mut self.state.filter, &row);
        let calm = calm(&self.unsteady, &sampled, &self.columns.priors.rate, gauges);
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

    /// Appends columns for new epochs and missing readings.
    fn add_columns(
        &mut self,
        epochs: &[u32],
        missing: &[usize],
        renewals: &[(usize, f64)],
        block: i64,
    ) {
        let before = self.state.live.len();
        for &id in epochs {
            if !self.state.live.contains(&Live::Epoch(id)) {
                self.state.live.push(Live::Epoch(id));
            }
        }
        for &(well, size) in renewals {
            for within in [true, false] {
                self.state.live.push(Live::Renewal {
                    well,
                    block,
                    size,
                    within,
                });
            }
        }
        let mut taken = Vec::new();
        for (index, one) in self.adopted.iter().enumerate() {
            let known = self
                .state
                .live
                .iter()
                .any(|l| matches!(l, Live::Adopted { adoption, .. } if *adoption == index));
            if block >= one.from && !known {
                let columns = one.columns(self.columns.frame.gauges);
                if let Some((lines, scale)) = one.lines() {
                    taken.push((self.state.live.len(), lines.to_vec(), scale));
                }
                self.state
                    .live
                    .extend((0..columns).map(|column| Live::Adopted {
                        adoption: index,
                        column,
                    }));
            }
            if block == one.judged {
                // What began before it is no news any more.
                self.state.ladder = Ladder::new();
                self.state.first_onset = self.state.first_onset.max(block);
                self.state.finding = None;
                self.state.log_mixture = 0.0;
                if one.anew {
                    self.state.barriers.cleared =
                        Cleared::new(self.state.posterior.len(), self.images.lines());
                }
            }
        }
        for &gauge in missing {
            self.state.live.push(Live::Missing { gauge, block });
        }
        let added = self.state.live.len() - before;
        if added > 0 {
            let state = &mut self.state;
            let width = state.filter.ncols() + added;
            state.filter.resize_horizontally_mut(width, 0.0);
            state.pending.resize_horizontally_mut(width, 0.0);
            state.posterior.append(added);
            state.ladder.append(added);
            state.barriers.cleared.append(added);
        }
        for (at, lines, scale) in taken {
            for (column, line) in lines.into_iter().enumerate() {
                let filter = self.state.barriers.filter_of(line) * scale;
                let to = 1 + self.columns.len() + at + column;
                self.state.filter.column_mut(to).copy_from(&filter);
            }
        }
    }

    /// Readings less prediction, then all columns, of one block (gauges by 1 + columns).
    fn raw_row(
        &self,
        block: &Block,
        raw: &Raw,
        epochs: &[u32],
        missing: &[usize],
        adopted: &[DMatrix<f64>],
    ) -> DMatrix<f64> {
        let gauges = self.columns.frame.gauges;
        let fixed = self.columns.len();
        let mut row = DMatrix::zeros(gauges, 1 + fixed + self.state.live.len());
        for (gauge, read) in block.gauges.iter().enumerate() {
            if let Some(read) = read {
                row[(gauge, 0)] =
                    read.mean - raw.base[gauge] - self.reference.get(gauge).copied().unwrap_or(0.0);
            }
        }
        row.columns_mut(1, fixed).copy_from(&raw.fixed);
        for (index, live) in self.state.live.iter().enumerate() {
            match *live {
                Live::Epoch(id) => {
                    if let Some(at) = epochs.iter().position(|&e| e == id) {
                        row.column_mut(1 + fixed + index)
                            .copy_from(&raw.epochs.column(at));
                    }
                }
                Live::Adopted { adoption, column } => {
                    if let Some(rows) = adopted.get(adoption)
                        && column < rows.ncols()
                    {
                        row.column_mut(1 + fixed + index)
                            .copy_from(&rows.column(column));
                    }
                }
                Live::Renewal { .. } => {}
                Live::Missing { gauge, block: of } => {
                    if of == block.index {
                        row[(gauge, 1 + fixed + index)] = UNKNOWN;
                    }
                }
            }
        }
        for &gauge in missing {
            for column in 0..=fixed {
                row[(gauge, column)] = 0.0;
            }
            for (index, live) in self.state.live.iter().enumerate() {
                if !matches!(live, Live::Missing { .. }) {
                    row[(gauge, 1 + fixed + index)] = 0.0;
                }
            }
        }
        row
    }

    fn stuck_since(&self, gauge: usize) -> Option<i64> {
        let longest = self.longest_unchanged.get(gauge).copied().unwrap_or(0);
        self.state.stuck.since(gauge, longest)
    }

    fn blind(&self, block: &Block) -> Vec<Option<Blind>> {
        let stale = block.rates.iter().any(|r| r.known == RateKnown::Stale);
        block
            .gauges
            .iter()
            .map(|gauge| match gauge {
                None => Some(Blind::NoData),
                Some(_) if stale => Some(Blind::StaleRate),
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

    /// Weighs all causes after a batch and settles the finding.
    fn weigh(&mut self, now: i64) {
        let weights = Weights {
            bank: &self.bank,
            scales: &self.scales,
            places: &self.places,
            gauges: self.columns.frame.gauges,
            wells: self.columns.frame.wells,
            block: self.block,
            mismatch: self.mismatch,
        };
        let barrier = self.barrier_evidence();
        let state = &mut self.state;
        if state.ladder.onsets.is_empty() {
            return;
        }
        for onset in &mut state.ladder.onsets {
            if onset.asked == i64::MIN
                || now - onset.asked >= BATCH.max((now - onset.block) / AGAIN)
            {
                weights.weigh(onset, now);
            }
        }
        state.ladder.thin(now, self.bank.horizon);
        let mut sums = Weights::sums(&state.ladder);
        sums.push((Cause::Barrier, barrier));
        // A cause that this site cannot have, such as a neighbour's where none is declared, has no evidence to tell.
        sums.retain(|(_, log)| log.is_finite());
        let prior = -KINDS.ln();
        let stuck: Vec<(usize, i64, u32)> = (0..self.columns.frame.gauges)
            .filter_map(|g| {
                let longest = self.longest_unchanged.get(g).copied().unwrap_or(0);
                let since = state.stuck.since(g, longest)?;
                let accepted = self
                    .quiet_stuck
                    .iter()
                    .any(|(gauge, from)| *gauge == g && (since - from).abs() <= 1);
                (!accepted).then(|| (g, since, state.stuck.run(g)))
            })
            .collect();
        let logs: Vec<f64> = sums.iter().map(|(_, log)| log + prior).collect();
        let mut log_mixture = log_sum(&logs);
        if let Some(&(gauge, since, run)) = stuck.first() {
            let log = self.log_threshold + 5.0 * f64::from(run);
            log_mixture = log_sum(&[log_mixture, log]);
            let total = log_sum(&[log_mixture, self.log_threshold]);
            let mut causes = vec![Weighed {
                cause: Cause::GaugeStuck,
                probability: (log - total).exp(),
                subject: Some(Subject::Gauge(gauge)),
                log_evidence: log,
            }];
            causes.extend(sums.iter().zip(&logs).map(|((cause, sum), log)| Weighed {
                cause: *cause,
                probability: (log - total).exp(),
                subject: None,
                log_evidence: *sum,
            }));
            causes.sort_by(|a, b| b.probability.total_cmp(&a.probability));
            if causes.first().is_some_and(|c| c.cause == Cause::GaugeStuck) {
                state.log_mixture = log_mixture;
                state.finding = Some(Finding {
                    block: now,
                    causes,
                    named: true,
                    onset: since as f64 * self.block,
                    onset_sd: self.block / 12.0_f64.sqrt(),
                    size: None::<Size>,
                    place: None,
                    gauges: Vec::new(),
                    log_mixture,
                    log_threshold: self.log_threshold,
                });
                return;
            }
        }
        state.log_mixture = log_mixture.max(-30.0);
        if log_mixture < self.log_threshold {
            state.finding = None;
            return;
        }
        // Every signature is a little wrong, so free steps and ramps always fit a strong cause a little better than its own
        // signature does; they count only where they fit much better.
        let told = sums
            .iter()
            .filter(|(cause, _)| *cause != Cause::Unexplained)
            .map(|(_, log)| *log)
            .fold(0.0, f64::max);
        let logs: Vec<f64> = sums
            .iter()
            .zip(&logs)
            .map(|((cause, _), log)| {
                if *cause == Cause::Unexplained {
                    log - LEEWAY.0 - LEEWAY.1 * told
                } else {
                    *log
                }
            })
            .collect();
        let total = log_sum(&[log_sum(&logs), self.log_threshold]);
        let mut order: Vec<usize> = (0..sums.len()).collect();
        order.sort_by(|&a, &b| {
            let of = |i: usize| logs.get(i).copied().unwrap_or(f64::NEG_INFINITY);
            of(b).total_cmp(&of(a))
        });
        let mut causes = Vec::new();
        let mut lead: Option<Detail> = None;
        for &index in &order {
            let (Some((cause, _)), Some(log)) = (sums.get(index), logs.get(index)) else {
                continue;
            };
            let detail = if causes.is_empty() {
                weights.detail(*cause, &state.ladder, &state.barriers, now)
            } else {
                None
            };
            causes.push(Weighed {
                cause: *cause,
                probability: (log - total).exp(),
                subject: detail.as_ref().and_then(|d| d.subject),
                log_evidence: detail.as_ref().map_or(*log, |d| d.log_evidence),
            });
            if lead.is_none() {
                lead = detail;
            }
        }
        let Some(lead) = lead else { return };
        let named = causes.first().is_some_and(|c| c.probability >= NAMED)
            && lead.cause != Cause::Unexplained;
        state.finding = Some(Finding {
            block: now,
            causes,
            named,
            // A barrier has always been there: it is dated to where the watch began to look.
            onset: if lead.onset.is_finite() {
                lead.onset
            } else {
                state.first_onset as f64 * self.block
            },
            onset_sd: lead.onset_sd,
            size: lead.size,
            place: lead.place,
            gauges: Vec::new(),
            log_mixture,
            log_threshold: self.log_threshold,
        });
    }

    /// Expectation and departure of every gauge.
    fn expectation(
        &self,
        block: &Block,
        raw: &Raw,
        row: &DMatrix<f64>,
        blind: &[Option<Blind>],
    ) -> (Vec<Option<Expectation>>, Vec<Option<f64>>) {
        let gauges = self.columns.frame.gauges;
        let fixed = self.columns.len();
        let mut full = row.columns(1, row.ncols() - 1).into_owned();
        full.columns_mut(0, fixed).copy_from(&raw.fixed);
        let before = self
            .state
            .finding
            .as_ref()
            .filter(|f| f.onset.is_finite())
            .and_then(|f| floor(f.onset / self.block));
        let known = self.state.band.expect(
            block.index,
            self.block,
            before,
            fixed,
            &self.state.live,
            &full,
        );
        let Some(known) = known else {
            return (vec![None; gauges], vec![None; gauges]);
        };
        let mut expectations = Vec::with_capacity(gauges);
        let mut departures = Vec::with_capacity(gauges);
        for (gauge, (mean, variance)) in known.iter().enumerate() {
            let stale = matches!(blind.get(gauge), Some(Some(Blind::StaleRate)));
            let open =
                self.whitener.open_variance(gauge) * self.inflate.get(gauge).map_or(1.0, |i| i * i);
            let expectation = Expectation {
                mean: raw.base[gauge] + self.reference.get(gauge).copied().unwrap_or(0.0) + mean,
                sd: (variance + open).sqrt(),
            };
            let read = block.gauges.get(gauge).and_then(Option::as_ref);
            departures.push(read.filter(|_| !stale).map(|r| r.mean - expectation.mean));
            expectations.push((!stale).then_some(expectation));
        }
        (expectations, departures)
    }

    /// Log evidence of each cause, summed over onsets.
    #[must_use]
    pub fn evidence(&self) -> Vec<(Cause, f64)> {
        let mut sums = Weights::sums(&self.state.ladder);
        sums.push((Cause::Barrier, self.barrier_evidence()));
        sums
    }

    /// Log evidence of a barrier, as it enters the mixture.
    fn barrier_evidence(&self) -> f64 {
        let (log, _) = self.state.barriers.evidence(self.scales.barrier);
        log / (1.0 + self.mismatch / IMAGED)
    }

    /// Bytes of the running sums (for capacity planning).
    #[must_use]
    pub fn running_bytes(&self) -> usize {
        self.state.ladder.bytes()
            + self.state.barriers.cleared.bytes()
            + 8 * self.state.posterior.covariance.len()
    }
}

/// Gauges by how far they depart, in units of their standard deviation; at most four, and only beyond two.
fn affected(
    departures: &[Option<f64>],
    expectations: &[Option<Expectation>],
) -> Vec<(usize, f64, f64)> {
    let mut list: Vec<(usize, f64, f64)> = departures
        .iter()
        .zip(expectations)
        .enumerate()
        .filter_map(|(gauge, (departure, expectation))| {
            Some((gauge, (*departure)?, (*expectation)?.sd))
        })
        .collect();
    list.sort_by(|a, b| (b.1.abs() / b.2).total_cmp(&(a.1.abs() / a.2)));
    let first = list.first().copied();
    list.retain(|(_, departure, sd)| departure.abs() > 2.0 * sd);
    list.truncate(4);
    if list.is_empty() {
        list.extend(first);
    }
    list
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
fn floor(value: f64) -> Option<i64> {
    value.is_finite().then(|| value.floor() as i64)
}
