//! A block from the stored readings.

use std::collections::BTreeMap;

use super::blocks::BlockPlan;
use crate::record::{Block, ChannelId, Reading};
use crate::store::{Reader, Result};

/// Builds a block from what is stored now.
///
/// # Errors
/// The store cannot be read.
pub async fn stored_block(reader: &Reader, plan: &BlockPlan, index: i64) -> Result<Block> {
    let (start, end) = (plan.start_of(index), plan.start_of(index + 1));
    let channels = plan.channels();
    let mut within: BTreeMap<ChannelId, Vec<Reading>> = BTreeMap::new();
    for reading in reader
        .readings_between(&channels, start, end.plus(1))
        .await?
    {
        within
            .entry(reading.channel.clone())
            .or_default()
            .push(reading);
    }
    let mut before = BTreeMap::new();
    for channel in &channels {
        if let Some(reading) = reader.last_usable_before(channel, start).await? {
            before.insert(channel.clone(), reading);
        }
    }
    Ok(plan.build(index, &within, &before))
}
