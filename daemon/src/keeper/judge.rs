//! The lanes of the watch: which block each stands at, and what is asked of the model's thread next.
//!
//! Recovery after a crash, late data, adoption: all are one operation. A lane is opened at the checkpoint
//! before the change and stepped forward; what it says of a block counts from `compare_from` on, and only
//! where it differs from what is stored. An adoption counts from its own block on, so a lane that begins before
//! it ends there, and is opened anew with the finding in the model. Every opening has a number, and an answer
//! that bears another is one to a lane closed meanwhile: it is passed over.

use crate::record::{Adoption, Block, Step};
use crate::watch::lane::{Ask, LaneId, ModelThread};

/// One lane.
#[derive(Debug, Clone, PartialEq)]
pub struct Lane {
    /// Number of its opening.
    pub run: u64,
    /// The next block to step over.
    pub next: i64,
    /// First block whose step counts.
    pub compare_from: i64,
    /// Block before which it ends, because a finding is in the model from there on.
    pub until: Option<i64>,
    /// Why blocks are judged again, where they are.
    pub reason: Option<String>,
    /// Whether an answer is outstanding.
    pub busy: bool,
    /// The checkpoint's block, until the lane is open.
    pub opening: Option<i64>,
}

/// Where a lane begins and what it knows.
#[derive(Debug)]
pub struct Opening {
    /// The block it stands after: that of the checkpoint, or the last of commissioning.
    pub after: i64,
    /// The checkpoint; the end of commissioning where there is none.
    pub checkpoint: Option<Vec<u8>>,
    /// Findings in the model.
    pub adoptions: Vec<Adoption>,
    /// First block whose step counts.
    pub compare_from: i64,
    /// Block before which it ends.
    pub until: Option<i64>,
    /// Why blocks are judged again, where they are.
    pub reason: Option<String>,
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
    runs: u64,
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
            runs: 0,
            live: None,
            rerun: None,
        }
    }

    /// Opens a lane.
    ///
    /// # Errors
    /// The thread has ended.
    pub fn open(&mut self, id: LaneId, opening: Opening) -> Result<(), Gone> {
        self.runs += 1;
        let run = self.runs;
        *self.slot(id) = Some(Lane {
            run,
            next: opening.after.saturating_add(1),
            compare_from: opening.compare_from,
            until: opening.until,
            reason: opening.reason,
            busy: true,
            opening: Some(opening.after),
        });
        self.ask(Ask::Open {
            lane: id,
            run,
            checkpoint: opening.checkpoint,
            adoptions: opening.adoptions,
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
        self.lanes()
            .filter(|(_, l)| !l.busy && l.next < first_open.min(l.until.unwrap_or(i64::MAX)))
            .map(|(id, l)| (id, l.next))
            .collect()
    }

    /// A lane that has come to an adoption and must be opened anew with it: where, and why it runs.
    #[must_use]
    pub fn at_adoption(&self) -> Option<(LaneId, i64, Option<String>)> {
        self.lanes().filter(|(_, l)| !l.busy).find_map(|(id, l)| {
            let until = l.until.filter(|&until| l.next >= until)?;
            Some((id, until, l.reason.clone()))
        })
    }

    /// The lane of an opening, unless it was closed meanwhile.
    #[must_use]
    pub fn lane(&self, run: u64) -> Option<(LaneId, &Lane)> {
        self.lanes().find(|(_, l)| l.run == run)
    }

    /// Whether an answer is outstanding.
    #[must_use]
    pub fn busy(&self) -> bool {
        self.lanes().any(|(_, l)| l.busy)
    }

    /// Sends a block to a lane.
    ///
    /// # Errors
    /// The thread has ended.
    pub fn step(&mut self, id: LaneId, block: Block) -> Result<(), Gone> {
        let Some(lane) = self.slot(id) else {
            return Ok(());
        };
        lane.busy = true;
        let run = lane.run;
        self.ask(Ask::Step {
            lane: id,
            run,
            block: Box::new(block),
        })
    }

    /// Asks for the state of a lane after `block`.
    ///
    /// # Errors
    /// The thread has ended.
    pub fn save(&mut self, id: LaneId, block: i64) -> Result<(), Gone> {
        match self.slot(id) {
            Some(lane) => {
                let run = lane.run;
                self.ask(Ask::Save {
                    lane: id,
                    run,
                    block,
                })
            }
            None => Ok(()),
        }
    }

    /// Takes in that a lane is open.
    pub fn opened(&mut self, run: u64) {
        if let Some((_, lane)) = self.lane_mut(run) {
            lane.busy = false;
            lane.opening = None;
        }
    }

    /// Takes in a step; gives it back if it counts.
    pub fn stepped(&mut self, run: u64, step: Box<Step>) -> Option<Verdict> {
        let (id, lane) = self.lane_mut(run)?;
        lane.busy = false;
        lane.next = step.block.saturating_add(1);
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
        if rerun.busy || rerun.until.is_some() || !live_idle || rerun.next < target {
            return Ok(false);
        }
        self.live = self.rerun.take().map(|l| Lane { reason: None, ..l });
        self.ask(Ask::Promote)?;
        Ok(true)
    }

    /// Whether the live edge, opened at a start to judge blocks again, has caught up. It is an ordinary live edge then.
    pub fn caught_up(&mut self, first_open: i64) -> bool {
        match (&mut self.live, &self.rerun) {
            (Some(live), None)
                if !live.busy
                    && live.until.is_none()
                    && live.reason.is_some()
                    && live.next >= first_open =>
            {
                live.reason = None;
                true
            }
            _ => false,
        }
    }

    fn lanes(&self) -> impl Iterator<Item = (LaneId, &Lane)> {
        let rerun = self.rerun.as_ref().map(|l| (LaneId::Rerun, l));
        let live = self.live.as_ref().map(|l| (LaneId::Live, l));
        rerun.into_iter().chain(live)
    }

    fn lane_mut(&mut self, run: u64) -> Option<(LaneId, &mut Lane)> {
        let rerun = self.rerun.as_mut().map(|l| (LaneId::Rerun, l));
        let live = self.live.as_mut().map(|l| (LaneId::Live, l));
        rerun.into_iter().chain(live).find(|(_, l)| l.run == run)
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
