//! Group commit: readings, refusals and one journal entry in one transaction.

use std::collections::HashMap;

use sqlx::{Connection, SqliteConnection};

use super::error::Result;
use super::rows;
use super::sql;
use super::writer::{CLOCK_EPOCH, Known, Statements, Writer};
use crate::record::{
    AckToken, ChannelId, Delivery, EntryKind, Reading, RejectReason, Rejected, SourceName, Stamp,
};

/// What a commit did; all of it is on disk.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Committed {
    /// The journal entry; `None` where there was no new reading.
    pub seq: Option<i64>,
    /// The new readings, ordered by sampled instant, channel name and clock epoch: the order in which
    /// [`Reader::readings_of`](super::Reader::readings_of) gives them too.
    pub readings: Vec<Reading>,
    /// Readings that were stored already with the same value, and were dropped.
    pub duplicates: u64,
    /// Readings whose key was stored already with another value; they are among `rejected`.
    pub conflicts: u64,
    /// New readings older than the newest of their channel; they are among `readings`.
    pub late: u64,
    /// All that was refused, in the order delivered: by intake, for a conflict, or for not being finite.
    pub rejected: Vec<Rejected>,
    /// What the sources wait for, in the order delivered.
    pub acks: Vec<(SourceName, AckToken)>,
}

/// Channel number, sampled, epoch.
type Key = (i64, i64, u32);

/// What one batch comes to, before anything is written.
#[derive(Debug, Default)]
struct Plan {
    fresh: Vec<(i64, Reading)>,
    new_channels: Vec<(i64, ChannelId)>,
    newest: HashMap<i64, Stamp>,
    duplicates: u64,
    conflicts: u64,
    late: u64,
    rejected: Vec<Rejected>,
}

impl Writer {
    pub(super) async fn commit(
        &mut self,
        deliveries: &[Delivery],
        wall: Stamp,
    ) -> Result<Committed> {
        self.space.for_readings()?;
        let held = self.held(deliveries).await?;
        let known = self.known().await?;
        let mut plan = Plan::of(deliveries, known, held);
        // A canonical order makes what follows a function of the batch, not of how sources interleaved.
        plan.fresh.sort_by(|(_, a), (_, b)| {
            (a.sampled, &a.channel, a.epoch).cmp(&(b.sampled, &b.channel, b.epoch))
        });
        let seq = known.last_seq.saturating_add(1);
        let journalled = !plan.fresh.is_empty();
        // A clock that was stepped began a run of its own: the next start must not give its number again.
        let clock = plan.fresh.iter().map(|(_, r)| r.epoch.0).max();
        let clock = clock.filter(|&run| run > known.clock);
        if journalled || !plan.rejected.is_empty() {
            let mut tx = self.conn.begin_with("begin immediate").await?;
            for (number, name) in &plan.new_channels {
                sqlx::query(sql::ADD_CHANNEL)
                    .bind(number)
                    .bind(&*name.0)
                    .execute(&mut *tx)
                    .await?;
            }
            if journalled {
                let kind = EntryKind::Batch {
                    readings: u32::try_from(plan.fresh.len()).unwrap_or(u32::MAX),
                };
                super::append::insert_entry(&mut tx, seq, wall, &kind).await?;
                insert_readings(&mut tx, &self.statements, &plan.fresh, seq).await?;
            }
            if let Some(run) = clock {
                sqlx::query(sql::SET_META)
                    .bind(CLOCK_EPOCH)
                    .bind(run.to_string())
                    .execute(&mut *tx)
                    .await?;
            }
            insert_rejected(&mut tx, &self.statements, &plan.rejected).await?;
            tx.commit().await?;
        }
        if let Some(known) = &mut self.known {
            if journalled {
                known.last_seq = seq;
            }
            known.clock = clock.unwrap_or(known.clock);
            for (number, name) in plan.new_channels {
                known.channels.insert(name, number);
            }
            known.newest.extend(plan.newest);
        }
        Ok(Committed {
            seq: journalled.then_some(seq),
            readings: plan.fresh.into_iter().map(|(_, r)| r).collect(),
            duplicates: plan.duplicates,
            conflicts: plan.conflicts,
            late: plan.late,
            rejected: plan.rejected,
            acks: deliveries
                .iter()
                .filter_map(|d| Some((d.source.clone(), d.ack?)))
                .collect(),
        })
    }

    /// Values stored already under keys of the batch. A key newer than all its channel has is not looked up.
    async fn held(&mut self, deliveries: &[Delivery]) -> Result<HashMap<Key, Option<f64>>> {
        let known = self.known().await?;
        let mut keys: Vec<Key> = deliveries
            .iter()
            .flat_map(|d| &d.readings)
            .filter_map(|reading| {
                let number = *known.channels.get(&reading.channel)?;
                let newest = known.newest.get(&number)?;
                (reading.sampled <= *newest).then_some((number, reading.sampled.0, reading.epoch.0))
            })
            .collect();
        keys.sort_unstable();
        keys.dedup();
        let mut held = HashMap::new();
        for (statement, piece) in self.statements.held.pieces(&keys) {
            let mut query = sqlx::query_as::<_, (i64, i64, u32, Option<f64>)>(statement);
            for (channel, sampled, epoch) in piece {
                query = query.bind(channel).bind(sampled).bind(epoch);
            }
            for (channel, sampled, epoch, value) in query.fetch_all(&mut self.conn).await? {
                held.insert((channel, sampled, epoch), value);
            }
        }
        Ok(held)
    }
}

