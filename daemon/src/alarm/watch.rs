//! The alarm of the watch: one name, a new occurrence for each new finding after the one before ended.
//!
//! Evidence never fades by itself: the alarm stays while the watch finds something, and returns only after it has
//! found nothing for [`WatchAlarm::quiet`] of judged blocks. A re-run may take blocks away from under an alarm; it is
//! then `revised`, with the reason, and stays in the history.

use serde::{Deserialize, Serialize};

use super::book::{Book, Matter, When};
use super::life::Event;
use super::settings::{AlarmSettings, WatchAlarm};
use super::spans::Spans;
use super::words;
use crate::record::{
    Adoption, AlarmId, AlarmKind, Finding, Size, Stamp, Step, Transition, TransitionKind,
};

/// Half width of a 95 % interval in standard deviations.
const INTERVAL: f64 = 1.96;

/// Name of the alarm of the watch.
pub(super) fn watch_id() -> AlarmId {
    AlarmId("watch".to_owned())
}

/// What the alarm of the watch remembers between blocks.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub(super) struct WatchState {
    /// Newest block judged.
    latest: Option<i64>,
    /// Blocks that hold the newest occurrence's finding.
    support: Spans,
    /// Blocks never judged since the last one with a finding.
    skipped: i64,
    /// Whether the newest occurrence was adopted: older blocks then raise nothing.
    adopted: bool,
    /// The finding as last published.
    said: Option<Finding>,
}

/// How far a finding has moved from what was said of it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
enum News {
    /// Nothing worth a message.
    None,
    /// Worth a message; nobody need act again.
    Update,
    /// Must be seen again.
    Change,
}

impl WatchState {
    /// Takes what the watch said of a block; `rerun` is why it was judged again.
    pub(super) fn judged(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        step: &Step,
        rerun: Option<&str>,
        recorded: Stamp,
    ) -> Vec<Transition> {
        let fresh = self.latest.is_none_or(|latest| step.block > latest);
        if fresh {
            if let Some(latest) = self.latest {
                let gap = step.block.saturating_sub(latest).saturating_sub(1);
                self.skipped = self.skipped.saturating_add(gap);
            }
            self.latest = Some(step.block);
        }
        let when = When {
            at: block_end(step.block, settings.block),
            recorded,
        };
        // Blocks beyond the newest are news, also where a re-run was the way to reach them.
        let why = match rerun {
            _ if fresh => "",
            Some(reason) => reason,
            None => "the block was judged again",
        };
        match step
            .finding
            .as_ref()
            .map(|f| tidy(f, step.block, settings.block))
        {
            Some(finding) => self.found(book, settings, finding, fresh, why, when),
            None => self.cleared(book, settings, step.block, fresh, why, when),
        }
    }

    fn found(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        finding: Finding,
        fresh: bool,
        why: &str,
        when: When,
    ) -> Vec<Transition> {
        let block = finding.block;
        if book.present(&watch_id()) {
            self.support(block);
            return self.update(book, settings, finding, why, when);
        }
        if self.adopted && !fresh {
            self.support(block);
            return Vec::new();
        }
        let quiet = quiet_blocks(settings);
        if !fresh {
            let belongs = self
                .support
                .last()
                .is_some_and(|last| last.abs_diff(block) < quiet.unsigned_abs());
            if belongs {
                self.support(block);
                if self.silence() >= quiet {
                    return Vec::new();
                }
            }
        }
        let mut transitions = self.raise(book, settings, finding, why, when);
        if self.silence() >= quiet {
            transitions.extend(returned(book, when, "it ended before it was found"));
        }
        transitions
    }

