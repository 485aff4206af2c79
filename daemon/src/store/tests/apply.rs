use super::super::writer::Writer;
use super::super::{Applied, StoreError, StoreOptions};
use super::{TARGET, alarm, delivery, fresh, message, open, options, reading, transition};
use crate::record::{EntryKind, Stamp};
use crate::store::Store;

async fn ticks(store: &Store, count: usize) {
    store
        .append_all(vec![EntryKind::Tick; count], Stamp(0))
        .await
        .unwrap();
}

fn applied(position: i64) -> Applied {
    Applied {
        position,
        desk: vec![7; 3],
        transitions: vec![transition("limit-a", 1, 99)],
        outgoing: vec![message("limit-a", 1, "{}")],
        stale_from: None,
    }
}

#[tokio::test]
async fn all_of_it_is_stored_together() {
    let (dir, store) = fresh().await;
    ticks(&store, 5).await;
    assert_eq!(store.reader().restore().await.unwrap(), None);
    let mut changes = store.outbox_changes();
    store.apply(applied(3)).await.unwrap();
    assert!(changes.has_changed().unwrap());
    let first = *changes.borrow_and_update();
    store.close().await.unwrap();

    let store = open(dir.path()).await.store;
    let reader = store.reader();
    assert_eq!(reader.restore().await.unwrap(), Some((3, vec![7; 3])));
    assert_eq!(reader.alarms().await.unwrap(), vec![alarm("limit-a", 1)]);
    let history = reader.transitions_after(0, 9).await.unwrap();
    assert_eq!(history, vec![(1, transition("limit-a", 1, 99))]);
    let waiting = reader.outbox_after(TARGET, 0, 9).await.unwrap();
    assert_eq!(waiting.len(), 1);
    assert_eq!(waiting[0].number, first);
    assert_eq!(waiting[0].message, message("limit-a", 1, "{}"));
    assert_eq!(
        reader.retained().await.unwrap(),
        vec![message("limit-a", 1, "{}")]
    );

    store.sent(TARGET, vec![first]).await.unwrap();
    assert_eq!(reader.outbox_len().await.unwrap(), 0);
    assert_eq!(reader.retained().await.unwrap().len(), 1);
    assert!(reader.verify_integrity().await.unwrap().is_empty());
}

#[tokio::test]
async fn a_position_is_applied_once_and_only_if_the_journal_has_it() {
    let (_dir, store) = fresh().await;
    ticks(&store, 3).await;
    store.apply(applied(2)).await.unwrap();
    for position in [1, 2, 4] {
        let error = store.apply(applied(position)).await.unwrap_err();
        assert!(matches!(error, StoreError::Position { .. }), "{error}");
    }
    assert_eq!(
        store.reader().transitions_after(0, 9).await.unwrap().len(),
        1
    );
    store.apply(applied(3)).await.unwrap();
}

#[tokio::test]
async fn a_part_that_fails_takes_the_whole_with_it() {
    let (_dir, store) = fresh().await;
    ticks(&store, 2).await;
    let mut bad = applied(1);
    let mut second = transition("watch", 1, 0);
    second.alarm.finding = Some(crate::record::Finding {
        block: 1,
        causes: Vec::new(),
        named: false,
        onset: f64::NAN,
        onset_sd: 1.0,
        size: None,
        place: None,
        gauges: Vec::new(),
        log_mixture: 0.0,
        log_threshold: 0.0,
    });
    bad.transitions.push(second);
    assert!(matches!(
        store.apply(bad).await.unwrap_err(),
        StoreError::Unwritable { .. }
    ));
    let reader = store.reader();
    assert_eq!(reader.restore().await.unwrap(), None);
    assert!(reader.alarms().await.unwrap().is_empty());
    assert_eq!(reader.outbox_len().await.unwrap(), 0);
    store.apply(applied(1)).await.unwrap();
}

#[tokio::test]
async fn a_cleared_topic_stays_in_the_retained_set_as_empty() {
    let (_dir, store) = fresh().await;
    ticks(&store, 2).await;
    store.apply(applied(1)).await.unwrap();
    let clear = Applied {
        position: 2,
        outgoing: vec![message("limit-a", 2, "")],
        ..Applied::default()
    };
    store.apply(clear).await.unwrap();
    assert_eq!(
        store.reader().retained().await.unwrap(),
        vec![message("limit-a", 2, "")]
    );
}

#[tokio::test]
async fn a_message_renewed_before_it_was_sent_survives_the_old_confirmation() {
    let (_dir, store) = fresh().await;
    ticks(&store, 2).await;
    store.apply(applied(1)).await.unwrap();
    let old = store.reader().outbox_after(TARGET, 0, 9).await.unwrap()[0].number;
    let renewed = Applied {
        position: 2,
        outgoing: vec![message("limit-a", 1, "{\"new\":1}")],
        ..Applied::default()
    };
    store.apply(renewed).await.unwrap();
    store.sent(TARGET, vec![old]).await.unwrap();
    let waiting = store.reader().outbox_after(TARGET, 0, 9).await.unwrap();
    assert_eq!(waiting.len(), 1);
    assert_eq!(waiting[0].message.payload, "{\"new\":1}");
}

#[tokio::test]
async fn each_publisher_has_its_own_row_and_a_removed_one_leaves_none() {
    let dir = tempfile::tempdir().unwrap();
    let two = StoreOptions {
        targets: vec!["broker".to_owned(), "hook".to_owned()],
        ..options()
    };
    let store = Store::open(dir.path(), two).await.unwrap().store;
    ticks(&store, 1).await;
    store.apply(applied(1)).await.unwrap();
    assert_eq!(store.reader().outbox_len().await.unwrap(), 2);
    store.close().await.unwrap();
    let store = open(dir.path()).await.store;
    assert_eq!(store.reader().outbox_len().await.unwrap(), 1);
}

