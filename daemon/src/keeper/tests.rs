//! The keeper over a real store, with a small watch in the model's place: it remembers all blocks, so that a block
//! left out, taken twice or judged from a void checkpoint shows in every later step.

use std::future::Future;
use std::path::Path;
use std::pin::pin;
use std::sync::mpsc as asks;
use std::task::Poll;
use std::thread;

use borewake_model::ModelError;
use serde::{Deserialize, Serialize};
use tempfile::TempDir;

use super::opening::Sight;
use super::*;
use crate::alarm::{LimitSettings, Side};
use crate::record::{
    AlarmId, Cause, ClockEpoch, ClockState, Condition, DeviceStatus, Finding, Holds, Names,
    Quality, Subject, Weighed,
};
use crate::store::{Checkpoint, CheckpointKind, StoreError, StoreOptions};
use crate::watch::blocks::WellFeed;
use crate::watch::lane::{Answer, Ask, LaneId, ModelThread};

const BLOCK: i64 = 3600;
const LAST: i64 = 9;

/// What the small watch remembers.
#[derive(Debug, Clone, Default, Serialize, Deserialize)]
struct Memory {
    next: i64,
    sum: f64,
    since: Option<i64>,
    known: usize,
}

struct Lane {
    memory: Memory,
    adoptions: Vec<Adoption>,
}

impl Lane {
    fn open(checkpoint: Option<Vec<u8>>, adoptions: Vec<Adoption>) -> Result<Self, ModelError> {
        let fresh = Memory {
            next: LAST + 1,
            ..Memory::default()
        };
        let memory: Memory = match checkpoint {
            Some(bytes) => {
                postcard::from_bytes(&bytes).map_err(|e| ModelError::History(e.to_string()))?
            }
            None => fresh,
        };
        let onset = |a: &Adoption| Stamp::from_seconds(a.onset).0 / (BLOCK * Stamp::SECOND);
        let past = adoptions.iter().filter(|a| onset(a) < memory.next).count();
        if past != memory.known {
            let why = format!("{past} adoptions are past, {} known", memory.known);
            return Err(ModelError::History(why));
        }
        Ok(Self { memory, adoptions })
    }

    fn step(&mut self, block: &crate::record::Block) -> Result<Step, ModelError> {
        let memory = &mut self.memory;
        if block.index != memory.next {
            return Err(ModelError::History(format!("{} is due", memory.next)));
        }
        memory.next += 1;
        let read = block.gauges[0].as_ref();
        memory.sum = 0.5 * memory.sum + read.map_or(-1.0, |g| g.mean);
        let onset = |a: &Adoption| Stamp::from_seconds(a.onset).0 / (BLOCK * Stamp::SECOND);
        memory.known = self
            .adoptions
            .iter()
            .filter(|a| onset(a) < memory.next)
            .count();
        memory.sum += 0.125 * memory.known as f64;
        if memory.since.is_none() && read.is_some_and(|g| g.mean > 50.0) {
            memory.since = Some(block.index);
        }
        let found = memory
            .since
            .filter(|&s| !self.adoptions.iter().any(|a| onset(a) == s));
        Ok(Step {
            block: block.index,
            expectations: vec![None],
            departures: vec![None],
            blind: vec![None],
            log_mixture: memory.sum,
            log_threshold: 50.0,
            finding: found.map(|s| finding(s, block.index)),
        })
    }
}

fn finding(since: i64, block: i64) -> Finding {
    let cause = Weighed {
        cause: Cause::GaugeStep,
        subject: Some(Subject::Gauge(0)),
        probability: 0.99,
        log_evidence: 60.0,
    };
    Finding {
        block,
        causes: vec![cause],
        named: true,
        onset: (since * BLOCK) as f64,
        onset_sd: 60.0,
        size: None,
        place: None,
        gauges: Vec::new(),
        log_mixture: 60.0,
        log_threshold: 50.0,
    }
}

