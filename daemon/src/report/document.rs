//! The evidence for one alarm as one HTML file that needs nothing else, and prints well.

use std::fmt::Write as _;

use crate::alarm::{NOTICE, duration, minute, plain, size};
use crate::record::{Alarm, AlarmState, Names, Priority, Stamp, Transition};

/// How a channel stood over the time of the report.
#[derive(Debug, Clone, PartialEq)]
pub struct ChannelQuality {
    /// The channel.
    pub name: String,
    /// What it feeds: a gauge or a well.
    pub feeds: String,
    /// Readings.
    pub readings: u64,
    /// Of them, those of no use.
    pub unusable: u64,
    /// Longest time between two readings \[s\].
    pub longest_gap: f64,
    /// The last reading.
    pub last: Option<Stamp>,
}

/// All that a report tells.
#[derive(Debug, Clone)]
pub struct AlarmReport {
    /// The site's name for people.
    pub site: String,
    /// Names of what findings know by number, and how numbers are shown.
    pub names: Names,
    /// The alarm at its latest step with a finding.
    pub alarm: Alarm,
    /// When the report was made.
    pub made: Stamp,
    /// Time shown in the plots.
    pub window: (Stamp, Stamp),
    /// Plan of the site, as SVG.
    pub plan: String,
    /// Gauges with their plots, as SVG.
    pub plots: Vec<(String, String)>,
    /// Steps of this occurrence, oldest first.
    pub history: Vec<Transition>,
    /// Channels over the window.
    pub channels: Vec<ChannelQuality>,
    /// Calibration and certificate as text, or why there is none.
    pub model: Result<String, String>,
    /// Whether the site is an embankment, not a field of wells.
    pub embankment: bool,
}

/// Text in which nothing is markup.
#[must_use]
pub fn escaped(text: &str) -> String {
    let mut safe = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => safe += "&amp;",
            '<' => safe += "&lt;",
            '>' => safe += "&gt;",
            '"' => safe += "&quot;",
            '\'' => safe += "&#39;",
            c => safe.push(c),
        }
    }
    safe
}

/// A distance with the side it lies on.
fn towards(metres: f64, [positive, negative]: [&str; 2]) -> String {
    let side = if metres < 0.0 { negative } else { positive };
    format!("{:.0} m {side}", metres.abs())
}

/// How a document looks: on a screen of any width, and printed.
pub(super) const STYLE: &str = "\
body{font:16px/1.5 'Noto Sans','DejaVu Sans',sans-serif;color:#22302f;background:#fff;max-width:52rem;margin:1.5rem auto;padding:0 1rem}\
h1{font-size:1.5rem;line-height:1.25;margin:.2rem 0}h2{font-size:1.1rem;border-top:2px solid #22302f;padding-top:.4rem;margin-top:1.6rem}\
table{border-collapse:collapse;width:100%}th,td{text-align:left;vertical-align:top;padding:.2rem .8rem .2rem 0;border-bottom:1px solid #d2ccbe}\
th{color:#5a6663;font-size:.9rem}td.n,th.n{text-align:right;font-variant-numeric:tabular-nums}.soft{color:#5a6663}\
.notice{border:1px solid #22302f;padding:.6rem .9rem}svg{max-width:100%;height:auto}pre{overflow-x:auto;font-size:.85rem}\
figure{margin:1rem 0;break-inside:avoid}@media print{body{margin:0;max-width:none;font-size:11pt}h2{break-after:avoid}tr{break-inside:avoid}}";

/// Writes the report.
#[must_use]
pub fn html(report: &AlarmReport) -> String {
    let alarm = &report.alarm;
    let title = format!(
        "{}: {} occurrence {}",
        report.site, alarm.id, alarm.occurrence
    );
    let mut out = format!(
        "<!doctype html>\n<html lang=\"en\">\n<head>\n<meta charset=\"utf-8\">\n\
         <meta name=\"viewport\" content=\"width=device-width, initial-scale=1\">\n\
         <meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\">\n\
         <title>{}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n",
        escaped(&title)
    );
    let _ = write!(
        out,
        "<p class=\"soft\">{}</p>\n<h1>{}</h1>\n<p>{} priority; {}; began {}. Written {}, by borewake {}.</p>\n",
        escaped(&title),
        escaped(&alarm.summary),
        priority(alarm.priority),
        state(alarm.state()),
        minute(alarm.since),
        minute(report.made),
        env!("CARGO_PKG_VERSION")
    );
    if !alarm.response.is_empty() {
        let _ = writeln!(
            out,
            "<p><strong>To do:</strong> {}</p>",
            escaped(&alarm.response)
        );
    }
    let _ = writeln!(out, "<p class=\"notice\">{}</p>", escaped(NOTICE));
    evidence(&mut out, report);
    if !report.plan.is_empty() {
        let _ = writeln!(out, "<h2>Plan</h2>\n<figure>{}</figure>", report.plan);
    }
    let (from, to) = report.window;
    let _ = writeln!(
        out,
        "<h2>Gauges</h2>\n<p class=\"soft\">{} to {}</p>",
        minute(from),
        minute(to)
    );
    for (_, plot) in &report.plots {
        let _ = writeln!(out, "<figure>{plot}</figure>");
    }
    quality(&mut out, &report.channels);
    out += "<h2>Model and calibration</h2>\n";
    let _ = match &report.model {
        Ok(text) => writeln!(out, "<pre>{}</pre>", escaped(text)),
        Err(why) => writeln!(out, "<p>{}</p>", escaped(why)),
    };
    history(&mut out, report);
    out += if report.embankment {
        CAUTIONS_EMBANKMENT
    } else {
        CAUTIONS
    };
    out + "</body>\n</html>\n"
}

