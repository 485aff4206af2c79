//! What is said after a batch: all causes weighed, and the finding settled.

use super::step::{BATCH, Watch};
use crate::finding::{Cause, Finding, Size, Subject, Weighed};
use crate::weigh::evidence::log_sum;
use crate::weigh::verdict::{Detail, Weights};

/// An onset of age a is weighed again after a share of its age.
const AGAIN: i64 = 20;
/// Kinds of cause that share the prior.
pub(super) const KINDS: f64 = 7.0;
/// Where sources' responses are off by this share, they look, as rates go, like images: the images' evidence counts half.
const IMAGED: f64 = 0.1;
/// Log evidence by which `unexplained` must lead: outright, and as a share of the leading cause's.
const LEEWAY: (f64, f64) = (5.0, 0.03);
/// Probability from which a cause may be named.
const NAMED: f64 = 0.9;

impl Watch {
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

    /// Weighs all causes after a batch and settles the finding.
    pub(super) fn weigh(&mut self, now: i64) {
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
}
