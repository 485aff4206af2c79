//! The keeper's dealings with the model: closing blocks, stepping lanes, checkpoints, re-runs.

use tracing::{error, info, warn};

use super::judge::Verdict;
use super::{ATTEMPTS, GATHER, Keeper, KeeperError, Pace};
use crate::record::{EntryKind, Stamp};
use crate::store::{Checkpoint, CheckpointKind};
use crate::watch::lane::{Answer, LaneId};
use crate::watch::stored::stored_block;

impl Keeper {
    /// Opens the live lane after the newest checkpoint that still holds, and catches up.
    pub(super) async fn start_watch(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        let first = self.ground_last + 1;
        self.saved.closer.next = self.saved.closer.next.max(Some(first));
        let judged = self
            .store
            .reader()
            .last_judged()
            .await?
            .unwrap_or(self.ground_last);
        let (from, compare_from, reason) = match self.saved.take_up() {
            Some(due) => (due.from, due.compare_from, Some(due.reason)),
            None => (judged + 1, judged + 1, None),
        };
        self.open_lane(LaneId::Live, from, compare_from, reason)
            .await?;
        if self.snapshot.health.watch.is_some() {
            self.happen(EntryKind::WatchSees, wall).await?;
        }
        if self.settings.pace == Pace::Lockstep {
            self.settle(wall).await?;
        } else {
            self.pump(wall).await?;
        }
        Ok(())
    }

    async fn open_lane(
        &mut self,
        lane: LaneId,
        from: i64,
        compare_from: i64,
        reason: Option<String>,
    ) -> Result<(), KeeperError> {
        self.store.forget_checkpoints_from(from).await?;
        let found = self
            .store
            .reader()
            .checkpoint_before(from, &self.fingerprint)
            .await?;
        let checkpoint = found.filter(|c| c.block > self.ground_last);
        let after = checkpoint.as_ref().map_or(self.ground_last, |c| c.block);
        info!(after, compare_from, ?reason, "opening the watch");
        let adoptions = self.saved.adoptions.clone();
        if let Some(judge) = &mut self.judge {
            judge.open(
                lane,
                after,
                checkpoint.map(|c| c.state),
                &adoptions,
                compare_from,
                reason,
            )?;
        }
        Ok(())
    }

    /// Closes the blocks that are due and lets the model have them.
    pub(super) async fn close_blocks(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        let due = self
            .saved
            .closer
            .close(self.settings.plan.length, self.settings.lateness);
        if self.judge.is_none() {
            return Ok(());
        }
        for block in due {
            self.happen(EntryKind::BlockClosed { block }, wall).await?;
        }
        if self.settings.pace == Pace::Lockstep {
            self.start_due(wall).await?;
        }
        self.pump(wall).await
    }

    /// Starts the re-run that is due, once late readings have stopped trickling in.
    pub(super) async fn start_due(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        let Some(due) = &self.saved.due else {
            return Ok(());
        };
        let ripe = due.replaces_live
            || self.settings.pace == Pace::Lockstep
            || wall.0 - due.since.0 >= GATHER;
        let Some(judge) = &mut self.judge else {
            return Ok(());
        };
        if !ripe || judge.rerun.is_some() {
            return Ok(());
        }
        if due.replaces_live {
            judge.live = None;
        }
        let Some(due) = self.saved.take_up() else {
            return Ok(());
        };
        self.open_lane(LaneId::Rerun, due.from, due.compare_from, Some(due.reason))
            .await?;
        self.pump(wall).await
    }

    /// Gives every idle lane its next closed block.
    async fn pump(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        let first_open = self.saved.closer.next.unwrap_or(i64::MIN);
        let ready = match &mut self.judge {
            Some(judge) => {
                if judge.promote(first_open)? {
                    self.saved.running = None;
                    info!("the re-run has caught up and is the live edge now");
                }
                judge.ready(first_open)
            }
            None => return Ok(()),
        };
        for (lane, block) in ready {
            if self.settings.pace == Pace::Live && self.store.mark_attempt(block).await? > ATTEMPTS
            {
                self.give_up(block, "the model failed there three times", wall)
                    .await?;
                return Ok(());
            }
            let block = stored_block(self.store.reader(), &self.settings.plan, block).await?;
            if let Some(judge) = &mut self.judge {
                judge.step(lane, block)?;
            }
        }
        Ok(())
    }

    async fn give_up(&mut self, from: i64, why: &str, wall: Stamp) -> Result<(), KeeperError> {
        error!(from, why, "the watch is blind from this block on");
        if let Some(judge) = &mut self.judge {
            judge.close();
        }
        let why = format!("{why}; renew the ground file with: {}", self.settings.renew);
        self.happen(EntryKind::WatchBlind { from, why }, wall).await
    }

    /// Waits for an answer of the model; pends for ever when there is no model.
    pub async fn answer(&mut self) -> Option<Answer> {
        if self.judge.is_none() {
            return std::future::pending().await;
        }
        self.answers.recv().await
    }

