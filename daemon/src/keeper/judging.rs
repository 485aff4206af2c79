//! The keeper's dealings with the model: closing blocks, stepping lanes, checkpoints, re-runs.

use tracing::{error, info, warn};

use super::judge::{Judge, Opening, Verdict};
use super::saved::Due;
use super::{ATTEMPTS, GATHER, GATHER_AT_MOST, Keeper, KeeperError, Pace};
use crate::record::{Adoption, Entry, EntryKind, Stamp};
use crate::store::{Checkpoint, CheckpointKind, StoreError};
use crate::watch::lane::{Answer, LaneId};
use crate::watch::stored::stored_block;

/// Entries of closed blocks written in one transaction.
const CLOSED_AT_ONCE: usize = 1000;
/// Name under which the store keeps what the marks of attempts were made with.
const ATTEMPTS_UNDER: &str = "attempts-under";

impl Keeper {
    /// Opens the live lane after the newest checkpoint that still holds, and catches up.
    pub(super) async fn start_watch(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        let first = self.ground_last.saturating_add(1);
        self.saved.closer.next = self.saved.closer.next.max(Some(first));
        self.pardon().await?;
        let next = self.unjudged().await?;
        let (from, compare_from, reason) = match self.saved.take_up() {
            Some(due) => (
                due.from.min(next),
                due.compare_from.min(next),
                Some(due.reason),
            ),
            None => (next, next, None),
        };
        self.open_lane(LaneId::Live, from, compare_from, reason)
            .await?;
        self.see(wall).await?;
        if self.settings.pace == Pace::Lockstep {
            self.settle(wall).await?;
        } else {
            self.pump(wall).await?;
        }
        Ok(())
    }

    /// The first block that was never judged.
    async fn unjudged(&self) -> Result<i64, KeeperError> {
        let judged = self.store.reader().last_judged().await?;
        let done = judged.unwrap_or(i64::MIN).max(self.ground_last);
        Ok(done.saturating_add(1))
    }

    /// Attempts made with another program or ground file say nothing of this one.
    async fn pardon(&self) -> Result<(), KeeperError> {
        let under = self.store.reader().meta(ATTEMPTS_UNDER).await?;
        if under.as_ref() != Some(&self.fingerprint) {
            self.store.clear_attempts().await?;
            self.store
                .set_meta(ATTEMPTS_UNDER, Some(&self.fingerprint))
                .await?;
        }
        Ok(())
    }

    /// Journals that the watch judges again, where it had given up.
    async fn see(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        if self.desk.watch_blind_because().is_some() {
            self.happen(EntryKind::WatchSees, wall).await?;
        }
        Ok(())
    }

    /// The block before an adopted finding comes in: a watch that knows the finding starts no later.
    pub(super) fn before_adoption(&self, adoption: &Adoption) -> i64 {
        adoption
            .first_block(self.settings.plan.seconds())
            .saturating_sub(1)
    }

    /// Whether an adopted finding began after the commissioning history.
    fn after_commissioning(&self, adoption: &Adoption) -> bool {
        let onset = Stamp::from_seconds(adoption.onset);
        self.settings.plan.index_of(onset) > self.ground_last
    }

    /// Opens a lane early enough to judge from `compare_from` on, with the findings that are in the model there. Where
    /// later ones follow, it ends at the first of them.
    async fn open_lane(
        &mut self,
        lane: LaneId,
        from: i64,
        compare_from: i64,
        reason: Option<String>,
    ) -> Result<(), KeeperError> {
        let compare_from = compare_from.max(self.ground_last.saturating_add(1));
        // What began within the commissioning history is part of the calibration.
        let mut adoptions: Vec<Adoption> = self
            .saved
            .adoptions
            .iter()
            .filter(|a| self.after_commissioning(a))
            .cloned()
            .collect();
        let known = adoptions
            .iter()
            .take_while(|a| a.block <= compare_from)
            .count();
        let later = adoptions.split_off(known);
        let until = later.first().map(|a| a.block);
        // A checkpoint after a later finding came in may hold that finding already.
        let from = later
            .iter()
            .map(|a| self.before_adoption(a))
            .fold(from, i64::min);
        self.store.forget_checkpoints_from(from).await?;
        let found = self
            .store
            .reader()
            .checkpoint_before(from, &self.fingerprint)
            .await?;
        let checkpoint = found.filter(|c| c.block > self.ground_last);
        let after = checkpoint.as_ref().map_or(self.ground_last, |c| c.block);
        info!(after, compare_from, ?until, ?reason, "opening the watch");
        if let Some(judge) = &mut self.judge {
            judge.open(
                lane,
                Opening {
                    after,
                    checkpoint: checkpoint.map(|c| c.state),
                    adoptions,
                    compare_from,
                    until,
                    reason,
                },
            )?;
        }
        Ok(())
    }

