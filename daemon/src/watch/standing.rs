//! The watch as it stands now, restored beside a running daemon or made from logs: what looks ahead begins here.

use borewake_model::ModelError;
use borewake_model::watch::{Watch, WatchState};
use thiserror::Error;

use super::blocks::BlockPlan;
use super::ground_file::{GroundFile, GroundFileError};
use super::history::History;
use super::stored::stored_block;
use crate::record::{Adoption, Block, Stamp};
use crate::store::{Reader, StoreError};

/// Recent blocks kept \[µs\]: the pattern of rates, and what pictures show before the present.
const RECENT: i64 = 30 * 24 * 3600 * Stamp::SECOND;

/// What stops it.
#[derive(Debug, Error)]
pub enum StandingError {
    /// The store cannot be read.
    #[error(transparent)]
    Store(#[from] StoreError),
    /// The ground file cannot be used.
    #[error(transparent)]
    Ground(#[from] GroundFileError),
    /// The model cannot be run.
    #[error(transparent)]
    Model(#[from] ModelError),
    /// The checkpoint cannot be read.
    #[error("the checkpoint cannot be read: {0}")]
    Checkpoint(#[from] postcard::Error),
}

/// A watch that weighs no causes, with the blocks before the present.
pub struct Standing {
    /// After the last whole block.
    pub watch: Watch,
    /// The last blocks it has seen or could have seen, oldest first.
    pub recent: Vec<Block>,
}

/// The watch at the end of commissioning.
///
/// # Errors
/// The ground file does not fit together.
pub fn at_commissioning(ground: &GroundFile) -> Result<Watch, ModelError> {
    let start = ground.start.clone();
    let watch = Watch::restore(&ground.commissioned, &ground.settings, &[], start)?;
    Ok(watch.only_expecting())
}

/// Restores the watch from the newest checkpoint that holds, and brings it to the last whole block of the store.
/// `fingerprint` is what checkpoints must bear, `from` the block before which they must lie.
///
/// # Errors
/// The store cannot be read, or the model cannot be run.
pub async fn from_store(
    reader: &Reader,
    plan: &BlockPlan,
    ground: &GroundFile,
    adoptions: &[Adoption],
    (from, fingerprint): (i64, &str),
    progress: &mut dyn FnMut(i64, i64),
) -> Result<Standing, StandingError> {
    let found = reader.checkpoint_before(from, fingerprint).await?;
    let found = found.filter(|c| c.block > ground.last_block);
    let (state, after): (WatchState, i64) = match found {
        Some(checkpoint) => (postcard::from_bytes(&checkpoint.state)?, checkpoint.block),
        None => (ground.start.clone(), ground.last_block),
    };
    // What began within the commissioning history is part of the calibration.
    let adoptions: Vec<Adoption> = adoptions
        .iter()
        .filter(|a| plan.index_of(Stamp::from_seconds(a.onset)) > ground.last_block)
        .cloned()
        .collect();
    let mut watch =
        Watch::restore(&ground.commissioned, &ground.settings, &adoptions, state)?.only_expecting();
    let first = after.saturating_add(1);
    let end = reader
        .last_sample()
        .await?
        .map_or(first, |last| plan.index_of(last).max(first));
    for index in first..end {
        progress(index - first, end - first);
        watch.step(&stored_block(reader, plan, index).await?)?;
    }
    let mut recent = Vec::new();
    let oldest = reader.first_sample().await?;
    let earliest = oldest.map_or(end, |at| plan.index_of(at) + 1);
    for index in earliest.max(end - RECENT / plan.length)..end {
        recent.push(stored_block(reader, plan, index).await?);
    }
    Ok(Standing { watch, recent })
}

/// Brings the watch from the end of commissioning to the last whole block of logs.
///
/// # Errors
/// The model cannot be run.
pub fn from_logs(
    history: &History,
    plan: &BlockPlan,
    ground: &GroundFile,
    progress: &mut dyn FnMut(i64, i64),
) -> Result<Standing, StandingError> {
    let mut watch = at_commissioning(ground)?;
    let first = ground.last_block.saturating_add(1);
    let span = history.span();
    let end = span.map_or(first, |(_, last)| plan.index_of(last).max(first));
    for index in first..end {
        progress(index - first, end - first);
        watch.step(&history.block(plan, index))?;
    }
    let earliest = span.map_or(end, |(oldest, _)| plan.index_of(oldest) + 1);
    let recent = (earliest.max(end - RECENT / plan.length)..end)
        .map(|index| history.block(plan, index))
        .collect();
    Ok(Standing { watch, recent })
}
