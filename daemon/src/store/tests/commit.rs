use proptest::prelude::*;

use super::super::{Retention, StoreError, StoreOptions};
use super::{delivery, fresh, open, options, reading};
use crate::record::{
    AckToken, ClockEpoch, Delivery, EntryKind, Reading, RejectReason, Rejected, Stamp,
};
use crate::store::{Applied, Store};

#[tokio::test]
async fn new_readings_are_stored_and_read_back_in_commit_order() {
    let (_dir, store) = fresh().await;
    let mut batch = delivery(vec![
        reading("b", 10, 2.0),
        reading("a", 10, 0.1 + 0.2),
        reading("b", 9, 1e-300),
    ]);
    batch.ack = Some(AckToken(42));
    let committed = store.commit(vec![batch], Stamp(1)).await.unwrap();
    assert_eq!(committed.seq, Some(1));
    assert_eq!(
        committed.readings,
        vec![
            reading("b", 9, 1e-300),
            reading("a", 10, 0.1 + 0.2),
            reading("b", 10, 2.0),
        ]
    );
    assert_eq!(committed.acks, vec![("skid".into(), AckToken(42))]);
    assert_eq!((committed.late, committed.duplicates), (1, 0));

    let reader = store.reader();
    assert_eq!(reader.readings_of(1).await.unwrap(), committed.readings);
    let entries = reader.entries_after(0, 10).await.unwrap();
    assert_eq!(entries.len(), 1);
    assert_eq!(entries[0].kind, EntryKind::Batch { readings: 3 });
    assert_eq!(
        reader.channels().await.unwrap(),
        vec!["a".into(), "b".into()]
    );
    assert_eq!(
        reader.newest(&"b".into()).await.unwrap(),
        Some(reading("b", 10, 2.0))
    );
    assert_eq!(
        reader
            .last_before(&"b".into(), Stamp(10 * Stamp::SECOND))
            .await
            .unwrap(),
        Some(reading("b", 9, 1e-300))
    );
    assert_eq!(
        reader.first_sample().await.unwrap(),
        Some(Stamp(9 * Stamp::SECOND))
    );
    assert_eq!(reader.newest(&"c".into()).await.unwrap(), None);
}

#[tokio::test]
async fn duplicates_are_dropped_conflicts_kept_and_late_readings_counted() {
    let (_dir, store) = fresh().await;
    let first = vec![reading("a", 1, 1.0), reading("a", 2, 2.0)];
    store
        .commit(vec![delivery(first.clone())], Stamp(0))
        .await
        .unwrap();

    // Only what is known already: no journal entry.
    let again = store
        .commit(vec![delivery(first.clone())], Stamp(0))
        .await
        .unwrap();
    assert_eq!((again.seq, again.duplicates), (None, 2));
    assert!(again.readings.is_empty());

    // The same key twice within the batch, a conflict with the store, another epoch, a late one.
    let other_epoch = Reading {
        epoch: ClockEpoch(3),
        ..reading("a", 2, 9.0)
    };
    let mixed = vec![
        reading("a", 2, 5.0),
        reading("a", 3, 3.0),
        reading("a", 3, 3.0),
        reading("a", 3, 4.0),
        other_epoch.clone(),
        reading("a", 0, 0.0),
    ];
    let committed = store.commit(vec![delivery(mixed)], Stamp(0)).await.unwrap();
    assert_eq!(committed.seq, Some(2));
    assert_eq!(
        committed.readings,
        vec![reading("a", 0, 0.0), other_epoch, reading("a", 3, 3.0)]
    );
    assert_eq!(
        (committed.duplicates, committed.conflicts, committed.late),
        (1, 2, 2)
    );
    let reasons: Vec<_> = committed.rejected.iter().map(|r| r.reason).collect();
    assert_eq!(reasons, vec![RejectReason::Conflict; 2]);
    assert_eq!(
        committed.rejected[0].detail,
        "2 stands for this instant, 5 was delivered"
    );
    let kept = store.reader().rejected_after(0, 10).await.unwrap();
    assert_eq!(
        kept.into_iter().map(|(_, r)| r).collect::<Vec<_>>(),
        committed.rejected
    );
    assert!(store.reader().verify_integrity().await.unwrap().is_empty());
}

