//! The lanes of the watch: which block each stands at, and what is asked of the model's thread next.
//!
//! Recovery after a crash, late data, adoption: all are one operation. A lane is opened at the checkpoint
//! before the change and stepped forward; what it says of a block counts from `compare_from` on, and only
//! where it differs from what is stored. The thread answers in order, so an answer to a lane that was
//! closed meanwhile comes before any answer to the lane opened in its place, and finds the slot empty.

use crate::record::{Adoption, Block, Step};
use crate::watch::lane::{Ask, LaneId, ModelThread};

/// One lane.
#[derive(Debug, Clone, PartialEq)]
pub struct Lane {
    /// The next block to step over.
    pub next: i64,
    /// First block whose step counts.
    pub compare_from: i64,
    /// Why blocks are judged again, where they are.
    pub reason: Option<String>,
    /// Whether an answer is outstanding.
    pub busy: bool,
}

/// A step that counts, with the lane's reason.
#[derive(Debug)]
pub struct Verdict {
    /// The step.
    pub step: Box<Step>,
    /// The lane's reason.
    pub reason: Option<String>,
    /// Which lane judged.
    pub lane: LaneId,
}

/// The lanes and the thread that holds their state.
pub struct Judge {
    thread: ModelThread,
    /// The live edge, when it runs.
    pub live: Option<Lane>,
    /// A re-run beside it.
    pub rerun: Option<Lane>,
}

/// The model's thread has ended.
#[derive(Debug, Clone, Copy, thiserror::Error)]
#[error("the model's thread has ended")]
pub struct Gone;

impl Judge {
    /// A judge with no lane open.
    #[must_use]
    pub fn new(thread: ModelThread) -> Self {
        Self {
            thread,
            live: None,
            rerun: None,
        }
    }

    /// Opens a lane after a checkpoint (`after` is its block), or at the end of commissioning.
    ///
    /// # Errors
    /// The thread has ended.
    pub fn open(
        &mut self,
        id: LaneId,
        after: i64,
        checkpoint: Option<Vec<u8>>,
        adoptions: &[Adoption],
        compare_from: i64,
        reason: Option<String>,
    ) -> Result<(), Gone> {
        *self.slot(id) = Some(Lane {
            next: after + 1,
            compare_from,
            reason,
            busy: true,
        });
        self.ask(Ask::Open {
            lane: id,
            checkpoint,
            adoptions: adoptions.to_vec(),
        })
    }

    /// Closes both lanes.
    pub fn close(&mut self) {
        self.live = None;
        self.rerun = None;
    }

    /// Lanes that could step now, given the first block not yet closed.
    #[must_use]
    pub fn ready(&self, first_open: i64) -> Vec<(LaneId, i64)> {
        [(LaneId::Rerun, &self.rerun), (LaneId::Live, &self.live)]
            .into_iter()
            .filter_map(|(id, lane)| {
                lane.as_ref()
                    .filter(|l| !l.busy && l.next < first_open)
                    .map(|l| (id, l.next))
            })
            .collect()
    }

    /// Whether an answer is outstanding.
    #[must_use]
    pub fn busy(&self) -> bool {
        [&self.live, &self.rerun]
            .into_iter()
            .flatten()
            .any(|l| l.busy)
    }

    /// Sends a block to a lane.
    ///
    /// # Errors
    /// The thread has ended.
    pub fn step(&mut self, id: LaneId, block: Block) -> Result<(), Gone> {
        if let Some(lane) = self.slot(id) {
            lane.busy = true;
        }
        self.ask(Ask::Step {
            lane: id,
            block: Box::new(block),
        })
    }

    /// Asks for the state of a lane after `block`.
    ///
    /// # Errors
    /// The thread has ended.
    pub fn save(&mut self, id: LaneId, block: i64) -> Result<(), Gone> {
        self.ask(Ask::Save { lane: id, block })
    }

    /// Takes in that a lane is open.
    pub fn opened(&mut self, id: LaneId) {
        if let Some(lane) = self.slot(id) {
            lane.busy = false;
        }
    }

    /// Takes in a step; gives it back if it counts.
    pub fn stepped(&mut self, id: LaneId, step: Box<Step>) -> Option<Verdict> {
        let lane = self.slot(id).as_mut()?;
        lane.busy = false;
        lane.next = step.block + 1;
        (step.block >= lane.compare_from).then(|| Verdict {
            step,
            reason: lane.reason.clone(),
            lane: id,
        })
    }

    /// Makes the re-run the live edge if it has caught up. `true` when it has.
    ///
    /// # Errors
    /// The thread has ended.
    pub fn promote(&mut self, first_open: i64) -> Result<bool, Gone> {
        let Some(rerun) = &self.rerun else {
            return Ok(false);
        };
        let target = self.live.as_ref().map_or(first_open, |l| l.next);
        let live_idle = self.live.as_ref().is_none_or(|l| !l.busy);
        if rerun.busy || !live_idle || rerun.next < target {
            return Ok(false);
        }
        self.live = self.rerun.take().map(|l| Lane { reason: None, ..l });
        self.ask(Ask::Promote)?;
        Ok(true)
    }

    fn slot(&mut self, id: LaneId) -> &mut Option<Lane> {
        match id {
            LaneId::Live => &mut self.live,
            LaneId::Rerun => &mut self.rerun,
        }
    }

    fn ask(&self, ask: Ask) -> Result<(), Gone> {
        if self.thread.ask(ask) {
            Ok(())
        } else {
            Err(Gone)
        }
    }
}
