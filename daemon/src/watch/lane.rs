//! The model's own thread. It holds up to two lanes of the watch: the live edge, and a re-run beside it.
//!
//! Requests are answered in order; a slow step delays neither readings nor limits, which live elsewhere.

use std::sync::mpsc;
use std::thread;

use borewake_model::ModelError;
use borewake_model::watch::{Watch, WatchState};
use tokio::sync::mpsc as answers;

use super::ground_file::GroundFile;
use crate::record::{Adoption, Block, Step};

/// Which of the two lanes.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum LaneId {
    /// The live edge.
    Live,
    /// A re-run beside it.
    Rerun,
}

/// What the thread is asked.
#[derive(Debug)]
pub enum Ask {
    /// Opens a lane at a checkpoint, or at the end of commissioning.
    Open {
        /// Which lane; what it held is dropped.
        lane: LaneId,
        /// Number of this opening; answers bear it.
        run: u64,
        /// A checkpoint, as [`Answer::Saved`] gave it.
        checkpoint: Option<Vec<u8>>,
        /// Findings taken into the model.
        adoptions: Vec<Adoption>,
    },
    /// Steps a lane over its next block.
    Step {
        /// Which lane.
        lane: LaneId,
        /// Number of its opening.
        run: u64,
        /// The block.
        block: Box<Block>,
    },
    /// Encodes the state of a lane.
    Save {
        /// Which lane.
        lane: LaneId,
        /// Number of its opening.
        run: u64,
        /// The block it stands after.
        block: i64,
    },
    /// The re-run has caught up: it becomes the live edge.
    Promote,
}

/// What the thread answers. Every [`Ask`] but [`Ask::Promote`] has exactly one answer, which bears the number of the
/// lane's opening: by that an answer to a lane closed meanwhile is known.
#[derive(Debug)]
pub enum Answer {
    /// A lane is open.
    Opened(u64),
    /// A block was judged.
    Stepped(u64, Box<Step>),
    /// A lane's state.
    Saved {
        /// Number of the lane's opening.
        run: u64,
        /// Block after which it was taken.
        block: i64,
        /// Encoded state.
        state: Vec<u8>,
    },
    /// The lane cannot go on.
    Failed(u64, ModelError),
}

/// Handle on the model's thread; dropping it ends the thread after its present request.
pub struct ModelThread {
    asks: mpsc::Sender<Ask>,
}

impl ModelThread {
    /// Starts the thread. Answers go to `answers`.
    ///
    /// # Errors
    /// The system gives no thread.
    pub fn start(
        ground: GroundFile,
        answers: answers::UnboundedSender<Answer>,
    ) -> std::io::Result<Self> {
        let (asks, inbox) = mpsc::channel();
        thread::Builder::new()
            .name("model".into())
            .spawn(move || Lanes::new(ground).serve(&inbox, &answers))?;
        Ok(Self { asks })
    }

    /// A handle on whoever takes the requests.
    #[cfg(test)]
    pub(crate) fn over(asks: mpsc::Sender<Ask>) -> Self {
        Self { asks }
    }

    /// Sends a request. `false` when the thread is gone.
    #[must_use]
    pub fn ask(&self, ask: Ask) -> bool {
        self.asks.send(ask).is_ok()
    }
}

struct Lanes {
    ground: GroundFile,
    live: Option<Watch>,
    rerun: Option<Watch>,
}

impl Lanes {
    fn new(ground: GroundFile) -> Self {
        Self {
            ground,
            live: None,
            rerun: None,
        }
    }

    fn serve(mut self, inbox: &mpsc::Receiver<Ask>, answers: &answers::UnboundedSender<Answer>) {
        while let Ok(ask) = inbox.recv() {
            let answer = match ask {
                Ask::Promote => {
                    self.live = self.rerun.take();
                    continue;
                }
                Ask::Open {
                    lane,
                    run,
                    checkpoint,
                    adoptions,
                } => match self.open(checkpoint, &adoptions) {
                    Ok(watch) => {
                        *self.slot(lane) = Some(watch);
                        Answer::Opened(run)
                    }
                    Err(e) => Answer::Failed(run, e),
                },
                Ask::Step { lane, run, block } => match self.slot(lane) {
                    Some(watch) => match watch.step(&block) {
                        Ok(step) => Answer::Stepped(run, Box::new(step)),
                        Err(e) => Answer::Failed(run, e),
                    },
                    None => Answer::Failed(run, closed()),
                },
                Ask::Save { lane, run, block } => match self.slot(lane) {
                    Some(watch) => match postcard::to_stdvec(&watch.save()) {
                        Ok(state) => Answer::Saved { run, block, state },
                        Err(e) => Answer::Failed(
                            run,
                            ModelError::History(format!("the checkpoint cannot be encoded: {e}")),
                        ),
                    },
                    None => Answer::Failed(run, closed()),
                },
            };
            if answers.send(answer).is_err() {
                return;
            }
        }
    }

    fn slot(&mut self, lane: LaneId) -> &mut Option<Watch> {
        match lane {
            LaneId::Live => &mut self.live,
            LaneId::Rerun => &mut self.rerun,
        }
    }

    fn open(
        &self,
        checkpoint: Option<Vec<u8>>,
        adoptions: &[Adoption],
    ) -> Result<Watch, ModelError> {
        let state: WatchState = match checkpoint {
            Some(bytes) => postcard::from_bytes(&bytes)
                .map_err(|e| ModelError::History(format!("the checkpoint cannot be read: {e}")))?,
            None => self.ground.start.clone(),
        };
        Watch::restore(
            &self.ground.commissioned,
            &self.ground.settings,
            adoptions,
            state,
        )
    }
}

fn closed() -> ModelError {
    ModelError::History("the lane is not open".into())
}