#[tokio::test]
async fn what_is_not_finite_is_rejected_and_zero_has_one_sign() {
    let (_dir, store) = fresh().await;
    let mut odd_raw = reading("a", 4, -0.0);
    odd_raw.raw = Some(f64::NAN);
    let readings = vec![
        reading("a", 1, f64::NAN),
        reading("a", 2, f64::INFINITY),
        odd_raw,
    ];
    let committed = store
        .commit(vec![delivery(readings.clone())], Stamp(0))
        .await
        .unwrap();
    assert_eq!(committed.readings.len(), 1);
    assert_eq!(committed.readings[0].raw, None);
    assert_eq!(committed.rejected.len(), 2);
    assert!(
        committed
            .rejected
            .iter()
            .all(|r| r.reason == RejectReason::NotANumber)
    );
    assert_eq!(
        store.reader().readings_of(1).await.unwrap(),
        committed.readings
    );
    let again = store
        .commit(vec![delivery(readings)], Stamp(0))
        .await
        .unwrap();
    assert_eq!(again.duplicates, 1);
}

#[tokio::test]
async fn refusals_of_intake_are_kept_without_a_journal_entry() {
    let (_dir, store) = fresh().await;
    let refused = Rejected {
        channel: Some("a".into()),
        source: "skid".into(),
        sampled: None,
        received: Stamp(3),
        raw: "\\x00junk".to_owned(),
        reason: RejectReason::Malformed,
        detail: "no number".to_owned(),
    };
    let batch = Delivery {
        rejected: vec![refused.clone(); 70],
        ..delivery(Vec::new())
    };
    let committed = store.commit(vec![batch], Stamp(0)).await.unwrap();
    assert_eq!(committed.seq, None);
    let kept = store.reader().rejected_after(0, 100).await.unwrap();
    assert_eq!(kept.len(), 70);
    assert_eq!(kept[69].1, refused);
    assert_eq!(store.reader().last_seq().await.unwrap(), 0);
}

#[tokio::test]
async fn below_the_low_water_mark_readings_come_back_and_alarms_are_written() {
    let dir = tempfile::tempdir().unwrap();
    let scarce = StoreOptions {
        low_water: u64::MAX,
        ..options()
    };
    let store = Store::open(dir.path(), scarce).await.unwrap().store;
    let batch = vec![delivery(vec![reading("a", 1, 1.0)])];
    let refused = store.commit(batch.clone(), Stamp(0)).await.unwrap_err();
    assert!(matches!(refused.error, StoreError::LowSpace { .. }));
    assert_eq!(refused.deliveries, batch);
    store.append(EntryKind::Tick, Stamp(0)).await.unwrap();
}

#[tokio::test]
async fn retention_takes_the_oldest_in_chunks_and_nothing_else() {
    let (_dir, store) = fresh().await;
    for second in 0..10 {
        let batch = vec![reading("a", second, 1.0), reading("b", second, 2.0)];
        store.commit(vec![delivery(batch)], Stamp(0)).await.unwrap();
    }
    let retention = Retention {
        before: Stamp(7 * Stamp::SECOND),
        chunk: 5,
    };
    let first = store.retain(retention).await.unwrap();
    assert_eq!((first.readings, first.more), (5, true));
    let mut gone = first.readings;
    loop {
        let retained = store.retain(retention).await.unwrap();
        gone += retained.readings;
        if !retained.more {
            break;
        }
    }
    assert_eq!(gone, 14);
    let left = store
        .reader()
        .readings_between(&["a".into(), "b".into()], Stamp(0), Stamp(i64::MAX))
        .await
        .unwrap();
    assert_eq!(left.len(), 6);
    assert_eq!(left[0], reading("a", 7, 1.0));
    assert_eq!(store.reader().last_seq().await.unwrap(), 10);
    assert!(store.reader().verify_integrity().await.unwrap().is_empty());
}

#[tokio::test]
async fn a_batch_goes_with_its_last_reading_and_nothing_else_of_the_journal_does() {
    let (_dir, store) = fresh().await;
    for second in 0..10 {
        let batch = vec![reading("a", second, 1.0)];
        store.commit(vec![delivery(batch)], Stamp(0)).await.unwrap();
        store.append(EntryKind::Tick, Stamp(0)).await.unwrap();
    }
    let retention = Retention {
        before: Stamp(7 * Stamp::SECOND),
        chunk: 100,
    };
    // The desk has not been there yet: what it must still process stays.
    let first = store.retain(retention).await.unwrap();
    assert_eq!((first.readings, first.batches), (7, 0));
    let applied = Applied {
        position: 20,
        ..Applied::default()
    };
    store.apply(applied).await.unwrap();
    let second = store.retain(retention).await.unwrap();
    assert_eq!((second.readings, second.batches), (0, 7));
    let entries = store.reader().entries_after(0, 100).await.unwrap();
    assert_eq!(entries.len(), 13);
    let ticks = entries.iter().filter(|e| e.kind == EntryKind::Tick).count();
    assert_eq!(ticks, 10);
    assert_eq!(store.reader().last_seq().await.unwrap(), 20);
    assert!(store.reader().verify_integrity().await.unwrap().is_empty());
    store.append(EntryKind::Tick, Stamp(0)).await.unwrap();
    assert_eq!(store.reader().last_seq().await.unwrap(), 21);
}

