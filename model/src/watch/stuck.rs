//! Gauges that repeat one raw value.

use serde::{Deserialize, Serialize};

use crate::block::Block;

/// Fewest blocks without a change that make a stuck gauge.
const FEWEST: u32 = 2;

/// How long each gauge has repeated itself.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct Stuck {
    /// Blocks without a change, by gauge.
    run: Vec<u32>,
    /// First block of the run.
    since: Vec<i64>,
}

impl Stuck {
    pub(crate) fn new(gauges: usize) -> Self {
        Self {
            run: vec![0; gauges],
            since: vec![0; gauges],
        }
    }

    /// Counts a block.
    pub(crate) fn step(&mut self, block: &Block) {
        for ((run, since), gauge) in self.run.iter_mut().zip(&mut self.since).zip(&block.gauges) {
            let Some(read) = gauge else { continue };
            if read.changed {
                *run = 0;
            } else {
                if *run == 0 {
                    *since = block.index;
                }
                *run += 1;
            }
        }
    }

    /// First block of a gauge's run, where it is longer than any seen at commissioning.
    pub(crate) fn since(&self, gauge: usize, longest_unchanged: u32) -> Option<i64> {
        let run = self.run.get(gauge)?;
        (*run >= FEWEST.max(longest_unchanged + 2)).then(|| self.since.get(gauge).copied())?
    }

    /// Blocks of a gauge's run.
    pub(crate) fn run(&self, gauge: usize) -> u32 {
        self.run.get(gauge).copied().unwrap_or(0)
    }
}
