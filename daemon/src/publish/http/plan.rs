//! The site as the page draws it, and its state.

use std::sync::Arc;

use axum::Json;
use axum::extract::State;
use serde_json::{Value, json};

use super::asking::Asking;
use super::series::si;
use crate::alarm::NOTICE;
use crate::config::{Reference, Side};
use crate::record::AlarmView;

/// `/api/v1/site`: what does not change while the daemon runs.
pub(super) async fn site(State(asking): State<Arc<Asking>>) -> Json<Value> {
    let site = &asking.site;
    let ground = &site.ground;
    let layers: Vec<_> = ground
        .layers
        .iter()
        .map(|l| json!({ "name": l.name, "transmissivity": l.transmissivity, "storativity": l.storativity }))
        .collect();
    let barriers: Vec<_> = ground
        .barriers
        .iter()
        .map(|b| json!({ "name": b.name, "line": b.line, "sealed": b.conductance <= 0.0 }))
        .collect();
    let stages: Vec<_> = ground
        .stages
        .iter()
        .map(|b| json!({ "name": b.name, "line": b.line, "layer": b.layer }))
        .collect();
    let wells: Vec<_> = ground
        .wells
        .iter()
        .zip(&site.wells)
        .map(|(w, s)| json!({ "name": w.name, "at": w.at, "layer": w.layer, "trace": w.trace, "rate": s.rate, "share": s.share }))
        .collect();
    let neighbours: Vec<_> = ground
        .neighbours
        .iter()
        .map(|n| json!({ "name": n.name, "at": n.at, "layer": n.layer }))
        .collect();
    let channels: Vec<_> = site
        .channels
        .values()
        .map(|c| json!({ "name": c.id, "kind": c.kind.name(), "unit": si(c.kind), "source": c.source }))
        .collect();
    Json(json!({
        "id": site.id,
        "name": site.name,
        "units": site.units.name(),
        "origin": site.origin.map(|(latitude, longitude)| json!({ "latitude": latitude, "longitude": longitude })),
        "replay": asking.replay,
        "version": env!("CARGO_PKG_VERSION"),
        "block_s": site.watch.block.as_secs_f64(),
        "embankment": site.embankment.is_some(),
        "edge": { "kind": ground.edge.kind, "distance": ground.edge.distance },
        "layers": layers,
        "barriers": barriers,
        "stages": stages,
        "wells": wells,
        "neighbours": neighbours,
        "gauges": gauges(&asking),
        "channels": channels,
        "limits": limits(&asking),
        "notice": NOTICE,
    }))
}

fn gauges(asking: &Asking) -> Vec<Value> {
    let ground = &asking.site.ground;
    let settings = asking.site.gauges.iter().enumerate();
    settings
        .map(|(index, gauge)| {
            let (at, layer) = ground.gauge_at(index).unzip();
            let in_well = ground
                .wells
                .iter()
                .find(|w| Some(w.at) == at)
                .map(|w| w.name.as_str());
            json!({
                "name": gauge.name,
                "channel": gauge.channel,
                "at": at,
                "layer": layer,
                "well": in_well,
                "elevation": gauge.elevation,
                "reference": match gauge.reference {
                    Reference::Absolute => "absolute",
                    Reference::Vented => "vented",
                    Reference::Sealed => "sealed",
                    Reference::Differential => "differential",
                },
                "noise": ground.gauges.get(index).map(|g| g.noise),
                "drift": ground.gauges.get(index).map(|g| g.drift),
            })
        })
        .collect()
}

fn limits(asking: &Asking) -> Vec<Value> {
    let site = &asking.site;
    let limit = |l: &crate::config::LimitSettings| {
        json!({
            "alarm": l.alarm,
            "gauge": site.gauges.get(l.gauge).map(|g| g.name.as_str()),
            "side": match l.side { Side::Above => "above", Side::Below => "below" },
            "value": l.value,
            "practice": l.practice,
            "author": l.author,
        })
    };
    site.limits.iter().map(limit).collect()
}

/// `/api/v1/snapshot`: how the daemon stands.
pub(super) async fn snapshot(State(asking): State<Arc<Asking>>) -> Json<Value> {
    let snapshot = asking.look().await;
    let (blind, evidence) = {
        let columns = asking.history.columns();
        (columns.blind.clone(), columns.evidence)
    };
    let blind: serde_json::Map<String, Value> = asking
        .names
        .gauges
        .iter()
        .zip(&blind)
        .filter_map(|(name, why)| Some((name.clone(), json!((*why)?))))
        .collect();
    let stored = asking.reader.bytes_used().await.ok();
    let states: Vec<_> = snapshot
        .alarms
        .iter()
        .map(|AlarmView { state, alarm }| json!({ "alarm": alarm.id, "state": state, "occurrence": alarm.occurrence }))
        .collect();
    Json(json!({
        "site": snapshot.site,
        "taken": snapshot.taken,
        "position": snapshot.position,
        "block": snapshot.block,
        "gauges": snapshot.gauges,
        "blind": blind,
        "evidence": evidence.map(|(mixture, threshold)| json!({ "log_mixture": mixture, "log_threshold": threshold })),
        "channels": snapshot.channels,
        "sources": snapshot.sources,
        "health": snapshot.health,
        "alarms": states,
        "store": { "bytes": stored, "max_bytes": asking.site.store.max_size },
    }))
}
