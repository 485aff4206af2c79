//! What a settled fit leaves: the calibration, with the spread of its parameters and what the innovations look like.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over columns, gauges and wells laid out by the same code"
)]

use nalgebra::{DMatrix, DVector};

use super::account::{Account, Figure, GaugeFit};
use super::fit::Fit;
use super::history::{History, Keep, Regression};
use super::places::Places;
use super::rates::{Rates, spread_and_correlation};
use super::scales::{FAR, LONG};
use super::suspect::STRENGTH_SD;
use super::{Calibration, calm};
use crate::ModelError;
use crate::block::Block;
use crate::expect::columns::Kind;
use crate::reduce::{Factors, layer_of};
use crate::weigh::barrier::Images;

/// Error of a source's response by what is not known of the ground next to it, as a share of the spread between patches.
const UNSEEN: f64 = 0.15;

impl Fit<'_> {
    pub(super) fn finish(
        &mut self,
        span: (i64, i64),
    ) -> Result<(Calibration, Account), ModelError> {
        let blocks = self.history;
        let mut columns = self.columns()?;
        let places = Places::of(self.ground);
        let suspect = self.state.suspect;
        let line = suspect.and_then(|s| places.line(self.ground, s.azimuth, s.distance));
        let keep = if line.is_some() {
            Keep::Means
        } else {
            Keep::Columns
        };
        let mut history = History::run(&mut columns, self.history, keep)?;
        history.set_aside(&self.state.aside);
        if let Some(line) = line {
            history.look_at(&columns, &Images::new(&columns.frame.modal, &[line]));
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
        let gauges = columns.frame.gauges;
        let sampled = self.sampled(&columns)?;
        let left = regression.left(&solved.mean);
        let read = |row: usize| history.was_read(row);
        let unsteady = self.unsteady(&columns, &history, &sampled, &left);
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
                    let rows = (gauge..left.len()).step_by(gauges.max(1));
                    let series: Vec<f64> =
                        rows.filter(|&row| read(row)).map(|row| left[row]).collect();
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
        let mut figures = Vec::new();
        for (index, kind) in columns.kinds.iter().enumerate() {
            match *kind {
                Kind::Parameter(i) => {
                    if let Some(tilted) = columns.frame.tilted.get(i)
                        && let Some(at) = layers.iter().position(|(p, _)| *p == tilted.parameter)
                    {
                        factor_sd[at] = sd(index) * self.priors.parameter;
                        let figure = Figure::Parameter(tilted.parameter);
                        figures.push((figure, index, self.priors.parameter));
                    }
                }
                Kind::Skin(i) => {
                    if let Some(&(_, well, _)) = columns.frame.in_wells.get(i) {
                        skin_sd[well] = sd(index) * self.priors.skin;
                        figures.push((Figure::Skin(well), index, self.priors.skin));
                    }
                }
                _ => {}
            }
        }
        figures.sort_by_key(|(figure, _, _)| matches!(figure, Figure::Skin(_)));
        let (known, patched) = Account::of(&columns, &figures, &inverse, &spread);
        let account = Account {
            known,
            patches: patched,
            gauges: GaugeFit::all(blocks, &history, &solved.mean),
            log_evidence: self.log_evidence,
            tried: Vec::new(),
            untried: Vec::new(),
        };
        let innovation = whitener.innovation();
        let mut priors = self.priors.clone();
        priors.gain = self.state.scales.gain;
        priors.past = self.state.scales.past;
        priors.patch = self.state.scales.patch;
        priors.long = LONG * self.usual_share();
        priors.far = FAR * self.usual_share();
        priors.mismatch = self.usual_share() + UNSEEN * self.state.scales.patch[0];
        priors.discrepancy.clone_from(&self.state.scales.share);
        let rates = Rates::of(blocks, self.ground);
        let (factors, patches) = std::mem::take(&mut self.state.factors)
            .into_iter()
            .partition(|(p, _)| layer_of(*p) == *p);
        let calibration = Calibration {
            factors,
            factor_sd,
            patches,
            patched: columns.patched.clone(),
            suspect,
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
        };
        Ok((calibration, account))
    }
}

/// Longest run of blocks without a change of the raw value, by gauge.
pub(crate) fn longest_unchanged(history: &[Block], gauges: usize) -> Vec<u32> {
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