    /// Closes the blocks that are due and lets the model have them. Without a model they stay open.
    pub(super) async fn close_blocks(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        if self.judge.is_none() {
            return Ok(());
        }
        let due = self
            .saved
            .closer
            .close(self.settings.plan.length, self.settings.lateness);
        // After a long silence there are many: one transaction for each would hold readings up.
        for piece in due.collect::<Vec<_>>().chunks(CLOSED_AT_ONCE) {
            let kinds: Vec<EntryKind> = piece
                .iter()
                .map(|&block| EntryKind::BlockClosed { block })
                .collect();
            let seqs = self.store.append_all(kinds.clone(), wall).await?;
            for (seq, kind) in seqs.into_iter().zip(kinds) {
                self.process(&Entry { seq, wall, kind }, None).await?;
            }
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
            || wall.0.saturating_sub(due.since.0) >= GATHER
            || wall.0.saturating_sub(due.first.0) >= GATHER_AT_MOST;
        let Some(judge) = &mut self.judge else {
            return Ok(());
        };
        if due.replaces_live {
            // Neither lane knows the finding: what they would say from here on is wrong. A re-run under way is taken
            // up again as part of this one.
            judge.close();
        } else if !ripe || judge.rerun.is_some() {
            return Ok(());
        }
        let Some(due) = self.saved.take_up() else {
            return Ok(());
        };
        // The live edge may be behind what is closed: the re-run takes its place, and must leave no block out.
        let next = self.unjudged().await?;
        self.open_lane(
            LaneId::Rerun,
            due.from.min(next),
            due.compare_from.min(next),
            Some(due.reason),
        )
        .await?;
        self.pump(wall).await
    }

    /// Gives every idle lane its next closed block.
    async fn pump(&mut self, wall: Stamp) -> Result<(), KeeperError> {
        let first_open = self.saved.closer.next.unwrap_or(i64::MIN);
        while let Some((lane, block, reason)) = self.judge.as_ref().and_then(Judge::at_adoption) {
            self.open_lane(lane, block, block, reason).await?;
        }
        let Some(judge) = &mut self.judge else {
            return Ok(());
        };
        let caught_up = judge.promote(first_open)?;
        if caught_up || judge.caught_up(first_open) {
            self.saved.running = None;
            info!("the re-run has caught up with the live edge");
        }
        let ready = judge.ready(first_open);
        if caught_up {
            self.see(wall).await?;
        }
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
            Answer::Opened(run) => {
                if let Some(judge) = &mut self.judge {
                    judge.opened(run);
                }
            }
            Answer::Stepped(run, step) => {
                let block = step.block;
                let verdict = self.judge.as_mut().and_then(|j| j.stepped(run, step));
                if let Some(verdict) = verdict {
                    self.judged(verdict, wall).await?;
                }
                self.keep_checkpoint(run, block)?;
                if self.settings.pace == Pace::Live {
                    self.store.clear_attempts().await?;
                }
            }
            Answer::Saved { run, block, state } => {
                self.checkpoint(run, block, CheckpointKind::Ladder, state, wall)
                    .await?;
            }
            Answer::Failed(run, error) => {
                let failed = self.judge.as_ref().and_then(|j| j.lane(run));
                if let Some((id, lane)) = failed.map(|(id, lane)| (id, lane.clone())) {
                    match lane.opening.filter(|&block| block > self.ground_last) {
                        Some(block) => {
                            warn!(block, %error, "a checkpoint is of no use; an earlier one is taken");
                            self.open_lane(id, block, lane.compare_from, lane.reason)
                                .await?;
                        }
                        None => {
                            self.give_up(lane.next, &error.to_string(), wall).await?;
                        }
                    }
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
        let block = verdict.step.block;
        let kind = EntryKind::Judged {
            step: verdict.step,
            rerun,
        };
        match self.happen(kind, wall).await {
            // Numbers that are not finite do not read back: the model has failed, and only the model.
            Err(KeeperError::Store(why @ StoreError::Unwritable { .. })) => {
                self.give_up(block, &why.to_string(), wall).await
            }
            other => other,
        }
    }

    /// Asks for a checkpoint where the ladder wants one: every quarter of a day of blocks, by block number, so
    /// that every lane that passes a block replaces what another lane kept there.
    fn keep_checkpoint(&mut self, run: u64, block: i64) -> Result<(), KeeperError> {
        let every = match self.settings.pace {
            Pace::Live => 6 * 3600,
            Pace::Lockstep => 24 * 3600,
        };
        let blocks = (every * Stamp::SECOND / self.settings.plan.length).max(1);
        if (block + 1).rem_euclid(blocks) != 0 {
            return Ok(());
        }
        let Some(judge) = &mut self.judge else {
            return Ok(());
        };
        match judge.lane(run).map(|(lane, _)| lane) {
            Some(lane) => Ok(judge.save(lane, block)?),
            None => Ok(()),
        }
    }

    /// Whether a lane's state after `block` was made from what is stored and adopted now.
    fn holds(&self, run: u64, block: i64) -> bool {
        let Some(judge) = &self.judge else {
            return false;
        };
        let from = |due: &Option<Due>| due.as_ref().map_or(i64::MAX, |due| due.from);
        match judge.lane(run) {
            Some((LaneId::Live, _)) if judge.rerun.is_some() => {
                block < from(&self.saved.due).min(from(&self.saved.running))
            }
            Some(_) => block < from(&self.saved.due),
            None => false,
        }
    }

    /// Keeps a checkpoint, unless it was overtaken by what has come meanwhile.
    async fn checkpoint(
        &self,
        run: u64,
        block: i64,
        kind: CheckpointKind,
        state: Vec<u8>,
        wall: Stamp,
    ) -> Result<(), KeeperError> {
        if !self.holds(run, block) {
            return Ok(());
        }
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
            let busy = self.judge.as_ref().is_some_and(Judge::busy);
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
        while self.judge.as_ref().is_some_and(Judge::busy) {
            let Some(answer) = self.answer().await else {
                return Err(super::Gone.into());
            };
            match answer {
                Answer::Opened(run) => {
                    if let Some(judge) = &mut self.judge {
                        judge.opened(run);
                    }
                }
                Answer::Stepped(run, step) => {
                    let verdict = self.judge.as_mut().and_then(|j| j.stepped(run, step));
                    if let Some(verdict) = verdict {
                        self.judged(verdict, wall).await?;
                    }
                }
                Answer::Saved { run, block, state } => {
                    self.checkpoint(run, block, CheckpointKind::Ladder, state, wall)
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
        let asked = match &mut self.judge {
            Some(judge) => match &judge.live {
                Some(live) if live.next > self.ground_last.saturating_add(1) => {
                    let (run, after) = (live.run, live.next.saturating_sub(1));
                    judge.save(LaneId::Live, after)?;
                    (run, after)
                }
                _ => return Ok(()),
            },
            None => return Ok(()),
        };
        while let Some(answer) = self.answer().await {
            match answer {
                Answer::Saved { run, block, state } => {
                    self.checkpoint(run, block, CheckpointKind::Stop, state, wall)
                        .await?;
                    if (run, block) == asked {
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
