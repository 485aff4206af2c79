//! Readings and refusals.

use super::super::error::Result;
use super::super::rows::{self, ReadingRow, from_spelled};
use super::super::sql;
use super::Reader;
use crate::record::{ChannelId, ClockEpoch, Reading, Rejected, Stamp};

/// A row of the table of rejected deliveries.
type RejectedRow = (
    i64,
    Option<String>,
    String,
    Option<i64>,
    i64,
    String,
    String,
    String,
);

impl Reader {
    /// Names of all channels that ever had a reading, sorted.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn channels(&self) -> Result<Vec<ChannelId>> {
        self.names.refresh(&self.pool).await?;
        Ok(self.names.all())
    }

    /// Readings committed under a journal entry, in the order of [`Committed::readings`](super::super::Committed).
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn readings_of(&self, seq: i64) -> Result<Vec<Reading>> {
        let rows: Vec<ReadingRow> = sqlx::query_as(sql::READINGS_OF)
            .bind(seq)
            .fetch_all(&self.pool)
            .await?;
        let mut readings = self.named(rows).await?;
        sort(&mut readings);
        Ok(readings)
    }

    /// Readings of some channels sampled from `from` up to but not at `to`, ordered by sampled instant, channel
    /// name and clock epoch.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn readings_between(
        &self,
        channels: &[ChannelId],
        from: Stamp,
        to: Stamp,
    ) -> Result<Vec<Reading>> {
        let mut readings = Vec::new();
        for channel in channels {
            readings.extend(
                self.page(channel, (from, ClockEpoch(0)), to, i64::MAX)
                    .await?,
            );
        }
        sort(&mut readings);
        Ok(readings)
    }

    /// At most `limit` readings of one channel from a key on, sampled before `to`, ordered by key: for going
    /// through a long record in pieces.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn page(
        &self,
        channel: &ChannelId,
        from: (Stamp, ClockEpoch),
        to: Stamp,
        limit: i64,
    ) -> Result<Vec<Reading>> {
        let Some(number) = self.number(channel).await? else {
            return Ok(Vec::new());
        };
        let rows: Vec<ReadingRow> = sqlx::query_as(sql::READINGS_FROM)
            .bind(number)
            .bind(from.0.0)
            .bind(from.1.0)
            .bind(to.0)
            .bind(limit)
            .fetch_all(&self.pool)
            .await?;
        self.named(rows).await
    }

    /// The reading of a channel with the latest sampled instant.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn newest(&self, channel: &ChannelId) -> Result<Option<Reading>> {
        self.one(sql::NEWEST, channel, None).await
    }

    /// The last reading of a channel sampled before an instant: what a rate that holds had been.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn last_before(
        &self,
        channel: &ChannelId,
        instant: Stamp,
    ) -> Result<Option<Reading>> {
        self.one(sql::LAST_BEFORE, channel, Some(instant)).await
    }

    /// The last usable reading of a channel sampled before an instant.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn last_usable_before(
        &self,
        channel: &ChannelId,
        instant: Stamp,
    ) -> Result<Option<Reading>> {
        self.one(sql::LAST_USABLE_BEFORE, channel, Some(instant))
            .await
    }

    /// The first sampled instant of all channels.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn first_sample(&self) -> Result<Option<Stamp>> {
        self.instant(sql::FIRST_SAMPLE).await
    }

    /// The last sampled instant of all channels.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn last_sample(&self) -> Result<Option<Stamp>> {
        self.instant(sql::LAST_SAMPLE).await
    }

    /// At most `limit` rejected deliveries with numbers after `id`, in the order they came, with their numbers.
    ///
    /// # Errors
    /// The database cannot be read.
    pub async fn rejected_after(&self, id: i64, limit: i64) -> Result<Vec<(i64, Rejected)>> {
        let rows: Vec<RejectedRow> = sqlx::query_as(sql::REJECTED_AFTER)
            .bind(id)
            .bind(limit)
            .fetch_all(&self.pool)
            .await?;
        rows.into_iter()
            .map(
                |(id, channel, source, sampled, received, raw, reason, detail)| {
                    Ok((
                        id,
                        Rejected {
                            channel: channel.as_deref().map(ChannelId::from),
                            source: source.as_str().into(),
                            sampled: sampled.map(Stamp),
                            received: Stamp(received),
                            raw,
                            reason: from_spelled("a rejected delivery", &reason)?,
                            detail,
                        },
                    ))
                },
            )
            .collect()
    }

    async fn instant(&self, statement: &'static str) -> Result<Option<Stamp>> {
        let micros: Option<i64> = sqlx::query_scalar(statement).fetch_one(&self.pool).await?;
        Ok(micros.map(Stamp))
    }

    async fn one(
        &self,
        statement: &'static str,
        channel: &ChannelId,
        instant: Option<Stamp>,
    ) -> Result<Option<Reading>> {
        let Some(number) = self.number(channel).await? else {
            return Ok(None);
        };
        let mut query = sqlx::query_as::<_, ReadingRow>(statement).bind(number);
        if let Some(instant) = instant {
            query = query.bind(instant.0);
        }
        match query.fetch_optional(&self.pool).await? {
            Some(row) => Ok(Some(rows::reading(row, channel.clone())?)),
            None => Ok(None),
        }
    }

    async fn number(&self, channel: &ChannelId) -> Result<Option<i64>> {
        if let Some(number) = self.names.number(channel) {
            return Ok(Some(number));
        }
        self.names.refresh(&self.pool).await?;
        Ok(self.names.number(channel))
    }

    async fn named(&self, rows: Vec<ReadingRow>) -> Result<Vec<Reading>> {
        if !rows.iter().all(|row| self.names.knows(row.0)) {
            self.names.refresh(&self.pool).await?;
        }
        rows.into_iter()
            .map(|row| rows::reading(row, self.names.name(row.0)?))
            .collect()
    }
}

fn sort(readings: &mut [Reading]) {
    readings
        .sort_by(|a, b| (a.sampled, &a.channel, a.epoch).cmp(&(b.sampled, &b.channel, b.epoch)));
}