/// What a reader must keep in mind about any finding.
const CAUTIONS: &str = "<h2>Cautions</h2>\n<ul>\n\
<li>A probability holds among the causes on the list, on the ground as described; a cause that is not on it cannot be named.</li>\n\
<li>From one gauge alone a slow leak and a drifting gauge cannot be told apart.</li>\n\
<li>Sizes and places lean on the calibration above: outside the rates and times it was made from they say less.</li>\n\
<li>A leak that was already flowing during commissioning is part of the calibration and cannot be seen.</li>\n\
<li>Check by independent means before acting on this page; act at once where danger is plain.</li>\n</ul>\n";

/// The same for an embankment.
const CAUTIONS_EMBANKMENT: &str = "<h2>Cautions</h2>\n<ul>\n\
<li>The emergency action plan comes first: where seepage is cloudy or grows, or the slope, the crest or the toe moves, act on it at once and do not wait for this page.</li>\n\
<li>No place is claimed: each piezometer is known by its own answer to pool, season, rain and age, and water finds ways between them.</li>\n\
<li>What piezometers cannot feel is not seen here: walk the embankment, and look at weirs and drains.</li>\n\
<li>Beyond the pool levels of commissioning the bands are wide or there are none: a first filling needs people on the spot.</li>\n\
<li>What was already wrong during commissioning is part of the calibration and cannot be seen.</li>\n\
<li>Check by independent means before acting on this page; act at once where danger is plain.</li>\n</ul>\n";

fn evidence(out: &mut String, report: &AlarmReport) {
    let Some(finding) = &report.alarm.finding else {
        return;
    };
    let names = &report.names;
    out.push_str("<h2>Evidence</h2>\n<table>\n<tr><th>cause</th><th>of</th><th class=\"n\">probability</th></tr>\n");
    for weighed in finding.causes.iter().filter(|w| w.probability >= 5e-4) {
        let of = weighed.subject.and_then(|s| names.subject(s));
        let _ = writeln!(
            out,
            "<tr><td>{}</td><td>{}</td><td class=\"n\">{:.1} %</td></tr>",
            plain(weighed.cause),
            escaped(&of.unwrap_or_default()),
            100.0 * weighed.probability
        );
    }
    out.push_str("</table>\n<table>\n");
    let mut row = |name: &str, value: String| {
        let _ = writeln!(out, "<tr><th>{name}</th><td>{}</td></tr>", escaped(&value));
    };
    let named = if finding.named {
        "yes: it leads by the margin asked for and explains what was seen"
    } else {
        "no: the lead is too small, or something is left unexplained"
    };
    row("Named", named.to_owned());
    let onset = Stamp::from_seconds(finding.onset);
    row(
        "Onset",
        format!("{} ± {}", minute(onset), duration(finding.onset_sd)),
    );
    if let (Some(of), Some(lead)) = (&finding.size, finding.causes.first()) {
        row("Size", size(of, lead.cause, names.units));
    }
    if let Some(place) = finding.place {
        row(
            "Place",
            format!(
                "{}, {} of the origin, in {}; within {:.0} m with 90 %",
                towards(place.x, ["east", "west"]),
                towards(place.y, ["north", "south"]),
                names.layer(place.layer),
                place.radius_90
            ),
        );
    }
    row(
        "Against nothing",
        format!(
            "e^{:.1} to 1; an alarm is due at e^{:.1}",
            finding.log_mixture, finding.log_threshold
        ),
    );
    for (gauge, departure, sd) in &finding.gauges {
        row(
            &format!("Departure of {}", escaped(&names.gauge(*gauge))),
            format!("{:+.2} ± {:.2} kPa", departure / 1e3, sd / 1e3),
        );
    }
    out.push_str("</table>\n");
}

/// Table of how channels stood.
pub(super) fn quality(out: &mut String, channels: &[ChannelQuality]) {
    out.push_str(
        "<h2>Data quality</h2>\n<table>\n<tr><th>channel</th><th>feeds</th><th class=\"n\">readings</th>\
         <th class=\"n\">of no use</th><th class=\"n\">longest gap</th><th>last</th></tr>\n",
    );
    for channel in channels {
        let _ = writeln!(
            out,
            "<tr><td>{}</td><td>{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td><td>{}</td></tr>",
            escaped(&channel.name),
            escaped(&channel.feeds),
            channel.readings,
            channel.unusable,
            duration(channel.longest_gap),
            channel.last.map_or_else(|| "none".to_owned(), minute)
        );
    }
    out.push_str("</table>\n");
}

fn history(out: &mut String, report: &AlarmReport) {
    out.push_str(
        "<h2>What happened</h2>\n<table>\n<tr><th>when</th><th>what</th><th>who</th><th>state after</th><th>why, or what was said</th></tr>\n",
    );
    for step in &report.history {
        let kind = serde_json::to_value(step.kind).unwrap_or_default();
        let said = if step.note.is_empty() {
            &step.alarm.summary
        } else {
            &step.note
        };
        let _ = writeln!(
            out,
            "<tr><td>{}</td><td>{}</td><td>{}</td><td>{}</td><td>{}</td></tr>",
            minute(step.at),
            escaped(kind.as_str().unwrap_or_default()),
            escaped(step.by.as_deref().unwrap_or_default()),
            state(step.alarm.state()),
            escaped(said)
        );
    }
    out.push_str("</table>\n");
}

fn priority(of: Priority) -> &'static str {
    match of {
        Priority::Low => "Low",
        Priority::Medium => "Medium",
        Priority::High => "High",
    }
}

fn state(of: AlarmState) -> String {
    of.name().replace('-', " ")
}
