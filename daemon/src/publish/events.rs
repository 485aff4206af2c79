//! Events as CloudEvents 1.0 in structured JSON. Their schemas are in `deploy/schemas`.
//!
//! Times are RFC 3339 in UTC; numbers are SI; what is not known is `null` or left out, never NaN.

use std::collections::BTreeMap;

use serde::Serialize;

use crate::alarm::NOTICE;
use crate::record::{
    Alarm, AlarmKind, AlarmState, Blind, Expectation, Finding, Names, Outgoing, OutgoingId,
    Priority, SizeUnit, Snapshot, SourceView, Stamp, Transition, TransitionKind,
};

/// Type of an alarm's event: one for every transition.
pub const ALARM: &str = "borewake.alarm.v1";
/// Type of a gauge's expectation for one block.
pub const EXPECTATION: &str = "borewake.expectation.v1";
/// Type of the heartbeat.
pub const HEALTH: &str = "borewake.health.v1";
/// Topic of the heartbeat below the site's root; also the last will's.
pub const WATCHKEEPING: &str = "watchkeeping";

/// The envelope: context attributes of CloudEvents 1.0, names of small letters and digits only.
#[derive(Debug, Serialize)]
struct CloudEvent<'a, T> {
    specversion: &'static str,
    #[serde(rename = "type")]
    kind: &'static str,
    source: String,
    id: String,
    subject: String,
    /// Sample instant at which it became so.
    time: Stamp,
    /// When it was written.
    recordedtime: Stamp,
    /// Orders the events of one subject as text.
    #[serde(skip_serializing_if = "Option::is_none")]
    sequence: Option<String>,
    #[serde(skip_serializing_if = "Option::is_none")]
    replay: Option<bool>,
    /// On the heartbeat only, so that a consumer need not open `data` to see it.
    #[serde(skip_serializing_if = "Option::is_none")]
    online: Option<bool>,
    datacontenttype: &'static str,
    dataschema: String,
    data: &'a T,
}

fn envelope<T: Serialize>(kind: &'static str, site: &str, data: &T, fill: Fill) -> String {
    let event = CloudEvent {
        specversion: "1.0",
        kind,
        source: format!("borewake/{site}"),
        id: fill.id,
        subject: fill.subject,
        time: fill.time,
        recordedtime: fill.recorded,
        sequence: fill.sequence,
        replay: fill.replay.then_some(true),
        online: fill.online,
        datacontenttype: "application/json",
        dataschema: format!("urn:borewake:schema:{kind}"),
        data,
    };
    // Only text keys are written and non-finite numbers become null, so that writing cannot fail.
    serde_json::to_string(&event).unwrap_or_default()
}

/// What differs from event to event.
struct Fill {
    id: String,
    subject: String,
    time: Stamp,
    recorded: Stamp,
    sequence: Option<String>,
    replay: bool,
    online: Option<bool>,
}

/// Data of [`ALARM`].
#[derive(Debug, Serialize)]
pub(super) struct AlarmData<'a> {
    alarm: &'a str,
    kind: AlarmKind,
    state: AlarmState,
    #[serde(skip_serializing_if = "Option::is_none")]
    transition: Option<TransitionKind>,
    occurrence: u32,
    priority: Priority,
    since: Stamp,
    summary: &'a str,
    response: &'a str,
    #[serde(skip_serializing_if = "Option::is_none")]
    by: Option<&'a str>,
    #[serde(skip_serializing_if = "str::is_empty")]
    note: &'a str,
    finding: Option<FindingData>,
    notice: &'static str,
    advisory: bool,
}

impl<'a> AlarmData<'a> {
    /// An alarm as it stands, without a transition.
    pub(super) fn standing(alarm: &'a Alarm, names: &Names) -> Self {
        Self {
            alarm: &alarm.id.0,
            kind: alarm.kind,
            state: alarm.state(),
            transition: None,
            occurrence: alarm.occurrence,
            priority: alarm.priority,
            since: alarm.since,
            summary: &alarm.summary,
            response: &alarm.response,
            by: None,
            note: "",
            finding: alarm.finding.as_ref().map(|f| FindingData::new(f, names)),
            notice: NOTICE,
            advisory: true,
        }
    }

    /// An alarm just after a transition.
    pub(super) fn moved(transition: &'a Transition, names: &Names) -> Self {
        Self {
            transition: Some(transition.kind),
            by: transition.by.as_deref(),
            note: &transition.note,
            ..Self::standing(&transition.alarm, names)
        }
    }
}