#[tokio::test]
async fn a_far_end_that_stays_away_keeps_the_newest_messages_only() {
    let dir = tempfile::tempdir().unwrap();
    let few = StoreOptions {
        targets: vec!["broker".to_owned(), "hook".to_owned()],
        keep_outbox: 3,
        ..options()
    };
    let store = Store::open(dir.path(), few).await.unwrap().store;
    ticks(&store, 6).await;
    for position in 1..=6 {
        let sequence = u32::try_from(position).unwrap();
        let applied = Applied {
            position,
            outgoing: vec![message("limit-a", sequence, "{}")],
            ..Applied::default()
        };
        store.apply(applied).await.unwrap();
    }
    // One of the two takes its messages; the other is away.
    let taken = store.reader().outbox_after("hook", 0, 9).await.unwrap();
    let numbers = taken.iter().take(5).map(|w| w.number).collect();
    store.sent("hook", numbers).await.unwrap();
    store.tidy().await.unwrap();
    let left = async |target: &str| {
        let waiting = store.reader().outbox_after(target, 0, 9).await.unwrap();
        let sequences = waiting.iter().map(|w| w.message.id.sequence);
        sequences.collect::<Vec<_>>()
    };
    assert_eq!(left("broker").await, [4, 5, 6]);
    assert_eq!(left("hook").await, [6]);
}

#[tokio::test]
async fn the_digest_tells_alarms_apart_and_not_wall_clocks() {
    let mut digests = Vec::new();
    for (sequence, recorded) in [(1, 10), (1, 20), (2, 10)] {
        let (_dir, store) = fresh().await;
        ticks(&store, usize::try_from(recorded).unwrap()).await;
        let applied = Applied {
            position: recorded,
            transitions: vec![transition("limit-a", sequence, recorded)],
            ..Applied::default()
        };
        store.apply(applied).await.unwrap();
        digests.push(store.reader().alarm_digest().await.unwrap());
    }
    assert_eq!(digests[0], digests[1]);
    assert_ne!(digests[0], digests[2]);
    assert_eq!(digests[0].len(), 64);
}

#[tokio::test]
async fn stale_checkpoints_go_with_the_position() {
    use super::super::{Checkpoint, CheckpointKind};
    let (_dir, store) = fresh().await;
    ticks(&store, 1).await;
    for block in [10, 20] {
        let checkpoint = Checkpoint {
            block,
            kind: CheckpointKind::Stop,
            at: Stamp(block * 3_600_000_000),
            created: Stamp(0),
            fingerprint: "x".to_owned(),
            state: Vec::new(),
        };
        store.save_checkpoint(checkpoint).await.unwrap();
    }
    let stale = Applied {
        position: 1,
        stale_from: Some(15),
        ..Applied::default()
    };
    store.apply(stale).await.unwrap();
    let left = store
        .reader()
        .checkpoint_before(i64::MAX, "x")
        .await
        .unwrap();
    assert_eq!(left.map(|c| c.block), Some(10));
}

/// Makes the disk full for this connection beyond some pages: SQLite fails as it does on a full one.
async fn fill(writer: &mut Writer, pages: u32) {
    sqlx::query(sqlx::AssertSqlSafe(format!(
        "pragma max_page_count = {pages}"
    )))
    .execute(&mut writer.conn)
    .await
    .unwrap();
}

#[tokio::test]
async fn on_a_full_disk_the_reserve_goes_and_alarms_are_written() {
    let dir = tempfile::tempdir().unwrap();
    let reserve = dir.path().join("borewake.reserve");
    let with_reserve = StoreOptions {
        reserve: 4096,
        ..options()
    };
    let (mut writer, _) = Writer::open(dir.path(), with_reserve).await.unwrap();
    let batch = vec![delivery(vec![reading("a", 1, 1.0)])];
    writer.commit(&batch, Stamp(0)).await.unwrap();
    assert!(reserve.exists());

    fill(&mut writer, 1).await;
    let mut large = applied(1);
    large.desk = vec![1; 200_000];
    writer.apply(&large).await.unwrap();
    assert!(!reserve.exists());
    let store = Store::start(dir.path(), writer);
    assert!(store.reader().verify_integrity().await.unwrap().is_empty());
    let history = store.reader().transitions_after(0, 9).await.unwrap();
    assert_eq!(history.len(), 1);
    store.close().await.unwrap();
}

#[tokio::test]
async fn a_commit_that_met_a_full_disk_can_be_tried_again() {
    let dir = tempfile::tempdir().unwrap();
    let (mut writer, _) = Writer::open(dir.path(), options()).await.unwrap();
    fill(&mut writer, 1).await;
    let batch = vec![delivery((0..5000).map(|n| reading("a", n, 1.0)).collect())];
    let error = writer.commit(&batch, Stamp(0)).await.unwrap_err();
    assert!(matches!(error, StoreError::Full(_)), "{error}");
    writer.mend().await.unwrap();
    fill(&mut writer, 1 << 20).await;
    let committed = writer.commit(&batch, Stamp(0)).await.unwrap();
    assert_eq!((committed.seq, committed.readings.len()), (Some(1), 5000));
    let store = Store::start(dir.path(), writer);
    assert!(store.reader().verify_integrity().await.unwrap().is_empty());
}
