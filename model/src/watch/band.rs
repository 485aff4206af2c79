//! The published expectation: model and nuisances as they were known some days ago.
//!
//! A slow leak would carry its own band along if the nuisances went on learning from it, so the published mean and
//! standard deviation use a posterior older than the oldest onset that is alive, and never younger than a few days.

#![expect(
    clippy::indexing_slicing,
    reason = "indices run over gauges of rows made here"
)]

use nalgebra::DMatrix;
use serde::{Deserialize, Serialize};

use super::Live;
use crate::expect::posterior::Posterior;

/// Least age of the posterior used \[s\].
const AGE: f64 = 4.0 * 86_400.0;
/// Age beyond which one posterior is enough \[days\].
const OLDEST: i64 = 100;

/// A posterior as it was.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
struct Snapshot {
    /// Block after which it was taken.
    block: i64,
    /// Which columns come after the fixed ones.
    live: Vec<Live>,
    /// The posterior.
    posterior: Posterior,
}

/// Posteriors of the past, oldest first.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Band {
    kept: Vec<Snapshot>,
}

impl Band {
    pub(crate) fn new() -> Self {
        Self { kept: Vec::new() }
    }

    /// Keeps the present posterior if a day has passed, and thins the old ones.
    pub(crate) fn keep(&mut self, block: i64, day: i64, live: &[Live], posterior: &Posterior) {
        if self.kept.last().is_some_and(|s| block - s.block < day) {
            return;
        }
        self.kept.push(Snapshot {
            block,
            live: live.to_vec(),
            posterior: posterior.clone(),
        });
        // One goes where the next older is hardly more than twice as old as the next newer, which stays so as both age; of those
        // older than any asked for, the newest stays.
        let age = |s: &Snapshot| block - s.block;
        let mut index: usize = 1;
        while let (Some(older), Some(newer)) = (
            index.checked_sub(1).and_then(|i| self.kept.get(i)),
            self.kept.get(index + 1),
        ) {
            if age(older) <= 2 * age(newer) + day {
                self.kept.remove(index);
            } else {
                index += 1;
            }
        }
        while self
            .kept
            .get(1)
            .is_some_and(|second| age(second) >= OLDEST * day)
        {
            self.kept.remove(0);
        }
    }

    /// Mean and variance that the nuisances add to the model's prediction, by gauge, from a posterior older than `before`
    /// and than some days. `row` holds fixed columns, then live ones. `None` where nothing is old enough.
    pub(crate) fn expect(
        &self,
        now: i64,
        block: f64,
        before: Option<i64>,
        fixed: usize,
        live: &[Live],
        row: &DMatrix<f64>,
    ) -> Option<Vec<(f64, f64)>> {
        let old = |s: &&Snapshot| (now - s.block) as f64 * block >= AGE;
        let snapshot = self
            .kept
            .iter()
            .rev()
            .filter(old)
            .find(|s| before.is_none_or(|b| s.block < b))
            .or_else(|| self.kept.first().filter(old))?;
        let count = snapshot.posterior.len();
        let mut known = DMatrix::zeros(row.nrows(), count);
        known
            .columns_mut(0, fixed)
            .copy_from(&row.columns(0, fixed));
        let mut fresh = vec![0.0; row.nrows()];
        for (index, name) in live.iter().enumerate() {
            let column = row.column(fixed + index);
            match snapshot.live.iter().position(|l| l == name) {
                Some(at) => known.column_mut(fixed + at).copy_from(&column),
                None if matches!(name, Live::Missing { .. } | Live::Renewal { .. }) => {}
                None => {
                    for (sum, value) in fresh.iter_mut().zip(column.iter()) {
                        *sum += value * value;
                    }
                }
            }
        }
        let mean = &known * &snapshot.posterior.mean;
        let spread = &known * &snapshot.posterior.covariance;
        Some(
            fresh
                .iter()
                .enumerate()
                .map(|(gauge, fresh)| {
                    (
                        mean[gauge],
                        spread.row(gauge).dot(&known.row(gauge)).max(0.0) + fresh,
                    )
                })
                .collect(),
        )
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn posteriors_of_every_age_are_kept_and_not_many() {
        let (mut band, day) = (Band::new(), 24);
        let posterior = Posterior::prior(1);
        for block in 0..300 * day {
            band.keep(block, day, &[], &posterior);
            assert!(band.kept.len() <= 15, "{}", band.kept.len());
            // What is asked for is found, once there has been such a one, and not much older.
            for asked in [4, 6, 10, 20, 40, 90] {
                if block >= 2 * (asked + 1) * day {
                    let found = band
                        .kept
                        .iter()
                        .rev()
                        .find(|s| block - s.block >= asked * day);
                    let age = found.map(|s| (block - s.block) / day);
                    assert!(age.is_some_and(|a| a <= 2 * asked + 2), "{asked} {age:?}");
                }
            }
        }
    }
}
