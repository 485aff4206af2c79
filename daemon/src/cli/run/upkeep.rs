//! Keeps the store within what the site file allows.

use tracing::{info, warn};

use crate::config::Site;
use crate::record::Stamp;
use crate::store::{Retention, Store, StoreError};

/// Raw readings dropped at a time.
const CHUNK: u32 = 20_000;

/// Drops raw readings older than `keep_raw`, or the oldest while the store is larger than `max_size`. What cannot be
/// done now is done the next time.
pub(super) async fn upkeep(site: &Site, store: &Store) {
    match drop_old(site, store).await {
        Ok(0) => {}
        Ok(dropped) => info!(dropped, "old raw readings were dropped"),
        Err(why) => warn!(%why, "the store could not be tidied"),
    }
}

async fn drop_old(site: &Site, store: &Store) -> Result<u64, StoreError> {
    let mut dropped = 0;
    if let Some(keep) = site.store.keep_raw {
        let keep = i64::try_from(keep.as_micros()).unwrap_or(i64::MAX);
        let before = Stamp(Stamp::now().0.saturating_sub(keep));
        dropped += store
            .retain(Retention {
                before,
                chunk: CHUNK,
            })
            .await?
            .readings;
    }
    if let Some(most) = site.store.max_size
        && store.reader().bytes_used().await? > most
        && let Some(first) = store.reader().first_sample().await?
    {
        let before = first.plus(24 * 3600 * Stamp::SECOND);
        dropped += store
            .retain(Retention {
                before,
                chunk: CHUNK,
            })
            .await?
            .readings;
    }
    store.tidy().await?;
    Ok(dropped)
}
