//! `[[well]]` and `[[gauge]]`: places in the ground, and the channels they take.

use std::ops::Range;
use std::time::Duration;

use borewake_model::ground::{Gauge, Point, Seat, Well};
use borewake_model::units::{Dimension, YEAR};

use super::super::section::{At, Section};
use super::super::values::Sign;
use super::super::{GaugeSettings, GaugeString, Meter, PastRate, Reference, WellSettings};
use super::ground::{layer, open_layers};
use super::layer::LayerRead;
use crate::record::{ChannelId, Holds};

/// Noise of a pressure gauge whose site file states none \[Pa\]. Common practice, no source.
const USUAL_NOISE: f64 = 100.0;
/// Drift of a pressure gauge whose site file states none \[Pa/s\]: 2 kPa/yr. Common practice, no source.
const USUAL_DRIFT: f64 = 2000.0 / YEAR;
/// Longest name of a well, a gauge or a layer \[characters\].
const LONGEST_NAME: usize = 64;

/// A well as written, with the places other checks point at.
pub(super) struct WellRead {
    pub(super) well: Well,
    pub(super) settings: WellSettings,
    pub(super) path: String,
    pub(super) at: Range<usize>,
    /// Whether its place could be read.
    pub(super) placed: bool,
    pub(super) rate: At<String>,
}

/// A gauge as written, with the places other checks point at.
pub(super) struct GaugeRead {
    pub(super) gauge: Gauge,
    pub(super) settings: GaugeSettings,
    pub(super) path: String,
    pub(super) at: Range<usize>,
    /// Where it is in the ground, if that could be read.
    pub(super) place: Option<(Point, usize)>,
    pub(super) channel: At<String>,
}

/// Reads `name`, which stands in topics and alarm names.
pub(super) fn sound_name(section: &mut Section<'_>) -> Option<At<String>> {
    let name = section.must("name", "name = \"…\"", |s, k| s.text(k))?;
    let odd = |c: char| matches!(c, '/' | '+' | '#' | '{' | '}');
    if name.value.contains(odd) || name.value.chars().count() > LONGEST_NAME {
        let what =
            format!("a name stands in topics: no / + # {{ }}, at most {LONGEST_NAME} characters");
        section.wrong("name", &name, what, "such as \"O-2\"");
    } else if name.value.trim() != name.value {
        let what = "the name starts or ends with a blank";
        section.wrong("name", &name, what, "leave the blank out");
    }
    Some(name)
}

/// Reports a name that stood before.
pub(super) fn unique(
    section: &Section<'_>,
    what: &str,
    names: &mut Vec<At<String>>,
    name: At<String>,
) {
    if names.iter().any(|n| n.value == name.value) {
        let text = format!("another {what} has this name");
        section.wrong(
            "name",
            &name,
            text,
            format!("give every {what} a name of its own"),
        );
    } else {
        names.push(name);
    }
}

/// Reads every `[[well]]`.
pub(super) fn wells(root: &mut Section<'_>, layers: &[LayerRead]) -> Vec<WellRead> {
    let mut names = Vec::new();
    let mut wells = Vec::new();
    for mut section in root.list("well") {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "well", &mut names, name);
        }
        let trace = section.line("trace");
        let at = match &trace {
            None => section.must(
                "at",
                "at = [\"310 m\", \"-480 m\"], or trace = [[…], […]] for a line",
                |s, k| s.point(k),
            ),
            Some(trace) => {
                if section.take("at").is_some() {
                    section.report.place(
                        &section.key_span("at"),
                        section.key("at"),
                        "a well with a trace is where its trace is",
                        "keep `at` or `trace`, not both",
                    );
                }
                Some(At {
                    value: halfway(&trace.value),
                    span: trace.span.clone(),
                })
            }
        };
        let open = open_layers(&mut section, layers);
        let radius = section.must(
            "radius",
            "radius = \"0.11 m\", of the bore at the layer",
            |s, k| s.quantity(k, Dimension::Length, Sign::Positive),
        );
        let skin = section.number("skin");
        if let Some(skin) = &skin
            && !(-6.0..=50.0).contains(&skin.value)
        {
            let what = "a skin lies between -6 and 50";
            section.wrong(
                "skin",
                skin,
                what,
                "leave it out where it is not known: it is fitted",
            );
        }
        if let (Some(_), Some(skin)) = (&trace, skin.as_ref().filter(|s| s.value < 0.0)) {
            let what = "a well with a trace takes no skin below zero";
            let mend = "its length says how well it is joined to the ground: state zero or more";
            section.wrong("skin", skin, what, mend);
        }
        if open.len() > 1 && skin.is_none() {
            let text = "a well open to several layers has its skin in the model: where it may have one, state a guess above zero, and history corrects it";
            section
                .report
                .note(&section.value_span("layer"), section.key("skin"), text);
        }
        let storage = section.quantity("storage", Dimension::Storage, Sign::NotNegative);
        let (rate, share) = rate(&mut section);
        let meter = meter(&mut section);
        let past = past(&mut section);
        let name = name.map(|n| n.value).unwrap_or_default();
        wells.push(WellRead {
            well: Well {
                name: name.clone(),
                at: at.as_ref().map_or([0.0; 2], |a| a.value),
                layer: open.first().copied().unwrap_or(0),
                also: open.into_iter().skip(1).collect(),
                radius: radius.map_or(0.1, |r| r.value),
                skin: skin.map_or(0.0, |s| s.value),
                storage: storage.map_or(0.0, |s| s.value),
                trace: trace.map(|t| t.value).unwrap_or_default(),
            },
            settings: WellSettings {
                name,
                rate: ChannelId::from(rate.value.as_str()),
                share,
                holds: Holds::default(),
                meter,
                past,
            },
            path: section.path().to_owned(),
            placed: at.is_some(),
            at: at.map_or_else(|| section.span.clone(), |a| a.span),
            rate,
        });
        section.close();
    }
    wells
}

