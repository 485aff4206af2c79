//! Wires publishers to the store's outbox.

use std::sync::Arc;

use anyhow::Context as _;
use tokio::sync::watch;
use tokio::task::JoinHandle;

use crate::config::{MqttPublish, PublishSettings, Site};
use crate::publish::mqtt::{
    Feeds, Latest, MqttSettings, OutboxError, OutboxSource, PublishStatus, publish,
};
use crate::record::{Outgoing, Snapshot};
use crate::store::{Store, StoreOptions};

/// The store of a site: every publisher is a target of its outbox.
pub(super) fn store_options(site: &Site) -> StoreOptions {
    StoreOptions {
        targets: site.publish.iter().map(target_name).collect(),
        ..StoreOptions::default()
    }
}

/// Name of a publisher in the outbox: stable as long as it goes to the same place.
fn target_name(publish: &PublishSettings) -> String {
    let PublishSettings::Mqtt(broker) = publish;
    format!(
        "mqtt {}:{} {}",
        broker.endpoint.host, broker.endpoint.port, broker.topic_root
    )
}

/// The outbox of one target.
struct Outbox {
    store: Store,
    target: String,
}

impl OutboxSource for Outbox {
    async fn next(&mut self, after: i64, limit: u32) -> Result<Vec<(i64, Outgoing)>, OutboxError> {
        let rows = self
            .store
            .reader()
            .outbox_after(&self.target, after, limit.into())
            .await?;
        Ok(rows.into_iter().map(|w| (w.number, w.message)).collect())
    }

    async fn sent(&mut self, numbers: &[i64]) -> Result<(), OutboxError> {
        Ok(self.store.sent(&self.target, numbers.to_vec()).await?)
    }

    async fn retained(&mut self) -> Result<Vec<Outgoing>, OutboxError> {
        Ok(self.store.reader().retained().await?)
    }
}

/// Starts every publisher of the site.
///
/// # Errors
/// A password cannot be read, or a target cannot be published to.
pub(super) fn start(
    site: &Site,
    store: &Store,
    snapshot: &watch::Receiver<Arc<Snapshot>>,
    latest: &watch::Receiver<Latest>,
    stopped: &watch::Receiver<bool>,
) -> anyhow::Result<Vec<JoinHandle<()>>> {
    let mut tasks = Vec::new();
    for (number, target) in site.publish.iter().enumerate() {
        let PublishSettings::Mqtt(broker) = target;
        let mut settings = mqtt_settings(site, broker)?;
        if number > 0 && broker.endpoint.client_id.is_none() {
            // Two clients of one id at one broker would throw each other out.
            settings.client_id = format!("{}-{}", settings.client_id, number + 1);
        }
        let outbox = Outbox {
            store: store.clone(),
            target: target_name(target),
        };
        let feeds = Feeds {
            rows: store.outbox_changes(),
            snapshot: snapshot.clone(),
            latest: latest.clone(),
        };
        let stop = super::until(stopped.clone());
        let status = watch::Sender::new(PublishStatus::default());
        tasks.push(tokio::spawn(async move {
            if let Err(why) = publish(settings, outbox, feeds, status, stop).await {
                tracing::error!(%why, "a publisher cannot run");
            }
        }));
    }
    Ok(tasks)
}

fn mqtt_settings(site: &Site, broker: &MqttPublish) -> anyhow::Result<MqttSettings> {
    let endpoint = &broker.endpoint;
    anyhow::ensure!(
        !endpoint.tls,
        "mqtts:// is not in this build; publish to a broker on this machine that bridges over TLS"
    );
    let mut settings =
        MqttSettings::new(&endpoint.host, endpoint.port, &broker.topic_root, &site.id);
    settings.user.clone_from(&endpoint.user);
    if let Some(secret) = &endpoint.password {
        let secret = secret.read().context("the password of a publisher")?;
        settings.password = Some(secret.expose().to_owned());
    }
    if let Some(id) = &endpoint.client_id {
        settings.client_id.clone_from(id);
    }
    Ok(settings)
}
