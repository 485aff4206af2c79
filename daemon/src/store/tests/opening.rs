use std::fs;
use std::os::unix::fs::FileExt;

use super::super::options::database;
use super::super::{Outcome, Reader, Store, StoreError};
use super::{delivery, open, options, reading};
use crate::record::Stamp;

async fn filled(folder: &std::path::Path, rows: i64) {
    let store = open(folder).await.store;
    let readings = (0..rows).map(|n| reading("a", n, 0.5)).collect();
    store
        .commit(vec![delivery(readings)], Stamp(0))
        .await
        .unwrap();
    store.close().await.unwrap();
}

#[tokio::test]
async fn a_second_opener_is_refused_and_a_reader_is_not() {
    let dir = tempfile::tempdir().unwrap();
    let opened = open(dir.path()).await;
    assert_eq!(opened.report.outcome, Outcome::New);
    let error = Store::open(dir.path(), options()).await.unwrap_err();
    let text = error.to_string();
    assert!(matches!(error, StoreError::Locked { .. }), "{text}");
    assert!(text.contains(&std::process::id().to_string()), "{text}");

    let batch = vec![delivery(vec![reading("a", 1, 1.0)])];
    opened.store.commit(batch, Stamp(0)).await.unwrap();
    let reader = Reader::open(dir.path()).await.unwrap();
    assert_eq!(reader.readings_of(1).await.unwrap().len(), 1);
    opened.store.close().await.unwrap();
    assert!(matches!(
        opened.store.tidy().await.unwrap_err(),
        StoreError::Closed
    ));

    let again = open(dir.path()).await;
    assert_eq!(again.report.outcome, Outcome::Clean);
}

#[tokio::test]
async fn a_reader_opens_a_closed_store_and_says_where_none_is() {
    let dir = tempfile::tempdir().unwrap();
    assert!(matches!(
        Reader::open(dir.path()).await.unwrap_err(),
        StoreError::Missing { .. }
    ));
    filled(dir.path(), 3).await;
    let reader = Reader::open(dir.path()).await.unwrap();
    assert_eq!(reader.readings_of(1).await.unwrap().len(), 3);
    assert!(reader.bytes_used().await.unwrap() > 4096);
}

#[tokio::test]
async fn a_store_left_without_a_stop_is_checked() {
    let dir = tempfile::tempdir().unwrap();
    let store = open(dir.path()).await.store;
    let batch = vec![delivery(vec![reading("a", 1, 1.0)])];
    store.commit(batch, Stamp(0)).await.unwrap();
    drop(store);
    // The writer lets go of the folder once it has seen that nobody is left.
    let opened = loop {
        match Store::open(dir.path(), options()).await {
            Err(StoreError::Locked { .. }) => tokio::task::yield_now().await,
            other => break other.unwrap(),
        }
    };
    assert_eq!(opened.report.outcome, Outcome::Recovered);
    let reader = opened.store.reader();
    assert_eq!(reader.readings_of(1).await.unwrap().len(), 1);
}

#[tokio::test]
async fn a_file_that_is_no_database_is_set_aside_and_reported_until_told_to_forget() {
    let dir = tempfile::tempdir().unwrap();
    fs::write(database(dir.path()), vec![b'x'; 8192]).unwrap();
    let opened = open(dir.path()).await;
    assert_eq!(opened.report.outcome, Outcome::Replaced);
    let aside = opened.report.set_aside.unwrap();
    assert_eq!(fs::read(&aside.path).unwrap(), vec![b'x'; 8192]);
    opened.store.close().await.unwrap();

    let again = open(dir.path()).await;
    assert_eq!(again.report.outcome, Outcome::Clean);
    assert_eq!(again.report.set_aside, Some(aside));
    again.store.forget_set_aside().await.unwrap();
    again.store.close().await.unwrap();
    assert_eq!(open(dir.path()).await.report.set_aside, None);
}

#[tokio::test]
async fn damage_inside_is_found_after_an_unclean_stop() {
    let dir = tempfile::tempdir().unwrap();
    filled(dir.path(), 5000).await;
    // As if the machine had stopped: the mark of a clean stop is not there.
    {
        use sqlx::{ConnectOptions, Connection};
        let mut conn =
            super::super::options::writing(&database(dir.path()), super::super::Durability::Full)
                .connect()
                .await
                .unwrap();
        sqlx::query("update meta set value = '0' where key = 'clean-stop'")
            .execute(&mut conn)
            .await
            .unwrap();
        conn.close().await.unwrap();
    }
    let file = fs::OpenOptions::new()
        .write(true)
        .open(database(dir.path()))
        .unwrap();
    let length = file.metadata().unwrap().len();
    // Pages in the middle belong to the readings.
    for page in (length / 8192)..(length / 8192 + 8) {
        file.write_all_at(&[0xa5; 4096], page * 4096).unwrap();
    }
    drop(file);
    let opened = open(dir.path()).await;
    assert_eq!(opened.report.outcome, Outcome::Replaced);
    assert!(opened.report.set_aside.is_some());
    assert_eq!(opened.store.reader().last_seq().await.unwrap(), 0);
    let batch = vec![delivery(vec![reading("a", 1, 1.0)])];
    opened.store.commit(batch, Stamp(0)).await.unwrap();
}

#[tokio::test]
async fn a_store_of_a_newer_program_is_left_alone() {
    let dir = tempfile::tempdir().unwrap();
    filled(dir.path(), 1).await;
    {
        use sqlx::{ConnectOptions, Connection};
        let mut conn =
            super::super::options::writing(&database(dir.path()), super::super::Durability::Full)
                .connect()
                .await
                .unwrap();
        sqlx::query(
            "insert into _sqlx_migrations (version, description, success, checksum, execution_time) \
             values (9999, 'later', 1, x'00', 0)",
        )
        .execute(&mut conn)
        .await
        .unwrap();
        conn.close().await.unwrap();
    }
    let error = Store::open(dir.path(), options()).await.unwrap_err();
    assert!(matches!(error, StoreError::Newer { .. }), "{error}");
    assert!(database(dir.path()).exists());
}
