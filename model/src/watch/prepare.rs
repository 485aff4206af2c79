//! A block made ready: what its rates drive, and its row of columns.

use nalgebra::DMatrix;

use super::Live;
use super::step::Watch;
use crate::block::Block;
use crate::expect::adopted::AdoptedBlock;
use crate::expect::columns::{Memory, Raw};
use crate::expect::drive::Sampled;

/// A block as the watch takes it in.
pub(super) struct Prepared {
    /// What images of the wells would add (gauges by lines).
    pub(super) images: DMatrix<f64>,
    /// Readings less prediction, then all columns (gauges by 1 + columns).
    pub(super) row: DMatrix<f64>,
}

impl Watch {
    /// Adds the columns that come with a block, and lets meters' errors jump where rates did. `memory` is that after the block.
    pub(super) fn prepare(
        &mut self,
        block: &Block,
        sampled: &Sampled,
        raw: &Raw,
        memory: &Memory,
        missing: &[usize],
    ) -> Prepared {
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
                    sampled,
                    entering: &raw.entering,
                    block: block.index,
                    skins: &self.skins,
                };
                one.rows(memory, &with, &images)
            })
            .collect();
        let epochs: Vec<u32> = memory.epochs.list.iter().map(|e| e.id).collect();
        self.add_columns(&epochs, missing, &raw.renewals, block.index);
        let row = self.raw_row(block, raw, &epochs, missing, &adopted);
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
        Prepared { images, row }
    }
}
