//! `[[limit]]` and `[[publish]]`.

use std::path::Path;
use std::time::Duration;

use borewake_model::units::Dimension;

use super::super::section::{At, Section};
use super::super::values::Sign;
use super::super::{LimitSettings, MqttPublish, PublishSettings, Side};
use super::mqtt;
use super::points::{GaugeRead, sound_name, unique};
use crate::record::{AlarmId, Priority};

/// How far a value must come back where the site file states no deadband, in standard deviations of the gauge's noise.
/// Common practice, no source.
const USUAL_DEADBAND: f64 = 4.0;

/// A named preset: what a limit of this practice is where the site file does not say otherwise. The number itself is
/// always the operator's. Common practice, no source.
struct Practice {
    name: &'static str,
    side: Side,
    delay: Duration,
    priority: Priority,
}

const PRACTICES: &[Practice] = &[
    Practice {
        name: "injection-pressure",
        side: Side::Above,
        delay: Duration::from_secs(30),
        priority: Priority::High,
    },
    // A piezometer is read rarely and by itself: the first reading beyond counts.
    Practice {
        name: "piezometer-threshold",
        side: Side::Above,
        delay: Duration::ZERO,
        priority: Priority::Medium,
    },
    Practice {
        name: "piezometer-action",
        side: Side::Above,
        delay: Duration::ZERO,
        priority: Priority::High,
    },
];

/// Reads every `[[limit]]`, one setting a side.
pub(super) fn limits(root: &mut Section<'_>, gauges: &[GaugeRead]) -> Vec<LimitSettings> {
    let mut limits: Vec<LimitSettings> = Vec::new();
    let mut names = Vec::new();
    for mut section in root.list("limit") {
        let name = section
            .has("name")
            .then(|| sound_name(&mut section))
            .flatten();
        if let Some(name) = name.clone() {
            unique(&section, "limit", &mut names, name);
        }
        let gauge = gauge(&mut section, gauges);
        let common = common(&mut section, gauge);
        for (side, value) in sides(&mut section, common.practice) {
            let about = match &name {
                Some(name) => name.value.clone(),
                None => common.gauge_name.clone(),
            };
            limits.push(LimitSettings {
                alarm: alarm_id(&limits, &about, side),
                side,
                value,
                ..common.settings.clone()
            });
        }
        section.close();
    }
    limits
}

/// What both sides of a limit share.
struct Common {
    practice: Option<&'static Practice>,
    gauge_name: String,
    settings: LimitSettings,
}

/// Reads `gauge`.
fn gauge<'g>(section: &mut Section<'_>, gauges: &'g [GaugeRead]) -> Option<(usize, &'g GaugeRead)> {
    let mend = "gauge = \"O-2\", the name of a [[gauge]]";
    let named = section.must("gauge", mend, |s, k| s.text(k))?;
    let mut numbered = gauges.iter().enumerate();
    let found = numbered.find(|(_, g)| g.gauge.name == named.value);
    if found.is_none() {
        let names: Vec<&str> = gauges.iter().map(|g| g.gauge.name.as_str()).collect();
        section.unknown_name("gauge", &named, "is no [[gauge]]", &names);
    }
    found
}

/// Reads all but the numbers.
fn common(section: &mut Section<'_>, gauge: Option<(usize, &GaugeRead)>) -> Common {
    let practices: Vec<_> = PRACTICES.iter().map(|p| (p.name, p)).collect();
    let practice = section.word("practice", &practices);
    let delay = section.duration("delay", Duration::ZERO, Duration::from_secs(7 * 86_400));
    let deadband = section.quantity("deadband", Dimension::Pressure, Sign::NotNegative);
    let priorities = [
        ("low", Priority::Low),
        ("medium", Priority::Medium),
        ("high", Priority::High),
    ];
    let priority = section.word("priority", &priorities);
    let response = section.text("response");
    if !section.has("response") {
        let text = "no `response`: an alarm is there so that somebody does something; say what";
        section.report.note(&section.span, section.whole(), text);
    }
    let mend = "author = \"initials and date\", of who set the number";
    let author = section.must("author", mend, |s, k| s.text(k));
    let usual_deadband = gauge.map_or(0.0, |(_, g)| USUAL_DEADBAND * g.gauge.noise);
    Common {
        practice,
        gauge_name: gauge.map(|(_, g)| g.gauge.name.clone()).unwrap_or_default(),
        settings: LimitSettings {
            alarm: AlarmId(String::new()),
            gauge: gauge.map_or(0, |(index, _)| index),
            channel: gauge.map_or_else(|| "".into(), |(_, g)| g.settings.channel.clone()),
            side: Side::Above,
            value: 0.0,
            delay: delay
                .map(|d| d.value)
                .or(practice.map(|p| p.delay))
                .unwrap_or_default(),
            deadband: deadband.map_or(usual_deadband, |d| d.value),
            practice: practice.map(|p| p.name.to_owned()),
            priority: priority
                .or(practice.map(|p| p.priority))
                .unwrap_or_default(),
            response: response.map(|r| r.value).unwrap_or_default(),
            author: author.map(|a| a.value).unwrap_or_default(),
        },
    }
}