fn sight(digest: &str) -> Sight {
    let (asks, inbox) = asks::channel();
    let (to_keeper, answers) = mpsc::unbounded_channel();
    thread::spawn(move || {
        let (mut live, mut rerun) = (None::<Lane>, None::<Lane>);
        while let Ok(ask) = inbox.recv() {
            let answer = match ask {
                Ask::Promote => {
                    live = rerun.take();
                    continue;
                }
                Ask::Open {
                    lane,
                    run,
                    checkpoint,
                    adoptions,
                } => match Lane::open(checkpoint, adoptions) {
                    Ok(opened) => {
                        *(if lane == LaneId::Live {
                            &mut live
                        } else {
                            &mut rerun
                        }) = Some(opened);
                        Answer::Opened(run)
                    }
                    Err(why) => Answer::Failed(run, why),
                },
                Ask::Step { lane, run, block } => {
                    let slot = if lane == LaneId::Live {
                        &mut live
                    } else {
                        &mut rerun
                    };
                    match slot.as_mut().unwrap().step(&block) {
                        Ok(step) => Answer::Stepped(run, Box::new(step)),
                        Err(why) => Answer::Failed(run, why),
                    }
                }
                Ask::Save { lane, run, block } => {
                    let slot = if lane == LaneId::Live { &live } else { &rerun };
                    let state = postcard::to_stdvec(&slot.as_ref().unwrap().memory).unwrap();
                    Answer::Saved { run, block, state }
                }
            };
            if to_keeper.send(answer).is_err() {
                return;
            }
        }
    });
    Sight {
        thread: ModelThread::over(asks),
        answers,
        digest: digest.to_owned(),
        last_block: LAST,
    }
}

fn settings() -> KeeperSettings {
    let names = Names {
        site: "test".into(),
        gauges: vec!["O-1".into()],
        wells: vec!["I-1".into()],
        ..Names::default()
    };
    let limit = LimitSettings::new(
        AlarmId("limit-O-1-above".into()),
        "O-1",
        "p".into(),
        Side::Above,
        70.0,
    );
    KeeperSettings {
        plan: BlockPlan {
            length: BLOCK * Stamp::SECOND,
            hold_rate: BLOCK * Stamp::SECOND,
            wells: vec![WellFeed {
                channel: "q".into(),
                share: 1.0,
                holds: Holds::After,
                feeds: crate::watch::blocks::Feeds::Rate,
            }],
            gauges: vec!["p".into()],
        },
        lateness: 60 * Stamp::SECOND,
        alarms: AlarmSettings {
            limits: vec![limit],
            ..AlarmSettings::new(names, BLOCK as f64)
        },
        replay: false,
        pace: Pace::Live,
        renew: "borewake commission site.toml".into(),
    }
}

fn at(block: i64, minute: i64) -> Stamp {
    Stamp((block * BLOCK + minute * 60) * Stamp::SECOND)
}

fn delivery(sampled: Stamp, received: Stamp, value: f64) -> Delivery {
    let reading = Reading {
        channel: "p".into(),
        sampled,
        received,
        epoch: ClockEpoch(0),
        value: Some(value),
        raw: Some(value),
        quality: Quality::Good,
        device: DeviceStatus::Normal,
        clock: ClockState::Foreign,
    };
    Delivery {
        source: "line".into(),
        readings: vec![reading],
        rejected: Vec::new(),
        ack: None,
    }
}

/// The store of a keeper that may have been dropped a moment ago.
async fn store(folder: &Path) -> Store {
    loop {
        match Store::open(folder, StoreOptions::scratch()).await {
            Ok(opened) => return opened.store,
            Err(StoreError::Locked { .. }) => tokio::task::yield_now().await,
            Err(why) => panic!("{why}"),
        }
    }
}

/// Something that happens to the daemon.
#[derive(Debug, Clone)]
enum Act {
    Deliver(Stamp, Stamp, f64),
    Tick(Stamp),
    /// The finding there is, is adopted.
    Adopt(Stamp),
    /// The model's answers are waited for.
    Settle,
}

impl Act {
    async fn on(&self, keeper: &mut Keeper) {
        match self {
            Self::Deliver(sampled, received, value) => {
                let delivery = delivery(*sampled, *received, *value);
                keeper.deliver(vec![delivery], *received).await.unwrap();
            }
            Self::Tick(wall) => keeper.tick(*wall).await.unwrap(),
            Self::Adopt(wall) => {
                let id = AlarmId("watch".into());
                let alarm = keeper.desk().alarms().find(|a| a.id == id).unwrap();
                if alarm.condition == Condition::Absent {
                    // Done before the crash.
                    return;
                }
                let kind = CommandKind::Adopt {
                    alarm: id,
                    occurrence: alarm.occurrence,
                    adoption: None,
                };
                let command = Command {
                    by: "a test".into(),
                    note: String::new(),
                    kind,
                };
                let reply = keeper.person(command, *wall).await.unwrap();
                assert!(matches!(reply, Reply::Done { .. }), "{reply:?}");
            }
            Self::Settle => settle(keeper).await,
        }
    }
}