    fn raise(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        finding: Finding,
        why: &str,
        when: When,
    ) -> Vec<Transition> {
        self.support = Spans::default();
        self.support(finding.block);
        self.adopted = false;
        self.said = Some(finding.clone());
        let matter = Matter {
            id: watch_id(),
            kind: AlarmKind::Watch,
            latching: false,
            priority: settings.watch.priorities.of_finding(&finding),
            since: Stamp::from_seconds(finding.onset),
            summary: words::finding(&finding, &settings.names),
            response: settings.watch.response.clone(),
            finding: Some(finding),
        };
        let note = if why.is_empty() {
            String::new()
        } else {
            format!("found on judging again: {why}")
        };
        book.raise(matter, when, &note)
    }

    fn update(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        finding: Finding,
        why: &str,
        when: When,
    ) -> Vec<Transition> {
        let id = watch_id();
        let Some(alarm) = book.get_mut(&id) else {
            return Vec::new();
        };
        if alarm
            .finding
            .as_ref()
            .is_some_and(|held| finding.block < held.block)
        {
            return Vec::new();
        }
        alarm.priority = settings.watch.priorities.of_finding(&finding);
        alarm.since = Stamp::from_seconds(finding.onset);
        alarm.summary = words::finding(&finding, &settings.names);
        alarm.finding = Some(finding.clone());

        let (news, due) = self.said.as_ref().map_or((News::Change, true), |said| {
            let age = finding.block.saturating_sub(said.block);
            let newly_named = finding.named && !said.named;
            (
                news(said, &finding, &settings.watch, settings.block),
                age >= settings.watch.every || newly_named || !why.is_empty(),
            )
        });
        if news == News::None || !due {
            return Vec::new();
        }
        self.said = Some(finding);
        let kind = match news {
            _ if !why.is_empty() => TransitionKind::Revised,
            News::Change => TransitionKind::Changed,
            _ => TransitionKind::Updated,
        };
        if news == News::Change {
            book.moved(&id, &Event::Changed, kind, when, why)
        } else {
            book.told(&id, kind, when, why)
        }
    }

    fn cleared(
        &mut self,
        book: &mut Book,
        settings: &AlarmSettings,
        block: i64,
        fresh: bool,
        why: &str,
        when: When,
    ) -> Vec<Transition> {
        let present = book.present(&watch_id());
        if fresh {
            if present && self.silence() >= quiet_blocks(settings) {
                let note = format!(
                    "nothing was found for {}",
                    words::duration(settings.watch.quiet)
                );
                return returned(book, when, &note);
            }
            return Vec::new();
        }
        if !self.support.contains(block) {
            return Vec::new();
        }
        self.support.remove(block);
        let gone = self.support.is_empty();
        if !(gone || present && self.silence() >= quiet_blocks(settings)) {
            return Vec::new();
        }
        let note = if gone {
            format!("no block supports it any more: {why}")
        } else {
            format!("the newest blocks no longer support it: {why}")
        };
        if present {
            book.moved(
                &watch_id(),
                &Event::Absent,
                TransitionKind::Revised,
                when,
                &note,
            )
        } else {
            book.told(&watch_id(), TransitionKind::Revised, when, &note)
        }
    }

    /// What adopting the present finding means, from the next block to be judged on.
    ///
    /// # Errors
    /// There is no finding to adopt; the reason in words.
    pub(super) fn adoption(&self, book: &Book) -> Result<Adoption, String> {
        let id = watch_id();
        let finding = book
            .get(&id)
            .filter(|_| book.present(&id))
            .and_then(|alarm| alarm.finding.as_ref())
            .ok_or_else(|| "the watch has no finding at present".to_owned())?;
        let leading = finding
            .causes
            .first()
            .ok_or_else(|| "the finding has no cause".to_owned())?;
        Ok(Adoption {
            block: self.latest.unwrap_or(finding.block).saturating_add(1),
            cause: leading.cause,
            subject: leading.subject,
            onset: finding.onset,
            onset_sd: finding.onset_sd,
            size: finding.size,
            place: finding.place,
        })
    }

    /// The present finding was adopted.
    pub(super) fn adopted(&mut self) {
        self.adopted = true;
        self.said = None;
    }

    fn support(&mut self, block: i64) {
        self.support.insert(block);
        if self.latest == Some(block) {
            self.skipped = 0;
        }
    }

