//! What every gauge is expected to show, and how far it departs.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges and columns checked at construction"
)]

use nalgebra::DMatrix;

use super::Blind;
use super::step::{Watch, floor};
use crate::block::Block;
use crate::expect::columns::Raw;
use crate::finding::Expectation;

impl Watch {
    /// Expectation and departure of every gauge.
    pub(super) fn expectation(
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
        let beyond = |gauge: usize| {
            let variance = raw.beyond.as_ref().and_then(|b| b.variance.get(gauge));
            variance.copied().unwrap_or(0.0)
        };
        let mut expectations = Vec::with_capacity(gauges);
        let mut departures = Vec::with_capacity(gauges);
        for (gauge, (mean, variance)) in known.iter().enumerate() {
            let stale = matches!(blind.get(gauge), Some(Some(Blind::StaleRate)));
            let open =
                self.whitener.open_variance(gauge) * self.inflate.get(gauge).map_or(1.0, |i| i * i);
            let expectation = Expectation {
                mean: raw.base[gauge] + self.reference.get(gauge).copied().unwrap_or(0.0) + mean,
                sd: (variance + open + beyond(gauge)).sqrt(),
            };
            let read = block.gauges.get(gauge).and_then(Option::as_ref);
            departures.push(read.filter(|_| !stale).map(|r| r.mean - expectation.mean));
            expectations.push((!stale).then_some(expectation));
        }
        (expectations, departures)
    }
}

/// Gauges by how far they depart, in units of their standard deviation; at most four, and only beyond two.
pub(super) fn affected(
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