#[tokio::test]
async fn a_batch_that_lost_a_row_is_found() {
    let (dir, store) = fresh().await;
    let batch = vec![reading("a", 1, 1.0), reading("a", 2, 2.0)];
    store.commit(vec![delivery(batch)], Stamp(0)).await.unwrap();
    store.close().await.unwrap();

    use sqlx::{ConnectOptions, Connection};
    let path = super::super::options::database(dir.path());
    let mut conn = super::super::options::writing(&path, super::super::Durability::Full)
        .connect()
        .await
        .unwrap();
    sqlx::query("delete from reading where sampled = 1000000")
        .execute(&mut conn)
        .await
        .unwrap();
    sqlx::query("delete from channel")
        .execute(&mut conn)
        .await
        .unwrap();
    conn.close().await.unwrap();

    let store = open(dir.path()).await.store;
    let problems: Vec<String> = store
        .reader()
        .verify_integrity()
        .await
        .unwrap()
        .iter()
        .map(ToString::to_string)
        .collect();
    assert_eq!(
        problems,
        vec![
            "reading: 1 rows of a channel without a name",
            "reading: batch 1 has 1 readings, journalled with 2",
        ]
    );
}

fn some_reading() -> impl Strategy<Value = Reading> {
    (0..3_usize, 0..12_i64, 0..2_u32, 0..3_u8).prop_map(|(channel, second, epoch, value)| {
        let mut r = reading(["a", "b", "c"][channel], second, f64::from(value));
        r.epoch = ClockEpoch(epoch);
        if value == 2 {
            r.value = None;
        }
        r
    })
}

/// What a store holds in the end, and what it counted on the way.
async fn outcome(batches: Vec<Vec<Reading>>) -> (Vec<Reading>, u64, u64, u64) {
    let dir = tempfile::tempdir().unwrap();
    let store = Store::open(dir.path(), StoreOptions::scratch())
        .await
        .unwrap()
        .store;
    let (mut duplicates, mut conflicts, mut late, mut new) = (0, 0, 0, 0);
    for batch in batches {
        let committed = store.commit(vec![delivery(batch)], Stamp(0)).await.unwrap();
        duplicates += committed.duplicates;
        conflicts += committed.conflicts;
        late += committed.late;
        new += committed.readings.len();
    }
    let table = store
        .reader()
        .readings_between(
            &["a".into(), "b".into(), "c".into()],
            Stamp(0),
            Stamp(i64::MAX),
        )
        .await
        .unwrap();
    assert_eq!(table.len(), new);
    assert!(store.reader().verify_integrity().await.unwrap().is_empty());
    store.close().await.unwrap();
    (table, duplicates, conflicts, late)
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(24))]

    #[test]
    fn any_batching_gives_the_same_table(
        readings in prop::collection::vec(some_reading(), 1..60),
        cuts in prop::collection::vec(1..9_usize, 60),
    ) {
        let mut pieces = Vec::new();
        let mut rest = readings.as_slice();
        for cut in cuts {
            let (head, tail) = rest.split_at(cut.min(rest.len()));
            pieces.push(head.to_vec());
            rest = tail;
        }
        let runtime = tokio::runtime::Runtime::new().unwrap();
        let whole = runtime.block_on(outcome(vec![readings]));
        let cut = runtime.block_on(outcome(pieces));
        prop_assert_eq!(whole, cut);
    }
}

#[tokio::test]
async fn a_walk_meets_every_reading_in_sample_order() {
    let (_dir, store) = fresh().await;
    let mut readings: Vec<Reading> = (0..9000).map(|n| reading("a", n, 1.0)).collect();
    readings.extend((0..40).map(|n| reading("b", n * 200, 2.0)));
    readings.push(Reading {
        epoch: ClockEpoch(2),
        ..reading("a", 4095, 3.0)
    });
    store
        .commit(vec![delivery(readings)], Stamp(0))
        .await
        .unwrap();
    let channels = ["b".into(), "a".into(), "none".into()];
    let (from, to) = (Stamp(Stamp::SECOND), Stamp(8999 * Stamp::SECOND));
    let mut walk = store.reader().walk(&channels, from, to);
    let mut met = Vec::new();
    while let Some(reading) = walk.next().await.unwrap() {
        met.push(reading);
    }
    assert_eq!(met.len(), 8998 + 39 + 1);
    assert_eq!(
        met,
        store
            .reader()
            .readings_between(&channels, from, to)
            .await
            .unwrap()
    );
}
