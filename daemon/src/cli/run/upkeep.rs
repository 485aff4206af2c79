//! Keeps the store within what the site file allows.

use std::future::Future;
use std::pin::pin;
use std::time::Duration;

use tracing::{info, warn};

use crate::config::Site;
use crate::record::Stamp;
use crate::store::{Retention, Store, StoreError};

/// How often old raw readings are dropped.
const EVERY: Duration = Duration::from_secs(3600);
/// Raw readings dropped at a time; commits go between.
const CHUNK: u32 = 20_000;
/// Sample time dropped at a time while the store is too large \[µs\].
const SPAN: i64 = 24 * 3600 * Stamp::SECOND;

/// Drops raw readings older than `keep_raw`, and the oldest while the store is larger than `max_size`, every hour until
/// `stop` completes. What cannot be done now is done the next time.
pub(super) async fn keep_bounds(site: Site, store: Store, stop: impl Future<Output = ()>) {
    let mut stop = pin!(stop);
    let mut hours = tokio::time::interval(EVERY);
    hours.set_missed_tick_behavior(tokio::time::MissedTickBehavior::Skip);
    let work = async {
        loop {
            hours.tick().await;
            upkeep(&site, &store).await;
        }
    };
    tokio::select! {
        () = work => {}
        () = stop.as_mut() => {}
    }
}

async fn upkeep(site: &Site, store: &Store) {
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
        dropped += drop_before(store, Stamp::now().plus(keep.saturating_neg())).await?;
    }
    while let Some(most) = site.store.max_size
        && store.reader().bytes_used().await? > most
        && let Some(first) = store.reader().first_sample().await?
    {
        let gone = drop_before(store, first.plus(SPAN)).await?;
        if gone == 0 {
            break;
        }
        dropped += gone;
    }
    store.tidy().await?;
    Ok(dropped)
}

/// Drops all readings sampled before an instant, piece by piece.
async fn drop_before(store: &Store, before: Stamp) -> Result<u64, StoreError> {
    let mut dropped: u64 = 0;
    loop {
        let gone = store
            .retain(Retention {
                before,
                chunk: CHUNK,
            })
            .await?;
        dropped = dropped.saturating_add(gone.readings);
        if !gone.more {
            return Ok(dropped);
        }
    }
}