/// The place halfway along a line.
fn halfway(line: &[Point]) -> Point {
    let pieces = || {
        line.windows(2).filter_map(|w| match w {
            &[a, b] => Some((a, b, (a[0] - b[0]).hypot(a[1] - b[1]))),
            _ => None,
        })
    };
    let mut left = 0.5 * pieces().map(|p| p.2).sum::<f64>();
    for (a, b, length) in pieces() {
        if left <= length && length > 0.0 {
            let share = left / length;
            return [a[0] + share * (b[0] - a[0]), a[1] + share * (b[1] - a[1])];
        }
        left -= length;
    }
    line.first().copied().unwrap_or([0.0; 2])
}

/// Reads `rate`: a channel, or a share of one.
fn rate(section: &mut Section<'_>) -> (At<String>, f64) {
    let mend = "rate = \"…\", the channel of its rate";
    let nothing = At {
        value: String::new(),
        span: section.span.clone(),
    };
    if !section.is_table("rate") {
        let channel = section.must("rate", mend, |s, k| s.text(k));
        return (channel.unwrap_or(nothing), 1.0);
    }
    let Some(mut table) = section.table("rate") else {
        return (nothing, 1.0);
    };
    let channel = table.must("channel", "channel = \"manifold.flow\"", |t, k| t.text(k));
    let share = table.quantity("share", Dimension::Ratio, Sign::Positive);
    if let Some(share) = &share
        && share.value > 1.0
    {
        let what = "a well takes at most the whole of a meter";
        table.wrong("share", share, what, "such as 0.4 or \"40 %\"");
    }
    table.close();
    (channel.unwrap_or(nothing), share.map_or(1.0, |s| s.value))
}

/// Reads `meter`.
fn meter(section: &mut Section<'_>) -> Option<Meter> {
    let mut table = section.table("meter")?;
    let ratio = |t: &mut Section<'_>, key| {
        let ratio = t.must(key, &format!("{key} = \"0.5 %\""), |t, k| {
            t.quantity(k, Dimension::Ratio, Sign::NotNegative)
        })?;
        if ratio.value >= 1.0 {
            let what = "a meter's error is a share of the rate, below one";
            t.wrong(key, &ratio, what, "such as \"0.5 %\"");
        }
        Some(ratio.value)
    };
    let bias = ratio(&mut table, "bias");
    let error = ratio(&mut table, "error");
    let memory = table.must("memory", "memory = \"2 d\"", |t, k| {
        t.duration(
            k,
            Duration::from_secs(60),
            Duration::from_secs(366 * 86_400),
        )
    });
    table.close();
    Some(Meter {
        bias: bias?,
        error: error?,
        memory: memory?.value,
    })
}

/// Reads `past`, in order of time.
fn past(section: &mut Section<'_>) -> Vec<PastRate> {
    let mut rates: Vec<PastRate> = Vec::new();
    for mut table in section.list("past") {
        let from = table.must("from", "from = \"2029-01-01\"", |t, k| t.stamp(k));
        let rate = table.must("rate", "rate = \"900 m3/d\"", |t, k| {
            t.quantity(k, Dimension::Rate, Sign::Any)
        });
        if let (Some(from), Some(last)) = (&from, rates.last())
            && from.value <= last.from
        {
            let what = "it does not follow the one before";
            table.wrong("from", from, what, "list past rates in order of time");
        }
        table.close();
        if let (Some(from), Some(rate)) = (from, rate) {
            rates.push(PastRate {
                from: from.value,
                rate: rate.value,
            });
        }
    }
    rates
}

