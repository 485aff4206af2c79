//! What was found beside the truth.

use borewake_model::finding::Subject;
use serde_json::json;

use super::truth::{Planted, Truth};
use crate::cli::table::{Align, Table};
use crate::config::Site;
use crate::record::{AlarmKind, Finding, Stamp, Transition, TransitionKind};

/// Farthest a leak's place may be off \[m\].
const PLACE: f64 = 250.0;
/// Largest share a size may be off.
const SIZE: f64 = 0.2;
/// Farthest an onset may be off \[s\].
const ONSET: f64 = 86_400.0;

/// One alarm of the watch, as it stood when it was last published.
#[derive(Debug, Clone)]
pub(super) struct Found {
    /// Occurrence of the alarm.
    pub(super) occurrence: u32,
    /// When it was raised.
    pub(super) raised: Stamp,
    /// Its last finding.
    pub(super) finding: Finding,
    /// When it was adopted, if it was.
    pub(super) adopted: Option<Stamp>,
}

/// The alarms of the watch in order, and the truth.
#[derive(Debug)]
pub(super) struct Score {
    truth: Truth,
    found: Vec<Found>,
}

/// How one planted event was found.
struct Match<'a> {
    planted: &'a Planted,
    found: Option<&'a Found>,
}

impl Score {
    pub(super) fn new(truth: Truth) -> Self {
        Self {
            truth,
            found: Vec::new(),
        }
    }

    /// Takes in a transition.
    pub(super) fn take(&mut self, transition: &Transition) {
        let alarm = &transition.alarm;
        let (AlarmKind::Watch, Some(finding)) = (alarm.kind, &alarm.finding) else {
            return;
        };
        let adopted = (transition.kind == TransitionKind::Adopted).then_some(transition.at);
        match self
            .found
            .iter_mut()
            .find(|f| f.occurrence == alarm.occurrence)
        {
            Some(found) => {
                found.finding = finding.clone();
                found.adopted = found.adopted.or(adopted);
            }
            None => self.found.push(Found {
                occurrence: alarm.occurrence,
                raised: transition.at,
                finding: finding.clone(),
                adopted,
            }),
        }
    }

    /// All alarms of the watch.
    pub(super) fn found(&self) -> &[Found] {
        &self.found
    }

    /// When alarms were raised and adopted, for pictures.
    pub(super) fn marks(&self) -> Vec<(Stamp, String)> {
        let mut marks = Vec::new();
        for found in &self.found {
            let cause = found
                .finding
                .causes
                .first()
                .map_or("alarm", |c| c.cause.name());
            marks.push((found.raised, cause.to_owned()));
            marks.extend(found.adopted.map(|at| (at, "adopted".to_owned())));
        }
        marks
    }