async fn settle(keeper: &mut Keeper) {
    while keeper.judge.as_ref().is_some_and(Judge::busy) {
        let answer = keeper.answer().await.unwrap();
        keeper.answered(answer, Stamp(0)).await.unwrap();
    }
}

/// Readings block by block, a limit passed, late readings with a re-run, a finding adopted, and late readings before it.
fn story() -> Vec<Act> {
    let mut acts = Vec::new();
    let hour = |acts: &mut Vec<Act>, block: i64, value: f64| {
        acts.push(Act::Deliver(at(block, 10), at(block, 10), value));
        acts.push(Act::Deliver(at(block, 40), at(block, 40), value + 1.0));
        acts.push(Act::Tick(at(block + 1, 3)));
        acts.push(Act::Settle);
    };
    let late = |acts: &mut Vec<Act>, block: i64, now: Stamp, value: f64| {
        acts.push(Act::Deliver(at(block, 20), now, value));
        acts.push(Act::Tick(now.plus(GATHER)));
        acts.push(Act::Settle);
    };
    for block in 10..15 {
        hour(&mut acts, block, block as f64);
    }
    late(&mut acts, 12, at(15, 4), 30.0);
    hour(&mut acts, 15, 75.0);
    hour(&mut acts, 16, 60.0);
    hour(&mut acts, 17, 61.0);
    acts.push(Act::Adopt(at(18, 4)));
    acts.push(Act::Settle);
    for block in 18..21 {
        hour(&mut acts, block, 60.0);
    }
    // Before the onset: what was said up to the adoption is said again without it, what came after with it.
    late(&mut acts, 13, at(21, 4), 20.0);
    late(&mut acts, 16, at(21, 20), 40.0);
    hour(&mut acts, 21, 60.0);
    acts
}

/// The alarm table, what was last said of every block, and how often in all.
async fn outcome(store: &Store) -> (String, Vec<Step>, Vec<String>) {
    let reader = store.reader();
    let steps = reader.judged_between(i64::MIN, i64::MAX).await.unwrap();
    let moves = reader.transitions_after(0, 1000).await.unwrap();
    let moves = moves
        .iter()
        .map(|(_, t)| {
            format!(
                "{} {:?} {} {}",
                t.alarm.id, t.kind, t.alarm.occurrence, t.note
            )
        })
        .collect();
    (
        reader.alarm_digest().await.unwrap(),
        steps.into_iter().map(|j| j.step).collect(),
        moves,
    )
}

async fn open(folder: &Path) -> Keeper {
    Keeper::with(
        settings(),
        store(folder).await,
        Ok(sight("a")),
        at(10, 0),
        None,
    )
    .await
    .unwrap()
}

async fn undisturbed(acts: &[Act]) -> (String, Vec<Step>, Vec<String>) {
    let folder = TempDir::new().unwrap();
    let mut keeper = open(folder.path()).await;
    for act in acts {
        act.on(&mut keeper).await;
    }
    outcome(keeper.store()).await
}

/// What the small watch says of all blocks in one go, each judged with the findings adopted by then.
fn in_one_go(values: &[(i64, Option<f64>)], adoptions: &[Adoption]) -> Vec<f64> {
    let run = |adoptions: &[Adoption]| {
        let mut lane = Lane::open(None, adoptions.to_vec()).unwrap();
        let gauge = |mean| crate::record::GaugeBlock {
            mean,
            count: 1,
            weights: vec![1.0],
            changed: true,
        };
        values
            .iter()
            .map(|&(index, mean)| {
                let block = crate::record::Block {
                    index,
                    length: BLOCK as f64,
                    instants: vec![0.0],
                    rates: Vec::new(),
                    gauges: vec![mean.map(gauge)],
                };
                lane.step(&block).unwrap().log_mixture
            })
            .collect::<Vec<f64>>()
    };
    let stages: Vec<Vec<f64>> = (0..=adoptions.len())
        .map(|n| run(&adoptions[..n]))
        .collect();
    values
        .iter()
        .enumerate()
        .map(|(i, &(index, _))| {
            let known = adoptions.iter().filter(|a| a.block <= index).count();
            stages[known][i]
        })
        .collect()
}