/// Reads every `[[gauge]]`.
pub(super) fn gauges(
    root: &mut Section<'_>,
    layers: &[LayerRead],
    wells: &[WellRead],
) -> Vec<GaugeRead> {
    let mut names = Vec::new();
    let mend = "a [[gauge]] with name, at or well, and channel";
    let sections = root.must("gauge", mend, |r, k| Some(r.list(k)));
    let mut gauges = Vec::new();
    for mut section in sections.unwrap_or_default() {
        let name = sound_name(&mut section);
        if let Some(name) = name.clone() {
            unique(&section, "gauge", &mut names, name);
        }
        let (seat, place, at) = seat(&mut section, layers, wells);
        let channel = section.must(
            "channel",
            "channel = \"…\", the channel of its pressure",
            |s, k| s.text(k),
        );
        let channel = channel.unwrap_or_else(|| At {
            value: String::new(),
            span: section.span.clone(),
        });
        let noise = section.quantity("noise", Dimension::Pressure, Sign::Positive);
        let drift = section.quantity("drift", Dimension::Drift, Sign::NotNegative);
        let settings = gauge_settings(
            &mut section,
            &name,
            &channel,
            noise.is_some(),
            drift.is_some(),
        );
        gauges.push(GaugeRead {
            gauge: Gauge {
                name: settings.name.clone(),
                seat,
                noise: noise.map_or(USUAL_NOISE, |n| n.value),
                drift: drift.map_or(USUAL_DRIFT, |d| d.value),
            },
            settings,
            path: section.path().to_owned(),
            at,
            place,
            channel,
        });
        section.close();
    }
    gauges
}

/// Reads what a gauge's numbers refer to.
fn gauge_settings(
    section: &mut Section<'_>,
    name: &Option<At<String>>,
    channel: &At<String>,
    noise_stated: bool,
    drift_stated: bool,
) -> GaugeSettings {
    let references = [
        ("absolute", Reference::Absolute),
        ("vented", Reference::Vented),
        ("sealed", Reference::Sealed),
        ("differential", Reference::Differential),
    ];
    let strings = [
        ("downhole", GaugeString::Downhole),
        ("surface", GaugeString::Surface),
        ("piezometer", GaugeString::Piezometer),
    ];
    let reference = section.word("reference", &references);
    let elevation = section.quantity("elevation", Dimension::Length, Sign::Any);
    let string = section.word("string", &strings);
    for key in ["datum", "fluid"] {
        let text = "this build judges changes of pressure at the sensor and does not carry it to another depth";
        section.noted(key, text);
    }
    GaugeSettings {
        name: name.as_ref().map(|n| n.value.clone()).unwrap_or_default(),
        channel: ChannelId::from(channel.value.as_str()),
        reference: reference.unwrap_or_default(),
        elevation: elevation.map(|e| e.value),
        string: string.unwrap_or_default(),
        noise_stated,
        drift_stated,
    }
}

/// Reads `well`, or `at` and `layer`.
fn seat(
    section: &mut Section<'_>,
    layers: &[LayerRead],
    wells: &[WellRead],
) -> (Seat, Option<(Point, usize)>, Range<usize>) {
    let nowhere = Seat::InGround {
        at: [0.0; 2],
        layer: 0,
    };
    let well = section.text("well");
    let at = section.point("at");
    let stated = section.has("layer").then(|| layer(section, layers));
    match (well, at) {
        (Some(well), at) => {
            if at.is_some() {
                section.report.place(
                    &section.key_span("at"),
                    section.key("at"),
                    "a gauge in a well sits where the well is",
                    "keep `well` or `at`, not both",
                );
            }
            let found = wells.iter().position(|w| w.well.name == well.value);
            let Some((index, found)) = found.and_then(|i| Some((i, wells.get(i)?))) else {
                let names: Vec<&str> = wells.iter().map(|w| w.well.name.as_str()).collect();
                section.unknown_name("well", &well, "is no [[well]]", &names);
                return (nowhere, None, well.span);
            };
            if stated.is_some_and(|l| !found.well.meets(l)) {
                section.report.place(
                    &section.key_span("layer"),
                    section.key("layer"),
                    format!("its well \"{}\" is in another layer", well.value),
                    "leave `layer` out: a gauge in a well is in the well's layer",
                );
            }
            let place = found.placed.then_some((found.well.at, found.well.layer));
            (Seat::InWell(index), place, well.span)
        }
        (None, Some(at)) => {
            let layer = stated.unwrap_or_else(|| layer(section, layers));
            let seat = Seat::InGround {
                at: at.value,
                layer,
            };
            (seat, Some((at.value, layer)), at.span)
        }
        (None, None) => {
            if !section.has("well") && !section.has("at") {
                section.report.missing(
                    &section.span,
                    section.whole(),
                    "the gauge sits nowhere",
                    "add `at`, its place, or `well`, the well it hangs in",
                );
            }
            (nowhere, None, section.span.clone())
        }
    }
}