    /// Takes in an answer of the model.
    ///
    /// # Errors
    /// The store cannot be used, or the thread has ended.
    pub async fn answered(&mut self, answer: Answer, wall: Stamp) -> Result<(), KeeperError> {
        match answer {
            Answer::Opened(lane) => {
                if let Some(judge) = &mut self.judge {
                    judge.opened(lane);
                }
            }
            Answer::Stepped(lane, step) => {
                let block = step.block;
                let verdict = self.judge.as_mut().and_then(|j| j.stepped(lane, step));
                if let Some(verdict) = verdict {
                    self.judged(verdict, wall).await?;
                }
                self.keep_checkpoint(lane, block)?;
                if self.settings.pace == Pace::Live {
                    self.store.clear_attempts().await?;
                }
            }
            Answer::Saved { block, state } => {
                self.checkpoint(block, CheckpointKind::Ladder, state, wall)
                    .await?
            }
            Answer::Failed(lane, error) => {
                let block = self.judge.as_ref().and_then(|j| match lane {
                    LaneId::Live => j.live.as_ref().map(|l| l.next),
                    LaneId::Rerun => j.rerun.as_ref().map(|l| l.next),
                });
                if let Some(block) = block {
                    self.give_up(block, &error.to_string(), wall).await?;
                }
            }
        }
        self.pump(wall).await?;
        self.show(wall);
        Ok(())
    }

    async fn judged(&mut self, verdict: Verdict, wall: Stamp) -> Result<(), KeeperError> {
        let stored = match (&verdict.reason, verdict.lane) {
            (None, LaneId::Live) => None,
            _ => self
                .store
                .reader()
                .judged(verdict.step.block)
                .await?
                .map(|j| j.step),
        };
        if stored.as_ref() == Some(&*verdict.step) {
            return Ok(());
        }
        let rerun = stored.and(verdict.reason);
        self.happen(
            EntryKind::Judged {
                step: verdict.step,
                rerun,
            },
            wall,
        )
        .await
    }

    /// Asks for a checkpoint where the ladder wants one: every quarter of a day of blocks, by block number, so
    /// that the same blocks are kept live and in a replay.
    fn keep_checkpoint(&mut self, lane: LaneId, block: i64) -> Result<(), KeeperError> {
        let every = match self.settings.pace {
            Pace::Live => 6 * 3600,
            Pace::Lockstep => 24 * 3600,
        };
        let blocks = (every * Stamp::SECOND / self.settings.plan.length).max(1);
        if (block + 1).rem_euclid(blocks) != 0 {
            return Ok(());
        }
        match &mut self.judge {
            Some(judge) => Ok(judge.save(lane, block)?),
            None => Ok(()),
        }
    }

    async fn checkpoint(
        &self,
        block: i64,
        kind: CheckpointKind,
        state: Vec<u8>,
        wall: Stamp,
    ) -> Result<(), KeeperError> {
        let at = self.settings.plan.start_of(block + 1);
        let fingerprint = self.fingerprint.clone();
        Ok(self
            .store
            .save_checkpoint(Checkpoint {
                block,
                kind,
                at,
                created: wall,
                fingerprint,
                state,
            })
            .await?)
    }

    /// Waits until no lane has anything left to do.
    pub(super) async fn settle(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        loop {
            self.start_due(wall).await?;
            self.pump(wall).await?;
            let busy = self.judge.as_ref().is_some_and(super::Judge::busy);
            if !busy {
                return Ok(());
            }
            let Some(answer) = self.answer().await else {
                return Err(super::Gone.into());
            };
            self.answered(answer, wall).await?;
        }
    }

    /// Takes in what the model has been asked already, without asking for more.
    pub(super) async fn drain(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        while self.judge.as_ref().is_some_and(super::Judge::busy) {
            let Some(answer) = self.answer().await else {
                return Err(super::Gone.into());
            };
            match answer {
                Answer::Opened(lane) => {
                    if let Some(judge) = &mut self.judge {
                        judge.opened(lane);
                    }
                }
                Answer::Stepped(lane, step) => {
                    let verdict = self.judge.as_mut().and_then(|j| j.stepped(lane, step));
                    if let Some(verdict) = verdict {
                        self.judged(verdict, wall).await?;
                    }
                }
                Answer::Saved { block, state } => {
                    self.checkpoint(block, CheckpointKind::Ladder, state, wall)
                        .await?;
                }
                Answer::Failed(_, error) => {
                    warn!(%error, "the model failed while stopping; the block is judged again at the next start");
                    break;
                }
            }
        }
        Ok(())
    }

    /// A checkpoint of the live lane, so that the next start has nothing to catch up.
    pub(super) async fn save_at_stop(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        let after = match &mut self.judge {
            Some(judge) => match &judge.live {
                Some(live) if live.next > self.ground_last + 1 => {
                    let after = live.next - 1;
                    judge.save(LaneId::Live, after)?;
                    after
                }
                _ => return Ok(()),
            },
            None => return Ok(()),
        };
        while let Some(answer) = self.answer().await {
            match answer {
                Answer::Saved { block, state } => {
                    self.checkpoint(block, CheckpointKind::Stop, state, wall)
                        .await?;
                    if block == after {
                        break;
                    }
                }
                Answer::Failed(_, error) => {
                    warn!(%error, "no checkpoint could be taken at the stop");
                    break;
                }
                Answer::Opened(_) | Answer::Stepped(..) => {}
            }
        }
        Ok(())
    }
}
