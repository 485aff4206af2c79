//! Opening: start-up and recovery are one path.

use std::sync::Arc;

use tokio::sync::{mpsc, watch};
use tracing::{info, warn};

use super::judge::Judge;
use super::saved::Saved;
use super::{Happening, Keeper, KeeperError, KeeperSettings, view};
use crate::alarm::Desk;
use crate::publish::mqtt::Latest;
use crate::record::{EntryKind, Stamp};
use crate::store::Store;
use crate::watch::ground_file::{GroundFile, GroundFileError};
use crate::watch::lane::{Answer, ModelThread};

/// A ground file in use.
pub(super) struct Sight {
    pub(super) thread: ModelThread,
    pub(super) answers: mpsc::UnboundedReceiver<Answer>,
    /// Digest of the ground file.
    pub(super) digest: String,
    /// Last block of commissioning.
    pub(super) last_block: i64,
}

impl Keeper {
    /// Restores what was saved, processes what the journal holds beyond it, and opens the watch. Transitions and their
    /// messages go to `events` besides the outbox (a file, a terminal).
    ///
    /// # Errors
    /// The store cannot be used or was written by another version.
    pub async fn open(
        settings: KeeperSettings,
        store: Store,
        ground: Result<GroundFile, GroundFileError>,
        wall: Stamp,
        events: Option<mpsc::UnboundedSender<Happening>>,
    ) -> Result<Self, KeeperError> {
        let sight = match ground.and_then(|g| Ok((g.digest()?, g))) {
            Ok((digest, ground)) => {
                let (to_keeper, answers) = mpsc::unbounded_channel();
                let last_block = ground.last_block;
                let thread = ModelThread::start(ground, to_keeper).map_err(KeeperError::Thread)?;
                Ok(Sight {
                    thread,
                    answers,
                    digest,
                    last_block,
                })
            }
            Err(e) => Err(format!("{e}; make it with: {}", settings.renew)),
        };
        Self::with(settings, store, sight, wall, events).await
    }

    /// Opens with the model, or with the reason why there is none.
    pub(super) async fn with(
        settings: KeeperSettings,
        store: Store,
        sight: Result<Sight, String>,
        wall: Stamp,
        events: Option<mpsc::UnboundedSender<Happening>>,
    ) -> Result<Self, KeeperError> {
        let (position, mut saved) = match store.reader().restore().await? {
            Some((position, bytes)) => (
                position,
                postcard::from_bytes::<Saved>(&bytes)
                    .map_err(|e| KeeperError::State(e.to_string()))?,
            ),
            None => (0, Saved::default()),
        };
        let desk = if saved.desk.is_empty() {
            Desk::new(settings.alarms.clone())
        } else {
            Desk::restore(settings.alarms.clone(), &saved.desk)
                .map_err(|e| KeeperError::State(e.to_string()))?
        };
        let length = settings.plan.length;
        let sight = sight.and_then(|sight| match saved.length {
            Some(old) if old != length => Err(format!(
                "this store is judged in blocks of {} s and the site file asks for {} s; set [watch] block back, or give the site a new [store] folder",
                old / Stamp::SECOND,
                length / Stamp::SECOND
            )),
            _ => Ok(sight),
        });
        let (judge, answers, digest, ground_last, blind) = match sight {
            Ok(sight) => {
                saved.length = Some(length);
                let judge = Judge::new(sight.thread);
                let digest = Some(sight.digest);
                (Some(judge), sight.answers, digest, sight.last_block, None)
            }
            Err(why) => (None, mpsc::unbounded_channel().1, None, i64::MIN, Some(why)),
        };
        let mut snapshot = view::empty(&settings);
        snapshot.health.watch = desk.watch_blind_because().map(str::to_owned);
        let shown = watch::Sender::new(Arc::new(snapshot.clone()));
        let mut keeper = Self {
            settings,
            store,
            desk,
            saved,
            judge,
            answers,
            ground_last,
            fingerprint: fingerprint(digest.as_deref()),
            position,
            unsaved: 0,
            snapshot,
            shown,
            latest: watch::Sender::new(Latest::default()),
            events,
        };
        keeper.recover().await?;
        keeper.see_stored().await?;
        let version = env!("CARGO_PKG_VERSION").to_owned();
        keeper
            .happen(
                EntryKind::Start {
                    version,
                    ground: digest,
                },
                wall,
            )
            .await?;
        match blind {
            Some(why) => {
                warn!(%why, "every gauge is blind; readings and limits go on");
                let from = keeper.saved.closer.next.unwrap_or(0);
                keeper
                    .happen(EntryKind::WatchBlind { from, why }, wall)
                    .await?;
            }
            None => keeper.start_watch(wall).await?,
        }
        keeper.show(wall);
        Ok(keeper)
    }

    /// Shows what is stored, until something new comes: the newest block, and the newest reading of every channel.
    async fn see_stored(&mut self) -> Result<(), KeeperError> {
        let reader = self.store.reader();
        if let Some(last) = reader.last_judged().await?
            && let Some(judged) = reader.judged(last).await?
        {
            let names = &self.settings.alarms.names.gauges;
            view::see(&mut self.snapshot, &judged.step, names);
        }
        for channel in reader.channels().await? {
            if let Some(reading) = reader.newest(&channel).await? {
                view::remember(&mut self.snapshot, &reading);
            }
        }
        Ok(())
    }

    async fn recover(&mut self) -> Result<(), KeeperError> {
        let from = self.position;
        loop {
            let entries = self
                .store
                .reader()
                .entries_after(self.position, 1000)
                .await?;
            if entries.is_empty() {
                break;
            }
            for entry in &entries {
                self.process(entry, None).await?;
            }
        }
        if self.position > from {
            info!(
                entries = self.position - from,
                "processed the journal beyond the last saved position"
            );
        }
        Ok(())
    }
}

/// What a checkpoint belongs to: program, processor and ground file. Under another, sums may round otherwise.
#[must_use]
pub fn fingerprint(ground: Option<&str>) -> String {
    format!(
        "{} {} {}",
        env!("CARGO_PKG_VERSION"),
        std::env::consts::ARCH,
        ground.unwrap_or("none")
    )
}