#[derive(Debug, Serialize)]
struct FindingData {
    cause: &'static str,
    named: bool,
    causes: Vec<CauseData>,
    onset: Stamp,
    onset_sd_s: f64,
    size: Option<SizeData>,
    place: Option<PlaceData>,
    gauges: Vec<GaugeData>,
    log_mixture: f64,
    log_threshold: f64,
}

#[derive(Debug, Serialize)]
struct CauseData {
    cause: &'static str,
    probability: f64,
    /// Gauge, well or neighbour it is about.
    #[serde(skip_serializing_if = "Option::is_none")]
    of: Option<String>,
}

#[derive(Debug, Serialize)]
struct SizeData {
    value: f64,
    sd: f64,
    unit: SizeUnit,
}

#[derive(Debug, Serialize)]
struct PlaceData {
    x: f64,
    y: f64,
    layer: String,
    radius_90_m: f64,
}

#[derive(Debug, Serialize)]
struct GaugeData {
    name: String,
    departure: f64,
    sd: f64,
}

impl FindingData {
    fn new(finding: &Finding, names: &Names) -> Self {
        Self {
            cause: finding
                .causes
                .first()
                .map_or("unexplained", |w| w.cause.name()),
            named: finding.named,
            causes: finding
                .causes
                .iter()
                .map(|w| CauseData {
                    cause: w.cause.name(),
                    probability: w.probability,
                    of: w.subject.and_then(|s| names.subject(s)),
                })
                .collect(),
            onset: Stamp::from_seconds(finding.onset),
            onset_sd_s: finding.onset_sd,
            size: finding.size.map(|s| SizeData {
                value: s.value,
                sd: s.sd,
                unit: s.unit,
            }),
            place: finding.place.map(|p| PlaceData {
                x: p.x,
                y: p.y,
                layer: names.layer(p.layer),
                radius_90_m: p.radius_90,
            }),
            gauges: finding
                .gauges
                .iter()
                .map(|(gauge, departure, sd)| GaugeData {
                    name: names.gauge(*gauge),
                    departure: *departure,
                    sd: *sd,
                })
                .collect(),
            log_mixture: finding.log_mixture,
            log_threshold: finding.log_threshold,
        }
    }
}

/// Identity of a transition's message.
#[must_use]
pub fn alarm_id(transition: &Transition) -> OutgoingId {
    OutgoingId {
        subject: transition.alarm.id.0.clone(),
        occurrence: transition.alarm.occurrence,
        sequence: transition.alarm.sequence,
    }
}

/// What an alarm's events are about: its name, for findings of the watch with the occurrence, because each occurrence
/// is a finding of its own.
#[must_use]
pub fn alarm_subject(transition: &Transition) -> String {
    let alarm = &transition.alarm;
    match alarm.kind {
        AlarmKind::Watch => format!("{}-{}", alarm.id, alarm.occurrence),
        AlarmKind::Limit | AlarmKind::Blind => alarm.id.0.clone(),
    }
}

/// A transition as one line of JSON.
#[must_use]
pub fn alarm(transition: &Transition, names: &Names, replay: bool) -> String {
    let alarm = &transition.alarm;
    let data = AlarmData::moved(transition, names);
    let fill = Fill {
        id: alarm_id(transition).to_string(),
        subject: alarm_subject(transition),
        time: transition.at,
        recorded: transition.recorded,
        sequence: Some(format!("{:08}.{:08}", alarm.occurrence, alarm.sequence)),
        replay,
        online: None,
    };
    envelope(ALARM, &names.site, &data, fill)
}

/// The messages of a transition, in order: the event, which the broker keeps while the alarm is not normal; and once
/// it is normal again an empty one that clears what was kept.
#[must_use]
pub fn alarm_outgoing(transition: &Transition, names: &Names, replay: bool) -> Vec<Outgoing> {
    let id = alarm_id(transition);
    let topic = format!("alarm/{}", transition.alarm.id);
    let normal = transition.alarm.state() == AlarmState::Normal;
    let mut messages = vec![Outgoing {
        id: id.clone(),
        topic: topic.clone(),
        payload: alarm(transition, names, replay),
        retain: !normal,
    }];
    if normal {
        messages.push(Outgoing {
            id: OutgoingId {
                subject: format!("{}.clear", id.subject),
                ..id
            },
            topic,
            payload: String::new(),
            retain: true,
        });
    }
    messages
}

