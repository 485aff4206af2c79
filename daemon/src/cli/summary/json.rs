//! The site as JSON.

use serde_json::{Value, json};

use super::words::{
    broker_words, layer_name, layer_names, reference_word, side_word, source_words,
};
use crate::config::{PublishSettings, Site};

/// The site as JSON, in SI.
pub(in crate::cli) fn summary_json(site: &Site) -> Value {
    let gauges = site.ground.gauges.iter().zip(&site.gauges).enumerate();
    json!({
        "id": site.id,
        "name": site.name,
        "units": site.units.name(),
        "store": site.store.folder.display().to_string(),
        "ground_digest": site.ground_digest(),
        "watch": {
            "false_alarm_interval_s": site.watch.false_alarm_interval,
            "lateness_s": site.watch.lateness.as_secs_f64(),
            "hold_rate_s": site.watch.hold_rate.as_secs_f64(),
            "block_s": site.watch.block.as_secs_f64(),
        },
        "embankment": site.embankment.as_ref().map(|e| json!({
            "season": e.season, "ageing": e.ageing,
            "drives": e.drives.iter().map(|d| json!({
                "driver": d.driver, "channel": d.channel, "factor": d.factor,
            })).collect::<Vec<_>>(),
        })),
        "layers": site.ground.layers,
        "zones": site.ground.zones,
        "edge": site.ground.edge,
        "barriers": site.ground.barriers,
        "stages": site.ground.stages,
        "waters": site.waters.iter().map(|w| json!({ "name": w.name, "channel": w.channel })).collect::<Vec<_>>(),
        "wells": site.ground.wells.iter().zip(&site.wells).map(|(w, s)| json!({
            "name": w.name, "at_m": w.at, "layer": layer_names(site, w), "radius_m": w.radius, "trace_m": w.trace,
            "skin": w.skin, "rate": s.rate, "share": s.share,
        })).collect::<Vec<_>>(),
        "neighbours": site.ground.neighbours.iter().map(|n| json!({
            "name": n.name, "at_m": n.at, "layer": layer_name(site, n.layer),
        })).collect::<Vec<_>>(),
        "gauges": gauges.map(|(index, (g, s))| {
            let (at, layer) = site.ground.gauge_at(index).unwrap_or_default();
            json!({
                "name": g.name, "at_m": at, "layer": layer_name(site, layer), "channel": s.channel,
                "reference": reference_word(s.reference), "noise_Pa": g.noise, "drift_Pa_per_s": g.drift,
            })
        }).collect::<Vec<_>>(),
        "sources": site.sources.iter().map(|s| json!({
            "name": s.name, "kind": s.config.kind(), "channels": s.config.channel_count(),
            "at": source_words(&s.config),
        })).collect::<Vec<_>>(),
        "limits": site.limits.iter().map(|l| json!({
            "alarm": l.alarm, "channel": l.channel, "side": side_word(l.side), "value_Pa": l.value,
            "deadband_Pa": l.deadband, "delay_s": l.delay.as_secs_f64(), "priority": l.priority,
            "response": l.response, "author": l.author,
        })).collect::<Vec<_>>(),
        "publish": site.publish.iter().map(|p| {
            let PublishSettings::Mqtt(mqtt) = p;
            json!({ "kind": "mqtt", "at": broker_words(&mqtt.endpoint), "topic_root": mqtt.topic_root })
        }).collect::<Vec<_>>(),
    })
}
