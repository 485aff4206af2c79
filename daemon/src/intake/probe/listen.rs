//! Sources that speak by themselves.

use std::time::Duration;

use tokio::sync::watch;
use tokio::time::{Instant, timeout_at};

use super::{ChannelProbe, SourceProbe};
use crate::config::{LogSource, MqttSource, SourceSettings, TextLineSource};
use crate::intake::mqtt::{self, Entry};
use crate::intake::{Surroundings, start};
use crate::record::{Reading, Rejected, SourceName};

/// Lines of text, as the daemon itself reads them.
pub(super) async fn lines(
    source: &SourceSettings,
    settings: &TextLineSource,
    around: &Surroundings,
    wait: Duration,
) -> SourceProbe {
    let name = &source.name;
    let (stop, shutdown) = watch::channel(false);
    let around = Surroundings {
        shutdown,
        ..around.clone()
    };
    let mut handle = match start(source, &around) {
        Ok(Some(handle)) => handle,
        Ok(None) => return SourceProbe::failed(name, "there is nothing to listen to"),
        Err(why) => return SourceProbe::failed(name, why.to_string()),
    };
    let mut heard = Heard::default();
    let until = Instant::now() + wait;
    let enough = |heard: &Heard| settings.channels.iter().all(|c| heard.has(&c.id.0));
    while !enough(&heard) {
        match timeout_at(until, handle.deliveries.recv()).await {
            Ok(Some(delivery)) => heard.take(delivery.readings, delivery.rejected),
            Ok(None) | Err(_) => break,
        }
    }
    let state = handle.state.borrow().state.clone();
    stop.send_replace(true);
    let mut probe = SourceProbe::of(name, Vec::new());
    if let Some(why) = state.strip_prefix("waiting: ") {
        probe.trouble = Some(why.to_owned());
        return probe;
    }
    for channel in &settings.channels {
        let field = channel.field.map(|f| format!("field {f}"));
        let prefix = channel.prefix.as_ref().map(|p| format!("prefix {p}"));
        let place: Vec<String> = field.into_iter().chain(prefix).collect();
        probe
            .channels
            .push(heard.channel(&channel.id.0, place.join(", "), wait));
    }
    heard.rest(&mut probe);
    probe
}

/// Topics of a broker, under a name of our own and without a session that outlives us.
pub(super) async fn topics(
    name: &SourceName,
    settings: &MqttSource,
    around: &Surroundings,
    wait: Duration,
) -> SourceProbe {
    let entry = match Entry::new(settings, name, &around.site) {
        Ok(entry) => entry.into_look(),
        Err(why) => return SourceProbe::failed(name, why.to_string()),
    };
    let mut heard = Heard::default();
    let until = Instant::now() + wait;
    let looked = mqtt::look(
        settings,
        &entry,
        name,
        around,
        until,
        |readings, rejected| {
            heard.take(readings, rejected);
            let plain =
                |c: &crate::config::MqttChannel| c.id.is_plain() && heard.has(c.id.as_str());
            settings.channels.iter().all(plain)
        },
    );
    if let Err(why) = looked.await {
        return SourceProbe::failed(name, why);
    }
    let mut probe = SourceProbe::of(name, Vec::new());
    for channel in &settings.channels {
        let pointer = channel.value.as_ref().map(|v| format!(" {v}"));
        let place = format!("{}{}", channel.topic.as_str(), pointer.unwrap_or_default());
        let mut named: Vec<String> = heard.names().filter(|n| channel.id.fits(n)).collect();
        if named.is_empty() {
            named.push(channel.id.as_str().to_owned());
        }
        for id in named {
            probe.channels.push(heard.channel(&id, place.clone(), wait));
        }
    }
    heard.rest(&mut probe);
    probe
}

/// A log that is named on the command line has nothing to look at.
pub(super) fn log(name: &SourceName, settings: &LogSource) -> SourceProbe {
    let mut probe = SourceProbe::of(name, Vec::new());
    match &settings.path {
        Some(path) if !path.exists() => {
            probe.trouble = Some(format!("{} is not there", path.display()));
        }
        Some(path) => probe.notes.push(format!("{} is there", path.display())),
        None => probe
            .notes
            .push("its files are named on the command line".to_owned()),
    }
    probe
}

/// What was heard: the last of every channel.
#[derive(Default)]
struct Heard {
    readings: Vec<Reading>,
    rejected: Vec<Rejected>,
}

impl Heard {
    fn take(&mut self, readings: Vec<Reading>, rejected: Vec<Rejected>) {
        for reading in readings {
            self.readings.retain(|r| r.channel != reading.channel);
            self.readings.push(reading);
        }
        self.rejected.extend(rejected);
        let excess = self.rejected.len().saturating_sub(100);
        self.rejected.drain(..excess);
    }

    fn has(&self, channel: &str) -> bool {
        self.readings.iter().any(|r| &*r.channel.0 == channel)
    }

    fn names(&self) -> impl Iterator<Item = String> {
        let mut names: Vec<String> = self
            .readings
            .iter()
            .map(|r| r.channel.to_string())
            .collect();
        names.extend(
            self.rejected
                .iter()
                .filter_map(|r| r.channel.as_ref().map(ToString::to_string)),
        );
        names.sort();
        names.dedup();
        names.into_iter()
    }

    fn channel(&self, channel: &str, place: String, wait: Duration) -> ChannelProbe {
        let reading = self.readings.iter().find(|r| &*r.channel.0 == channel);
        let refused = |r: &&Rejected| r.channel.as_ref().is_some_and(|c| &*c.0 == channel);
        let refusal = self.rejected.iter().rev().find(refused);
        let mut probe = ChannelProbe::silent(
            &channel.into(),
            place,
            format!("nothing came within {} s", wait.as_secs_f64()),
        );
        if let Some(reading) = reading {
            probe.raw = reading.raw.map(|r| r.to_string()).unwrap_or_default();
            probe.reading = Some(reading.clone());
            probe.why = None;
        } else if let Some(refusal) = refusal {
            probe.raw.clone_from(&refusal.raw);
            probe.why = Some(refusal.detail.clone());
        }
        probe
    }

    /// Refusals that belong to no channel.
    fn rest(&self, probe: &mut SourceProbe) {
        if let Some(refusal) = self.rejected.iter().rev().find(|r| r.channel.is_none()) {
            let note = format!("refused \"{}\": {}", refusal.raw, refusal.detail);
            probe.notes.push(note);
        }
    }
}
