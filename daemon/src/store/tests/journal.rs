use super::super::{Checkpoint, CheckpointKind, StoreError};
use super::{delivery, fresh, open, reading, step};
use crate::record::{ClockEpoch, EntryKind, Reading, Stamp};

fn judged(block: i64, log_mixture: f64, rerun: Option<&str>) -> EntryKind {
    EntryKind::Judged {
        step: Box::new(step(block, log_mixture)),
        rerun: rerun.map(ToOwned::to_owned),
    }
}

#[tokio::test]
async fn entries_come_back_in_the_order_they_went_in() {
    let (_dir, store) = fresh().await;
    let start = EntryKind::Start {
        version: "0.1.0".to_owned(),
        ground: None,
    };
    assert_eq!(store.append(start.clone(), Stamp(1)).await.unwrap(), 1);
    store
        .commit(vec![delivery(vec![reading("a", 1, 1.0)])], Stamp(2))
        .await
        .unwrap();
    let more = vec![
        EntryKind::BlockClosed { block: 4 },
        judged(4, 1.0, None),
        EntryKind::Tick,
    ];
    assert_eq!(
        store.append_all(more.clone(), Stamp(3)).await.unwrap(),
        vec![3, 4, 5]
    );
    let entries = store.reader().entries_after(0, 100).await.unwrap();
    let kinds: Vec<_> = entries.iter().map(|e| e.kind.clone()).collect();
    let mut expected = vec![start, EntryKind::Batch { readings: 1 }];
    expected.extend(more);
    assert_eq!(kinds, expected);
    assert_eq!(
        entries.iter().map(|e| e.seq).collect::<Vec<_>>(),
        vec![1, 2, 3, 4, 5]
    );
    let page = store.reader().entries_after(2, 2).await.unwrap();
    assert_eq!(page.iter().map(|e| e.seq).collect::<Vec<_>>(), vec![3, 4]);
}

#[tokio::test]
async fn entries_asked_for_at_once_from_many_tasks_have_numbers_without_gap() {
    let (_dir, store) = fresh().await;
    let mut tasks = tokio::task::JoinSet::new();
    for n in 0..40 {
        let store = store.clone();
        tasks.spawn(async move {
            if n % 2 == 0 {
                store.append(EntryKind::Tick, Stamp(n)).await.unwrap()
            } else {
                let batch = vec![delivery(vec![reading("a", n, 1.0)])];
                store.commit(batch, Stamp(n)).await.unwrap().seq.unwrap()
            }
        });
    }
    let mut seqs = tasks.join_all().await;
    seqs.sort_unstable();
    assert_eq!(seqs, (1..=40).collect::<Vec<_>>());
    assert!(store.reader().verify_integrity().await.unwrap().is_empty());
}

#[tokio::test]
async fn the_latest_revision_of_a_block_stands_and_the_others_stay() {
    let (_dir, store) = fresh().await;
    for entry in [
        judged(7, 1.0, None),
        judged(8, 2.0, None),
        judged(7, 3.0, Some("late readings")),
    ] {
        store.append(entry, Stamp(0)).await.unwrap();
    }
    let reader = store.reader();
    let seven = reader.judged(7).await.unwrap().unwrap();
    assert_eq!(
        (seven.step, seven.revision, seven.seq),
        (step(7, 3.0), 2, 3)
    );
    assert_eq!(seven.rerun.as_deref(), Some("late readings"));
    let all = reader.judged_between(0, 9).await.unwrap();
    assert_eq!(
        all.iter().map(|j| j.step.block).collect::<Vec<_>>(),
        vec![7, 8]
    );
    assert_eq!(reader.judged_between(0, 8).await.unwrap().len(), 1);
    assert_eq!(reader.revisions(7).await.unwrap().len(), 2);
    assert_eq!(reader.last_judged().await.unwrap(), Some(8));
    assert_eq!(reader.judged(9).await.unwrap(), None);
}

#[tokio::test]
async fn what_would_not_read_back_is_refused_at_once() {
    let (_dir, store) = fresh().await;
    let error = store
        .append(judged(1, f64::NEG_INFINITY, None), Stamp(0))
        .await
        .unwrap_err();
    assert!(matches!(error, StoreError::Unwritable { .. }), "{error}");
    let batch = EntryKind::Batch { readings: 1 };
    assert!(store.append(batch, Stamp(0)).await.is_err());
    // Nothing of a refused list stays.
    let list = vec![EntryKind::Tick, judged(1, f64::NAN, None)];
    assert!(store.append_all(list, Stamp(0)).await.is_err());
    assert_eq!(store.append(EntryKind::Tick, Stamp(0)).await.unwrap(), 1);
}

#[tokio::test]
async fn checkpoints_are_found_by_block_and_fingerprint() {
    let (dir, store) = fresh().await;
    let checkpoint = |block: i64, fingerprint: &str| Checkpoint {
        block,
        kind: CheckpointKind::Ladder,
        at: Stamp(block * 3600 * Stamp::SECOND),
        created: Stamp(0),
        fingerprint: fingerprint.to_owned(),
        state: vec![block.to_le_bytes()[0]; 3],
    };
    for block in 1..=4 {
        store.save_checkpoint(checkpoint(block, "x")).await.unwrap();
    }
    store.save_checkpoint(checkpoint(5, "y")).await.unwrap();
    store.close().await.unwrap();
    let store = open(dir.path()).await.store;
    let reader = store.reader();
    // 1 is the successor on every rung; 2 to 4 were dropped when 5 came.
    assert_eq!(
        reader.checkpoint_before(i64::MAX, "x").await.unwrap(),
        Some(checkpoint(1, "x"))
    );
    assert_eq!(
        reader.checkpoint_before(i64::MAX, "y").await.unwrap(),
        Some(checkpoint(5, "y"))
    );
    assert_eq!(reader.checkpoint_before(5, "y").await.unwrap(), None);
    store.forget_checkpoints_from(5).await.unwrap();
    assert_eq!(reader.checkpoint_before(i64::MAX, "y").await.unwrap(), None);
    assert_eq!(reader.checkpoint_before(1, "x").await.unwrap(), None);
}

#[tokio::test]
async fn attempts_and_clock_runs_are_counted_across_restarts() {
    let (dir, store) = fresh().await;
    assert_eq!(store.mark_attempt(9).await.unwrap(), 1);
    assert_eq!(store.mark_attempt(9).await.unwrap(), 2);
    assert_eq!(store.advance_clock().await.unwrap().0, 1);
    store.close().await.unwrap();
    let store = open(dir.path()).await.store;
    assert_eq!(store.mark_attempt(9).await.unwrap(), 3);
    assert_eq!(store.reader().attempts(9).await.unwrap(), 3);
    assert_eq!(store.reader().attempts(8).await.unwrap(), 0);
    store.clear_attempts().await.unwrap();
    assert_eq!(store.mark_attempt(9).await.unwrap(), 1);
    assert_eq!(store.advance_clock().await.unwrap().0, 2);
}

#[tokio::test]
async fn a_run_of_the_clock_that_readings_bear_is_not_given_again() {
    let (_dir, store) = fresh().await;
    assert_eq!(store.advance_clock().await.unwrap().0, 1);
    // The clock was stepped twice while the daemon ran.
    let stepped = Reading {
        epoch: ClockEpoch(3),
        ..reading("p", 10, 1.0)
    };
    store
        .commit(vec![delivery(vec![stepped])], Stamp(0))
        .await
        .unwrap();
    assert_eq!(store.advance_clock().await.unwrap().0, 4);
}
