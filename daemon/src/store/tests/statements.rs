use sqlx::{Executor, SqlSafeStr};

use super::super::options;
use super::super::sql;
use super::super::writer::Statements;
use super::fresh;

#[tokio::test]
async fn every_statement_prepares_against_the_migrated_schema() {
    use sqlx::ConnectOptions;
    let (dir, store) = fresh().await;
    let path = options::database(dir.path());
    let mut conn = options::reading(&path).connect().await.unwrap();
    for (name, sql) in sql::ALL {
        if let Err(error) = (&mut conn).prepare(sql.into_sql_str()).await {
            panic!("{name}: {error}");
        }
    }
    let Statements {
        insert_readings,
        insert_rejected,
        held,
    } = Statements::new();
    for many in [insert_readings, insert_rejected, held] {
        for sql in many.statements() {
            (&mut conn).prepare(sql).await.unwrap();
        }
    }
    store.close().await.unwrap();
}

/// Look-ups that run for every batch or every block must not walk a table.
#[tokio::test]
async fn frequent_statements_use_an_index() {
    let (_dir, store) = fresh().await;
    for sql in [
        sql::READINGS_OF,
        sql::READINGS_FROM,
        sql::NEWEST,
        sql::LAST_BEFORE,
        sql::ENTRIES_AFTER,
        sql::STEPS_BETWEEN,
        sql::OUTBOX_AFTER,
        sql::OLDEST_CHUNK,
        sql::DROP_UNTIL,
    ] {
        let plan: Vec<(i64, i64, i64, String)> =
            sqlx::query_as(sqlx::AssertSqlSafe(format!("explain query plan {sql}")))
                .fetch_all(&store.reader().pool)
                .await
                .unwrap();
        let text: Vec<String> = plan.into_iter().map(|row| row.3).collect();
        // A scan over a sub-query's own rows is no walk through a table.
        assert!(
            !text
                .iter()
                .any(|t| t.starts_with("SCAN") && !t.contains("(subquery")),
            "{sql}: {text:?}"
        );
    }
    let held = Statements::new().held;
    let (sql, _) = held.pieces(&[0; 8])[0].clone();
    let plan: Vec<(i64, i64, i64, String)> = sqlx::query_as(sqlx::AssertSqlSafe(format!(
        "explain query plan {}",
        sql.as_str()
    )))
    .fetch_all(&store.reader().pool)
    .await
    .unwrap();
    assert!(
        plan.iter()
            .any(|row| row.3.contains("SEARCH r USING PRIMARY KEY")),
        "{plan:?}"
    );
}