/// Reads `above` and `below`.
fn sides(section: &mut Section<'_>, practice: Option<&Practice>) -> Vec<(Side, f64)> {
    let above = section.quantity("above", Dimension::Pressure, Sign::Any);
    let below = section.quantity("below", Dimension::Pressure, Sign::Any);
    if !section.has("above") && !section.has("below") {
        section.report.missing(
            &section.span,
            section.whole(),
            "the limit has no number",
            "add above = \"6.1 MPa\" or below = \"…\"",
        );
    }
    if let (Some(above), Some(below)) = (&above, &below)
        && above.value <= below.value
    {
        let what = "every value would be above the one or below the other";
        section.wrong(
            "above",
            above,
            what,
            "the number for `above` is the larger one",
        );
    }
    if let Some(practice) = practice {
        let (due, other) = match practice.side {
            Side::Above => ("above", "below"),
            Side::Below => ("below", "above"),
        };
        if section.has(other) && !section.has(due) {
            section.report.place(
                &section.key_span(other),
                section.key(other),
                format!("practice \"{}\" guards the other side", practice.name),
                format!("give the number as `{due}`, or leave `practice` out"),
            );
        }
    }
    let above = above.map(|a| (Side::Above, a.value));
    let below = below.map(|b| (Side::Below, b.value));
    above.into_iter().chain(below).collect()
}

/// A name for the alarm that no earlier limit has.
fn alarm_id(limits: &[LimitSettings], about: &str, side: Side) -> AlarmId {
    let side = match side {
        Side::Above => "above",
        Side::Below => "below",
    };
    let first = format!("limit-{about}-{side}");
    let taken = |id: &str| limits.iter().any(|l| l.alarm.0 == id);
    if !taken(&first) {
        return AlarmId(first);
    }
    let mut numbered = (2..).map(|n: u32| format!("{first}-{n}"));
    AlarmId(numbered.find(|id| !taken(id)).unwrap_or(first))
}

/// Reads every `[[publish]]`.
pub(super) fn publish(root: &mut Section<'_>, folder: &Path) -> Vec<PublishSettings> {
    let mut all = Vec::new();
    for mut section in root.list("publish") {
        let kinds = [("mqtt", true), ("webhook", false)];
        match section.must("kind", "kind = \"mqtt\"", |s, k| s.word(k, &kinds)) {
            Some(true) => {
                let endpoint = mqtt::endpoint(&mut section, folder);
                let root = section
                    .text("topic_root")
                    .map(|root| topic_root(&section, &root));
                section.close();
                all.push(PublishSettings::Mqtt(MqttPublish {
                    endpoint,
                    topic_root: root.unwrap_or_else(|| "borewake".to_owned()),
                }));
            }
            Some(false) => section.report.value(
                &section.value_span("kind"),
                section.key("kind"),
                "a webhook is not in this build",
                "take mqtt, or leave this [[publish]] out",
            ),
            None => section.close_partly(),
        }
    }
    all
}

/// A topic that others follow, without slashes at its ends.
fn topic_root(section: &Section<'_>, root: &At<String>) -> String {
    let trimmed = root.value.trim_matches('/');
    if trimmed.is_empty() || trimmed.contains(['+', '#', '{', '}']) || root.value.starts_with('$') {
        let what = "a topic without wildcards is due";
        section.wrong("topic_root", root, what, "such as \"plant/borewake\"");
    }
    trimmed.to_owned()
}