    /// Judged blocks since the last one that supports the newest occurrence.
    fn silence(&self) -> i64 {
        match (self.latest, self.support.last()) {
            (Some(latest), Some(last)) => latest.saturating_sub(last).saturating_sub(self.skipped),
            _ => i64::MAX,
        }
    }
}

fn returned(book: &mut Book, when: When, note: &str) -> Vec<Transition> {
    book.moved(
        &watch_id(),
        &Event::Absent,
        TransitionKind::Returned,
        when,
        note,
    )
}

/// End of a block in sample time.
pub(super) fn block_end(block: i64, length: f64) -> Stamp {
    #[expect(
        clippy::cast_precision_loss,
        reason = "block numbers stay far below 2^53"
    )]
    let next = block.saturating_add(1) as f64;
    Stamp::from_seconds(next * length)
}

/// How many judged blocks without a finding count as returned; at least one.
fn quiet_blocks(settings: &AlarmSettings) -> i64 {
    blocks(settings.watch.quiet, settings.block)
}

/// Blocks in a time, rounded up, at least one.
fn blocks(seconds: f64, block: f64) -> i64 {
    #[expect(
        clippy::cast_possible_truncation,
        reason = "float-to-int casts saturate, which is what is wanted"
    )]
    let count = (seconds / block).ceil() as i64;
    count.max(1)
}

/// A finding of this block whose numbers are all finite, so that it can be kept and sent as JSON: what is not finite is
/// left out.
fn tidy(finding: &Finding, block: i64, length: f64) -> Finding {
    let mut f = finding.clone();
    f.block = block;
    f.size = f.size.filter(|s| s.value.is_finite() && s.sd.is_finite());
    f.place = f
        .place
        .filter(|p| p.x.is_finite() && p.y.is_finite() && p.radius_90.is_finite());
    f.gauges.retain(|g| g.1.is_finite() && g.2.is_finite());
    for cause in &mut f.causes {
        cause.probability = finite(cause.probability, 0.0);
        cause.log_evidence = finite(cause.log_evidence, 0.0);
    }
    f.onset = finite(f.onset, block_end(block, length).seconds());
    f.onset_sd = finite(f.onset_sd, length);
    f.log_mixture = finite(f.log_mixture, 0.0);
    f.log_threshold = finite(f.log_threshold, 0.0);
    f
}

fn finite(value: f64, otherwise: f64) -> f64 {
    if value.is_finite() { value } else { otherwise }
}

fn news(said: &Finding, now: &Finding, watch: &WatchAlarm, block: f64) -> News {
    let leading = |f: &Finding| f.causes.first().map(|w| (w.cause, w.subject));
    let beyond = |sds: f64| match (said.size, now.size) {
        (Some(a), Some(b)) => moved(a, b, sds),
        (None, None) => false,
        _ => true,
    };
    let priorities = watch.priorities;
    if leading(said) != leading(now)
        || priorities.of_finding(now) > priorities.of_finding(said)
        || (said.size.is_some() && now.size.is_some() && beyond(INTERVAL))
    {
        return News::Change;
    }
    let place = match (said.place, now.place) {
        (Some(a), Some(b)) => {
            a.layer != b.layer || (a.x - b.x).hypot(a.y - b.y) > 0.5 * a.radius_90.max(1.0)
        }
        (None, None) => false,
        _ => true,
    };
    let onset = (said.onset - now.onset).abs() > said.onset_sd.max(block);
    let old = now.block.saturating_sub(said.block) >= blocks(watch.refresh, block);
    if said.named != now.named || beyond(1.0) || place || onset || old {
        return News::Update;
    }
    News::None
}

/// Whether a size lies more than `sds` of its stated deviations from what was said.
fn moved(said: Size, now: Size, sds: f64) -> bool {
    said.unit != now.unit || (said.value - now.value).abs() > sds * said.sd
}

#[cfg(test)]
mod tests;