impl Plan {
    /// Sorts out a batch in the order delivered: the first value under a key stands.
    fn of(deliveries: &[Delivery], known: &Known, mut held: HashMap<Key, Option<f64>>) -> Self {
        let mut plan = Self::default();
        let mut numbers: HashMap<ChannelId, i64> = HashMap::new();
        let mut next_number = known.channels.values().max().map_or(1, |n| n + 1);
        for delivery in deliveries {
            for reading in &delivery.readings {
                let Some(reading) = tidy(reading) else {
                    let detail = format!("the value {:?} is not finite", reading.value);
                    plan.rejected.push(refusal(
                        reading,
                        &delivery.source,
                        RejectReason::NotANumber,
                        detail,
                    ));
                    continue;
                };
                let number = known
                    .channels
                    .get(&reading.channel)
                    .or_else(|| numbers.get(&reading.channel))
                    .copied()
                    .unwrap_or_else(|| {
                        let number = next_number;
                        next_number += 1;
                        numbers.insert(reading.channel.clone(), number);
                        plan.new_channels.push((number, reading.channel.clone()));
                        number
                    });
                let key = (number, reading.sampled.0, reading.epoch.0);
                match held.get(&key) {
                    Some(stands) if same(*stands, reading.value) => plan.duplicates += 1,
                    Some(stands) => {
                        plan.conflicts += 1;
                        let detail = format!(
                            "{} stands for this instant, {} was delivered",
                            worded(*stands),
                            worded(reading.value)
                        );
                        plan.rejected.push(refusal(
                            &reading,
                            &delivery.source,
                            RejectReason::Conflict,
                            detail,
                        ));
                    }
                    None => {
                        held.insert(key, reading.value);
                        let newest = plan
                            .newest
                            .get(&number)
                            .or_else(|| known.newest.get(&number));
                        match newest {
                            Some(newest) if reading.sampled < *newest => plan.late += 1,
                            _ => {
                                plan.newest.insert(number, reading.sampled);
                            }
                        }
                        plan.fresh.push((number, reading));
                    }
                }
            }
            plan.rejected.extend(delivery.rejected.iter().cloned());
        }
        plan
    }
}

/// The reading as it will read back; `None` where its value is not finite. SQLite keeps NaN as null and has
/// one zero.
fn tidy(reading: &Reading) -> Option<Reading> {
    if reading.value.is_some_and(|v| !v.is_finite()) {
        return None;
    }
    Some(Reading {
        value: reading.value.map(|v| v + 0.0),
        raw: reading.raw.filter(|v| v.is_finite()).map(|v| v + 0.0),
        ..reading.clone()
    })
}

/// Both are finite or absent, with one zero: equal bits and equal numbers are the same thing.
fn same(a: Option<f64>, b: Option<f64>) -> bool {
    a.map(f64::to_bits) == b.map(f64::to_bits)
}

fn worded(value: Option<f64>) -> String {
    value.map_or_else(|| "no value".to_owned(), |v| v.to_string())
}

fn refusal(
    reading: &Reading,
    source: &SourceName,
    reason: RejectReason,
    detail: String,
) -> Rejected {
    Rejected {
        channel: Some(reading.channel.clone()),
        source: source.clone(),
        sampled: Some(reading.sampled),
        received: reading.received,
        raw: worded(reading.raw.or(reading.value)),
        reason,
        detail,
    }
}

async fn insert_readings(
    conn: &mut SqliteConnection,
    statements: &Statements,
    fresh: &[(i64, Reading)],
    seq: i64,
) -> Result<()> {
    for (statement, piece) in statements.insert_readings.pieces(fresh) {
        let mut query = sqlx::query(statement);
        for (number, reading) in piece {
            query = query
                .bind(number)
                .bind(reading.sampled.0)
                .bind(reading.epoch.0)
                .bind(reading.received.0)
                .bind(reading.value)
                .bind(reading.raw)
                .bind(i64::from(reading.quality.flag()))
                .bind(rows::device_code(reading.device))
                .bind(rows::clock_code(reading.clock))
                .bind(seq);
        }
        query.execute(&mut *conn).await?;
    }
    Ok(())
}

async fn insert_rejected(
    conn: &mut SqliteConnection,
    statements: &Statements,
    rejected: &[Rejected],
) -> Result<()> {
    for (statement, piece) in statements.insert_rejected.pieces(rejected) {
        let mut query = sqlx::query(statement);
        for refused in piece {
            query = query
                .bind(refused.channel.as_ref().map(|c| &*c.0))
                .bind(&*refused.source.0)
                .bind(refused.sampled.map(|s| s.0))
                .bind(refused.received.0)
                .bind(&refused.raw)
                .bind(refused.reason.name())
                .bind(&refused.detail);
        }
        query.execute(&mut *conn).await?;
    }
    Ok(())
}