#[tokio::test]
async fn findings_are_a_function_of_readings_and_of_adoptions_by_block() {
    let folder = TempDir::new().unwrap();
    let mut keeper = open(folder.path()).await;
    for act in story() {
        act.on(&mut keeper).await;
    }
    let mean = |block: i64| match block {
        12 => (12.0 + 30.0 + 13.0) / 3.0,
        13 => (13.0 + 20.0 + 14.0) / 3.0,
        15 => 75.5,
        16 => (60.0 + 40.0 + 61.0) / 3.0,
        17 => 61.5,
        10..=14 => block as f64 + 0.5,
        _ => 60.5,
    };
    let values: Vec<(i64, Option<f64>)> = (10..22).map(|b| (b, Some(mean(b)))).collect();
    let adoptions = keeper.saved.adoptions.clone();
    assert_eq!(adoptions.len(), 1);
    let (_, steps, _) = outcome(keeper.store()).await;
    let blocks: Vec<i64> = steps.iter().map(|s| s.block).collect();
    assert_eq!(blocks, (10..22).collect::<Vec<_>>());
    let said: Vec<f64> = steps.iter().map(|s| s.log_mixture).collect();
    assert_eq!(said, in_one_go(&values, &adoptions));
    assert!(keeper.saved.running.is_none() && keeper.saved.due.is_none());
}

/// Polls until done, or until the fuse has burnt down: then the work is dropped where it waits.
async fn burning<F: Future>(fuse: &mut u32, work: F) -> Option<F::Output> {
    let mut work = pin!(work);
    std::future::poll_fn(|cx| match work.as_mut().poll(cx) {
        Poll::Ready(done) => Poll::Ready(Some(done)),
        Poll::Pending if *fuse == 0 => Poll::Ready(None),
        Poll::Pending => {
            *fuse -= 1;
            Poll::Pending
        }
    })
    .await
}

#[tokio::test]
async fn killed_wherever_it_waits_the_alarm_table_comes_out_the_same() {
    let acts = story();
    let straight = undisturbed(&acts).await;
    for kill in (0..).step_by(7) {
        let folder = TempDir::new().unwrap();
        let mut keeper = open(folder.path()).await;
        let mut fuse = kill;
        let mut killed = false;
        for act in &acts {
            if killed {
                act.on(&mut keeper).await;
            } else if burning(&mut fuse, act.on(&mut keeper)).await.is_none() {
                killed = true;
                drop(keeper);
                keeper = open(folder.path()).await;
                // The sender was told nothing and sends again.
                act.on(&mut keeper).await;
                settle(&mut keeper).await;
            }
        }
        assert_eq!(
            outcome(keeper.store()).await,
            straight,
            "killed after {kill} waits"
        );
        if !killed {
            assert!(kill > 100, "the story waits more often than {kill} times");
            return;
        }
    }
}

#[tokio::test]
async fn an_adoption_while_a_rerun_is_under_way_takes_it_in() {
    let folder = TempDir::new().unwrap();
    let mut keeper = open(folder.path()).await;
    for block in 10..14 {
        let value = if block < 12 { 10.0 } else { 60.0 };
        keeper
            .deliver(
                vec![delivery(at(block, 10), at(block, 10), value)],
                at(block, 10),
            )
            .await
            .unwrap();
        keeper.tick(at(block + 1, 3)).await.unwrap();
        settle(&mut keeper).await;
    }
    let now = at(14, 4);
    keeper
        .deliver(vec![delivery(at(10, 20), now, 30.0)], now)
        .await
        .unwrap();
    keeper.tick(now.plus(GATHER)).await.unwrap();
    assert!(keeper.judge.as_ref().unwrap().rerun.is_some());
    Act::Adopt(now.plus(GATHER)).on(&mut keeper).await;
    // A block is closed before the model has answered anything.
    keeper.tick(at(15, 3)).await.unwrap();
    settle(&mut keeper).await;
    let values = [20.0, 10.0, 60.0, 60.0].map(Some);
    let values: Vec<_> = (10..).zip(values.into_iter().chain([None])).collect();
    let (_, steps, moves) = outcome(keeper.store()).await;
    let said: Vec<f64> = steps.iter().map(|s| s.log_mixture).collect();
    assert_eq!(said, in_one_go(&values, &keeper.saved.adoptions));
    assert_eq!(steps.last().and_then(|s| s.finding.as_ref()), None);
    let raised = moves.iter().filter(|m| m.starts_with("watch Raised"));
    assert_eq!(raised.count(), 1, "{moves:#?}");
}