    /// Each planted event with the first alarm raised between its onset and the next event's.
    fn matches(&self) -> Vec<Match<'_>> {
        let ends = self
            .truth
            .events
            .iter()
            .skip(1)
            .map(|e| e.onset)
            .chain([Stamp(i64::MAX)]);
        self.truth
            .events
            .iter()
            .zip(ends)
            .map(|(planted, end)| {
                let found = self
                    .found
                    .iter()
                    .find(|f| f.raised >= planted.onset && f.raised < end);
                Match { planted, found }
            })
            .collect()
    }

    /// Whether everything planted was found as asked, and nothing else was.
    pub(super) fn holds(&self) -> bool {
        let matches = self.matches();
        self.found.len() == matches.len() && matches.iter().all(Match::holds)
    }

    /// The table for people.
    pub(super) fn table(&self, site: &Site) -> String {
        let mut table = Table::new(&[
            ("planted", Align::Left),
            ("found", Align::Left),
            ("after", Align::Right),
            ("onset off", Align::Right),
            ("size planted", Align::Right),
            ("size found", Align::Right),
            ("place off", Align::Right),
            ("", Align::Left),
        ]);
        let dash = || "-".to_owned();
        for m in self.matches() {
            let planted = m.planted.gauge.as_ref().map_or_else(
                || m.planted.cause.name().to_owned(),
                |gauge| format!("{} at {gauge}", m.planted.cause.name()),
            );
            let Some(found) = m.found else {
                table.row([
                    planted,
                    "nothing".into(),
                    dash(),
                    dash(),
                    dash(),
                    dash(),
                    dash(),
                    "MISSED".into(),
                ]);
                continue;
            };
            let after = (found.raised.seconds() - m.planted.onset.seconds()) / 86_400.0;
            table.row([
                planted,
                m.found_text(site),
                format!("{after:.1} d"),
                format!("{:+.1} h", m.onset_off().unwrap_or(f64::NAN) / 3600.0),
                size_text(m.planted.size.value, found),
                found
                    .finding
                    .size
                    .map_or_else(dash, |s| size_text(s.value, found)),
                m.place_off().map_or_else(dash, |off| format!("{off:.0} m")),
                if m.holds() { "as asked" } else { "OFF" }.into(),
            ]);
        }
        let other = self
            .found
            .len()
            .saturating_sub(self.matches().iter().filter(|m| m.found.is_some()).count());
        format!(
            "Found beside the truth\n{}other alarms of the watch: {other}\n",
            table.text(2)
        )
    }

    /// The same as one JSON document.
    pub(super) fn json(&self) -> serde_json::Value {
        let rows: Vec<_> = self
            .matches()
            .iter()
            .map(|m| {
                json!({
                    "planted": m.planted.cause.name(),
                    "found": m.found.and_then(|f| f.finding.causes.first()).map(|c| c.cause.name()),
                    "named": m.found.map(|f| f.finding.named),
                    "onset_off_s": m.onset_off(),
                    "place_off_m": m.place_off(),
                    "size_off": m.size_off(),
                    "holds": m.holds(),
                })
            })
            .collect();
        json!({ "holds": self.holds(), "events": rows, "alarms": self.found.len() })
    }
}

impl Match<'_> {
    fn holds(&self) -> bool {
        let Some(found) = self.found else {
            return false;
        };
        let cause = found
            .finding
            .causes
            .first()
            .is_some_and(|c| c.cause == self.planted.cause);
        let within = |off: Option<f64>, most: f64| off.is_some_and(|off| off.abs() <= most);
        let leak = self.planted.cause == crate::record::Cause::Leak;
        cause
            && found.finding.named
            && within(self.onset_off(), ONSET)
            && (!leak || within(self.place_off(), PLACE))
            && (!leak || within(self.size_off(), SIZE))
    }

    fn onset_off(&self) -> Option<f64> {
        Some(self.found?.finding.onset - self.planted.onset.seconds())
    }

    fn place_off(&self) -> Option<f64> {
        let (found, planted) = (self.found?.finding.place?, self.planted.place?);
        Some((found.x - planted.x).hypot(found.y - planted.y))
    }

    fn size_off(&self) -> Option<f64> {
        Some(self.found?.finding.size?.value.abs() / self.planted.size.value.abs() - 1.0)
    }

    fn found_text(&self, site: &Site) -> String {
        let Some(found) = self.found else {
            return "nothing".into();
        };
        let Some(leading) = found.finding.causes.first() else {
            return "nothing".into();
        };
        let whose = match leading.subject {
            Some(Subject::Gauge(i)) => site.gauges.get(i).map(|g| format!(" at {}", g.name)),
            Some(Subject::Well(i)) => site.wells.get(i).map(|w| format!(" at {}", w.name)),
            Some(Subject::Neighbour(i)) => site
                .ground
                .neighbours
                .get(i)
                .map(|n| format!(" at {}", n.name)),
            Some(Subject::Place) | None => None,
        };
        let named = if found.finding.named {
            ""
        } else {
            " (not named)"
        };
        format!(
            "{}{}{named}, {:.0} %",
            leading.cause.name(),
            whose.unwrap_or_default(),
            leading.probability * 100.0
        )
    }
}

/// A size in a unit people read, by the kind of what was found.
fn size_text(value: f64, found: &Found) -> String {
    use borewake_model::finding::SizeUnit;
    match found.finding.size.map(|s| s.unit) {
        Some(SizeUnit::CubicMetrePerSecond) => format!("{:.1} m3/d", value.abs() * 86_400.0),
        Some(SizeUnit::Pascal) => format!("{:.2} kPa", value / 1e3),
        Some(SizeUnit::PascalPerSecond) => format!("{:.2} kPa/d", value * 86.4),
        Some(SizeUnit::Ratio) => format!("{:.1} %", value * 100.0),
        None => "-".into(),
    }
}