/// What one block says of one gauge.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct GaugeNews {
    /// Gauge, by order in the ground.
    pub gauge: usize,
    /// Number of the block since the epoch.
    pub block: i64,
    /// End of the block.
    pub end: Stamp,
    /// What it should have shown.
    pub expectation: Option<Expectation>,
    /// What it showed less that \[Pa\].
    pub departure: Option<f64>,
    /// Why it cannot be judged.
    pub blind: Option<Blind>,
}

#[derive(Debug, Serialize)]
struct ExpectationData {
    gauge: String,
    block: i64,
    mean: Option<f64>,
    sd: Option<f64>,
    reading: Option<f64>,
    departure: Option<f64>,
    unit: &'static str,
    blind: Option<Blind>,
}

/// A gauge's expectation: topic below the site's root, and one line of JSON. Not kept in the outbox: the next replaces it.
#[must_use]
pub fn expectation(
    news: &GaugeNews,
    names: &Names,
    recorded: Stamp,
    replay: bool,
) -> (String, String) {
    let gauge = names.gauge(news.gauge);
    let topic = format!("gauge/{}/expectation", topic_level(&gauge));
    let expected = news.expectation;
    let data = ExpectationData {
        gauge: gauge.clone(),
        block: news.block,
        mean: expected.map(|e| e.mean),
        sd: expected.map(|e| e.sd),
        reading: expected.zip(news.departure).map(|(e, d)| e.mean + d),
        departure: news.departure,
        unit: "Pa",
        blind: news.blind,
    };
    let fill = Fill {
        id: format!("expectation.{gauge}.{}", news.block),
        subject: gauge,
        time: news.end,
        recorded,
        sequence: None,
        replay,
        online: None,
    };
    (topic, envelope(EXPECTATION, &names.site, &data, fill))
}

#[derive(Debug, Serialize)]
struct HealthData<'a> {
    online: bool,
    version: &'static str,
    position: i64,
    block: Option<i64>,
    alarms: BTreeMap<&'static str, u64>,
    blind: Vec<&'a str>,
    sources: &'a BTreeMap<String, SourceView>,
    watch: Option<&'a str>,
    committed: u64,
    duplicates: u64,
    late: u64,
    conflicts: u64,
    outbox: u64,
}

/// The heartbeat as one line of JSON: a summary of the snapshot while the daemon is there; `online` is false in the
/// last will and in the farewell of a clean stop.
#[must_use]
pub fn health(snapshot: &Snapshot, online: bool) -> String {
    let mut alarms = BTreeMap::new();
    for view in &snapshot.alarms {
        if view.state != AlarmState::Normal {
            *alarms.entry(view.state.name()).or_insert(0) += 1;
        }
    }
    let health = &snapshot.health;
    let data = HealthData {
        online,
        version: env!("CARGO_PKG_VERSION"),
        position: snapshot.position,
        block: snapshot.block,
        alarms,
        blind: snapshot
            .gauges
            .iter()
            .filter(|(_, g)| g.blind.is_some())
            .map(|(name, _)| name.as_str())
            .collect(),
        sources: &snapshot.sources,
        watch: health.watch.as_deref(),
        committed: health.committed,
        duplicates: health.duplicates,
        late: health.late,
        conflicts: health.conflicts,
        outbox: health.outbox,
    };
    let fill = Fill {
        id: format!(
            "health.{}.{}",
            if online { "online" } else { "offline" },
            snapshot.taken
        ),
        subject: WATCHKEEPING.to_owned(),
        time: snapshot.taken,
        recorded: snapshot.taken,
        sequence: None,
        replay: false,
        online: Some(online),
    };
    envelope(HEALTH, &snapshot.site, &data, fill)
}

/// A name that can be one level of a topic.
fn topic_level(name: &str) -> String {
    name.chars()
        .map(|c| {
            if matches!(c, '/' | '+' | '#') || c.is_control() {
                '_'
            } else {
                c
            }
        })
        .collect()
}

#[cfg(test)]
mod tests {
    // Whole events are held against the published schemas in the crate of end-to-end tests.
    #[test]
    fn a_gauge_name_cannot_leave_its_level() {
        assert_eq!(super::topic_level("a/b+#"), "a_b__");
    }
}
