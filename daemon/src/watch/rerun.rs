//! Runs the watch again over what is stored and compares what it says with what was said.

use borewake_model::ModelError;
use borewake_model::watch::{Watch, WatchState};
use thiserror::Error;

use super::blocks::BlockPlan;
use super::ground_file::GroundFile;
use super::stored::stored_block;
use crate::record::{Adoption, Stamp};
use crate::store::{Reader, StoreError};

/// What a comparison came to.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Comparison {
    /// Blocks compared.
    pub compared: u64,
    /// Blocks that came out otherwise.
    pub differing: Vec<i64>,
    /// Judged blocks that could not be compared, because their raw readings are gone or they were judged before the
    /// ground file in use.
    pub passed_over: u64,
}

/// What stops a comparison.
#[derive(Debug, Error)]
pub enum RerunError {
    /// The store cannot be read.
    #[error(transparent)]
    Store(#[from] StoreError),
    /// The model cannot be run.
    #[error(transparent)]
    Model(#[from] ModelError),
}

/// Runs the watch again from the end of commissioning. An adoption counts from its block on; what was said before it
/// was said without it, so the watch is taken back to where its columns begin and goes on with it from there.
///
/// # Errors
/// The store cannot be read, or the model cannot be run.
pub async fn compare(
    reader: &Reader,
    plan: &BlockPlan,
    ground: &GroundFile,
    adoptions: &[Adoption],
    progress: &mut dyn FnMut(i64, i64),
) -> Result<Comparison, RerunError> {
    let mut result = Comparison::default();
    let Some(last) = reader.last_judged().await? else {
        return Ok(result);
    };
    let first = ground.last_block + 1;
    // What began within the commissioning history is part of the calibration.
    let adoptions: Vec<Adoption> = adoptions
        .iter()
        .filter(|a| plan.index_of(Stamp::from_seconds(a.onset)) > ground.last_block)
        .cloned()
        .collect();
    result.passed_over =
        u64::try_from(reader.judged_between(i64::MIN, first).await?.len()).unwrap_or(u64::MAX);
    let length = plan.seconds();
    let mut state: WatchState = ground.start.clone();
    let mut next = first;
    let mut compare_from = first;
    for taken in 0..=adoptions.len() {
        let until = adoptions.get(taken).map_or(last + 1, |a| a.block);
        // The state before the first of all that are still to come: a later one may reach further back.
        let to_come = adoptions.get(taken..).unwrap_or_default();
        let keep_at = to_come
            .iter()
            .map(|a| a.first_block(length).max(first))
            .min();
        let known = adoptions.get(..taken).unwrap_or_default();
        let mut watch =
            Watch::restore(&ground.commissioned, &ground.settings, known, state.clone())?;
        let mut kept = (state, next);
        for index in next..until {
            if keep_at == Some(index) {
                kept = (watch.save(), index);
            }
            progress(index - first, last + 1 - first);
            let step = watch.step(&stored_block(reader, plan, index).await?)?;
            if index < compare_from {
                continue;
            }
            match reader.judged(index).await? {
                Some(stored) if stored.step == step => result.compared += 1,
                Some(_) => {
                    result.compared += 1;
                    result.differing.push(index);
                }
                None => {}
            }
        }
        (state, next) = kept;
        compare_from = until;
    }
    Ok(result)
}
