//! Sensors: who they are and what they measure.

use super::{ChannelProbe, SourceProbe};
use crate::config::Sdi12Source;
use crate::intake::Surroundings;
use crate::intake::decode::{When, reading};
use crate::intake::link::Link as _;
use crate::intake::sdi12::recorder::{Failure, Recorder, Timing};
use crate::intake::sdi12::waves;
use crate::record::SourceName;

pub(super) async fn probe(
    name: &SourceName,
    settings: &Sdi12Source,
    around: &Surroundings,
) -> SourceProbe {
    let port = match settings.serial.open().await {
        Ok(port) => port,
        Err(why) => return SourceProbe::failed(name, why.to_string()),
    };
    let mut recorder = Recorder::new(port, Timing::of(settings));
    let mut probe = SourceProbe::of(name, Vec::new());
    let waves = waves(&settings.channels);
    let mut silent = false;
    for (index, measurement) in waves
        .iter()
        .enumerate()
        .flat_map(|(i, w)| w.iter().map(move |m| (i, m)))
    {
        let address = measurement.address;
        if index == 0
            && let Ok(identity) = recorder.identify(address).await
        {
            probe
                .notes
                .push(format!("sensor {address} says of itself: {identity}"));
        }
        let measured = recorder.measure(address, measurement.command).await;
        let when = When::arrival(around.clock.read());
        if let Err(Failure::Gone(why)) = &measured {
            probe.trouble = Some(why.to_string());
            return probe;
        }
        silent |= matches!(measured, Err(Failure::Silent(_)));
        for (id, position) in &measurement.channels {
            let place = format!("{address}{}!, value {position}", measurement.command);
            let values = match &measured {
                Ok(values) => values,
                Err(why) => {
                    probe
                        .channels
                        .push(ChannelProbe::silent(id, place, why.to_string()));
                    continue;
                }
            };
            let raw = position.checked_sub(1).and_then(|p| values.get(p)).copied();
            let Some(raw) = raw else {
                let why = format!("the sensor gave {} values", values.len());
                probe.channels.push(ChannelProbe::silent(id, place, why));
                continue;
            };
            let read = around
                .conversions
                .of(id)
                .and_then(|m| reading(id, when, raw, m));
            let (reading, why) = match read {
                Ok(reading) => (Some(reading), None),
                Err(refusal) => (None, Some(refusal.detail)),
            };
            probe.channels.push(ChannelProbe {
                channel: id.to_string(),
                place,
                raw: raw.to_string(),
                reading,
                why,
                orders: Vec::new(),
            });
        }
    }
    if silent && let Ok(Some(address)) = recorder.who().await {
        // Several sensors would all speak at once, and nothing could be read.
        probe
            .notes
            .push(format!("asked who is there, \"{address}\" answers"));
    }
    probe
}
