//! A process that is killed in the middle of commits loses nothing it had acknowledged.

use std::io::{BufRead, BufReader};
use std::process::{Command, Stdio};
use std::time::Duration;

use super::super::{Applied, Outcome};
use super::{delivery, message, open, reading, transition};
use crate::record::Stamp;

const FOLDER: &str = "BOREWAKE_TEST_KILLED_FOLDER";

/// The child of the test below: commits, applies, and says after each which reading is on disk, until it is
/// killed. It does nothing in a run that does not name a folder.
#[test]
fn commits_until_killed() {
    let Ok(folder) = std::env::var(FOLDER) else {
        return;
    };
    tokio::runtime::Runtime::new().unwrap().block_on(async {
        let store = open(folder.as_ref()).await.store;
        let mut second = match store.reader().newest(&"a".into()).await.unwrap() {
            Some(reading) => reading.sampled.0 / Stamp::SECOND + 1,
            None => 0,
        };
        for round in 1_u32.. {
            let count = i64::from(round % 90 + 1);
            let readings = (second..second + count)
                .map(|n| reading("a", n, 0.5))
                .collect();
            let seq = store
                .commit(vec![delivery(readings)], Stamp(0))
                .await
                .unwrap()
                .seq
                .unwrap();
            second += count;
            println!("acknowledged {}", second - 1);
            let applied = Applied {
                position: seq,
                desk: seq.to_le_bytes().to_vec(),
                transitions: vec![transition("limit-a", round, seq)],
                outgoing: vec![message("limit-a", u32::try_from(seq).unwrap(), "{}")],
                stale_from: None,
            };
            store.apply(applied).await.unwrap();
        }
    });
}

#[tokio::test]
async fn nothing_acknowledged_is_lost() {
    let dir = tempfile::tempdir().unwrap();
    let mut random = fastrand::Rng::with_seed(11);
    for round in 0..8 {
        let mut child = Command::new(std::env::current_exe().unwrap())
            .args([
                "--exact",
                "store::tests::killed::commits_until_killed",
                "--nocapture",
            ])
            .env(FOLDER, dir.path())
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .unwrap();
        let mut lines = BufReader::new(child.stdout.take().unwrap()).lines();
        let acknowledged = |line: &str| {
            line.strip_prefix("acknowledged ")
                .and_then(|n| n.parse::<i64>().ok())
        };
        let mut last = 0;
        for line in lines.by_ref().map_while(Result::ok) {
            if let Some(n) = acknowledged(&line) {
                last = n;
                break;
            }
        }
        std::thread::sleep(Duration::from_micros(random.u64(0..40_000)));
        child.kill().unwrap();
        // What it still said before it died counts as acknowledged.
        for line in lines.map_while(Result::ok) {
            last = acknowledged(&line).unwrap_or(last);
        }
        child.wait().unwrap();

        let opened = open(dir.path()).await;
        assert_eq!(opened.report.outcome, Outcome::Recovered, "round {round}");
        let reader = opened.store.reader();
        assert_eq!(reader.verify_integrity().await.unwrap(), vec![]);
        let stored = reader
            .readings_between(&["a".into()], Stamp(0), Stamp(i64::MAX))
            .await
            .unwrap();
        let seconds: Vec<i64> = stored.iter().map(|r| r.sampled.0 / Stamp::SECOND).collect();
        let end = i64::try_from(seconds.len()).unwrap();
        assert_eq!(seconds, (0..end).collect::<Vec<_>>());
        assert!(last < end, "{last} was acknowledged, {end} readings stand");
        // Position, alarms and outbox moved together or not at all; each kill may have left one entry behind.
        let entries = reader.last_seq().await.unwrap();
        let applied = reader.restore().await.unwrap().map_or(0, |(p, _)| p);
        assert!(applied <= entries && entries - applied <= 1 + round);
        let waiting = reader
            .outbox_after(super::TARGET, 0, 1 << 20)
            .await
            .unwrap();
        let history = reader.transitions_after(0, 1 << 20).await.unwrap();
        assert_eq!(waiting.len(), history.len());
        opened.store.close().await.unwrap();
    }
}