#[tokio::test]
async fn a_checkpoint_that_cannot_be_read_is_done_without() {
    let folder = TempDir::new().unwrap();
    let mut keeper = open(folder.path()).await;
    for act in &story()[..12] {
        act.on(&mut keeper).await;
    }
    let checkpoint = Checkpoint {
        block: 12,
        kind: CheckpointKind::Stop,
        at: at(13, 0),
        created: at(13, 0),
        fingerprint: keeper.fingerprint.clone(),
        state: Vec::new(),
    };
    keeper.store.save_checkpoint(checkpoint).await.unwrap();
    drop(keeper);
    let mut keeper = open(folder.path()).await;
    settle(&mut keeper).await;
    assert_eq!(keeper.desk().watch_blind_because(), None);
    assert_eq!(
        keeper.judge.as_ref().unwrap().live.as_ref().unwrap().next,
        13
    );
}

#[tokio::test]
async fn sight_comes_back_after_a_clean_stop_without_a_ground_file() {
    let folder = TempDir::new().unwrap();
    let blind = Err("there is no ground file".to_owned());
    let keeper = Keeper::with(
        settings(),
        store(folder.path()).await,
        blind,
        at(10, 0),
        None,
    )
    .await
    .unwrap();
    let site = |keeper: &Keeper| {
        let mut alarms = keeper.desk().alarms();
        alarms.find(|a| a.id.0 == "blind-site").map(|a| a.condition)
    };
    assert_eq!(site(&keeper), Some(Condition::Present));
    keeper.stop(at(10, 1)).await.unwrap();
    let keeper = open(folder.path()).await;
    assert_eq!(site(&keeper), Some(Condition::Absent));
    assert_eq!(keeper.snapshots().borrow().health.watch, None);
}

#[tokio::test]
async fn a_late_reading_ahead_of_what_is_judged_leaves_no_block_out() {
    let folder = TempDir::new().unwrap();
    let mut keeper = open(folder.path()).await;
    // Four blocks are closed and none is judged when the late reading comes and the daemon is killed.
    keeper
        .deliver(vec![delivery(at(14, 50), at(15, 2), 1.0)], at(15, 2))
        .await
        .unwrap();
    keeper
        .deliver(vec![delivery(at(13, 20), at(15, 3), 5.0)], at(15, 3))
        .await
        .unwrap();
    drop(keeper);
    let mut keeper = open(folder.path()).await;
    settle(&mut keeper).await;
    let (_, steps, _) = outcome(keeper.store()).await;
    let blocks: Vec<i64> = steps.iter().map(|s| s.block).collect();
    assert_eq!(blocks, [10, 11, 12, 13]);
    assert!(
        keeper.saved.running.is_none(),
        "the next start has nothing to do again"
    );
}

#[tokio::test]
async fn readings_that_are_always_late_do_not_put_the_rerun_off_for_ever() {
    let folder = TempDir::new().unwrap();
    let mut keeper = open(folder.path()).await;
    keeper.tick(at(14, 0)).await.unwrap();
    settle(&mut keeper).await;
    for minute in 0..90 {
        let now = at(14, minute);
        keeper
            .deliver(
                vec![delivery(now.plus(-3 * BLOCK * Stamp::SECOND), now, 3.0)],
                now,
            )
            .await
            .unwrap();
        keeper.tick(now).await.unwrap();
        settle(&mut keeper).await;
    }
    let judged = keeper.store().reader().judged(11).await.unwrap().unwrap();
    assert_eq!(judged.rerun.as_deref(), Some("late readings"));
}

#[tokio::test]
async fn a_new_ground_file_judges_again_what_it_covers() {
    let folder = TempDir::new().unwrap();
    let mut keeper = open(folder.path()).await;
    let acts = story();
    for act in &acts[..12] {
        act.on(&mut keeper).await;
    }
    keeper.stop(at(13, 5)).await.unwrap();
    let (steps, judged) = {
        let store = store(folder.path()).await;
        let mut keeper = Keeper::with(settings(), store.clone(), Ok(sight("b")), at(13, 6), None)
            .await
            .unwrap();
        assert_eq!(
            keeper.saved.running.as_ref().map(|r| r.reason.as_str()),
            Some("the ground was calibrated anew")
        );
        settle(&mut keeper).await;
        assert!(keeper.saved.running.is_none());
        let (_, steps, _) = outcome(&store).await;
        (steps.len(), store.reader().last_judged().await.unwrap())
    };
    assert_eq!((steps, judged), (3, Some(12)));
}
