//! `/metrics` in OpenMetrics text: the health of the daemon, not its data.

use std::collections::BTreeMap;
use std::fmt::Write as _;
use std::sync::Arc;

use axum::extract::State;
use axum::http::header;
use axum::response::{IntoResponse, Response};

use super::asking::Asking;
use crate::record::{AlarmState, Snapshot, SourceView};

const KIND: &str = "application/openmetrics-text; version=1.0.0; charset=utf-8";

/// Every state there is, so that a state nobody is in shows as zero.
const STATES: [AlarmState; 9] = [
    AlarmState::Normal,
    AlarmState::Unacknowledged,
    AlarmState::Acknowledged,
    AlarmState::ReturnedUnacknowledged,
    AlarmState::LatchedUnacknowledged,
    AlarmState::LatchedAcknowledged,
    AlarmState::Shelved,
    AlarmState::Suppressed,
    AlarmState::OutOfService,
];

/// `/metrics`.
pub(super) async fn metrics(State(asking): State<Arc<Asking>>) -> Response {
    let snapshot = asking.look().await;
    let stored = asking.reader.bytes_used().await.unwrap_or(0);
    let ratios = {
        let columns = asking.history.columns();
        let newest = columns.end().saturating_sub(1);
        let gauges = asking.names.gauges.iter().enumerate();
        gauges
            .map(|(i, name)| {
                let blind = columns.blind.get(i).copied().flatten().is_some();
                (name.clone(), columns.cell(newest, i).ratio(), blind)
            })
            .collect::<Vec<_>>()
    };
    let text = text(&snapshot, &ratios, stored, asking.told.receiver_count());
    ([(header::CONTENT_TYPE, KIND)], text).into_response()
}

/// The whole text: gauges by name with the newest departure in its own standard deviations, and whether they are blind.
pub(super) fn text(
    snapshot: &Snapshot,
    gauges: &[(String, f64, bool)],
    stored: u64,
    listeners: usize,
) -> String {
    let mut out = Text::default();
    let health = &snapshot.health;
    out.family("borewake_build", "info", None, "The program.");
    out.row(
        "borewake_build_info",
        &[
            ("version", env!("CARGO_PKG_VERSION")),
            ("site", &snapshot.site),
        ],
        1.0,
    );
    for (name, help, value) in [
        (
            "readings_committed",
            "Readings committed since start.",
            health.committed,
        ),
        (
            "readings_duplicate",
            "Exact duplicates dropped since start.",
            health.duplicates,
        ),
        (
            "readings_late",
            "Readings older than the newest of their channel since start.",
            health.late,
        ),
        (
            "readings_conflict",
            "Readings that contradict a stored one since start.",
            health.conflicts,
        ),
    ] {
        let name = format!("borewake_{name}");
        out.family(&name, "counter", None, help);
        out.row(&format!("{name}_total"), &[], number(value));
    }
    out.gauge(
        "borewake_outbox_messages",
        "Messages that no broker has confirmed yet.",
        number(health.outbox),
    );
    out.gauge(
        "borewake_event_listeners",
        "Clients that listen for events.",
        number(listeners as u64),
    );
    let position = u64::try_from(snapshot.position).unwrap_or(0);
    out.gauge(
        "borewake_journal_position",
        "Last entry of the journal processed.",
        number(position),
    );
    out.gauge(
        "borewake_watch_blind",
        "1 while the watch judges nothing at all.",
        flag(health.watch.is_some()),
    );
    out.family(
        "borewake_state_taken_timestamp_seconds",
        "gauge",
        Some("seconds"),
        "When the state shown here was taken.",
    );
    out.row(
        "borewake_state_taken_timestamp_seconds",
        &[],
        snapshot.taken.seconds(),
    );
    out.family(
        "borewake_store_bytes",
        "gauge",
        Some("bytes"),
        "Bytes of the database in use.",
    );
    out.row("borewake_store_bytes", &[], number(stored));

    let mut states: BTreeMap<&str, u64> = BTreeMap::new();
    for view in &snapshot.alarms {
        *states.entry(view.state.name()).or_default() += 1;
    }
    out.family(
        "borewake_alarms",
        "gauge",
        None,
        "Alarms by state; normal ones only while they lately stood.",
    );
    for state in STATES {
        let count = states.get(state.name()).copied().unwrap_or(0);
        out.row("borewake_alarms", &[("state", state.name())], number(count));
    }
    out.family(
        "borewake_gauge_blind",
        "gauge",
        None,
        "1 while a gauge cannot be judged.",
    );
    for (name, _, blind) in gauges {
        out.row("borewake_gauge_blind", &[("gauge", name)], flag(*blind));
    }
    out.family(
        "borewake_gauge_departure_deviations",
        "gauge",
        None,
        "Reading less expectation in its own standard deviations, newest block.",
    );
    for (name, ratio, _) in gauges.iter().filter(|(_, ratio, _)| ratio.is_finite()) {
        out.row(
            "borewake_gauge_departure_deviations",
            &[("gauge", name)],
            *ratio,
        );
    }
    out.family(
        "borewake_channel_sampled_timestamp_seconds",
        "gauge",
        Some("seconds"),
        "Sample instant of the newest reading.",
    );
    for (name, view) in &snapshot.channels {
        if let Some(sampled) = view.sampled {
            out.row(
                "borewake_channel_sampled_timestamp_seconds",
                &[("channel", name)],
                sampled.seconds(),
            );
        }
    }
    sources(&mut out, &snapshot.sources);
    out.0.push_str("# EOF\n");
    out.0
}

fn sources(out: &mut Text, sources: &BTreeMap<String, SourceView>) {
    let mut counter = |name: &str, help: &str, value: &dyn Fn(&SourceView) -> u64| {
        let name = format!("borewake_source_{name}");
        out.family(&name, "counter", None, help);
        for (source, view) in sources {
            out.row(
                &format!("{name}_total"),
                &[("source", source)],
                number(value(view)),
            );
        }
    };
    counter("deliveries", "Deliveries since start.", &|s| s.deliveries);
    counter("reconnects", "Reconnections since start.", &|s| {
        s.reconnects
    });
    counter(
        "gaps",
        "Polls missed because the store could not follow, since start.",
        &|s| s.gaps,
    );
    out.family(
        "borewake_source_rejected",
        "counter",
        None,
        "Deliveries refused since start, by reason.",
    );
    for (source, view) in sources {
        for (reason, count) in &view.rejected {
            out.row(
                "borewake_source_rejected_total",
                &[("source", source), ("reason", reason)],
                number(*count),
            );
        }
    }
}

#[derive(Default)]
struct Text(String);

impl Text {
    fn family(&mut self, name: &str, kind: &str, unit: Option<&str>, help: &str) {
        let _ = writeln!(self.0, "# TYPE {name} {kind}");
        if let Some(unit) = unit {
            let _ = writeln!(self.0, "# UNIT {name} {unit}");
        }
        let _ = writeln!(self.0, "# HELP {name} {help}");
    }

    fn gauge(&mut self, name: &str, help: &str, value: f64) {
        self.family(name, "gauge", None, help);
        self.row(name, &[], value);
    }

    fn row(&mut self, name: &str, labels: &[(&str, &str)], value: f64) {
        self.0.push_str(name);
        for (i, (label, text)) in labels.iter().enumerate() {
            let text = text
                .replace('\\', "\\\\")
                .replace('"', "\\\"")
                .replace('\n', "\\n");
            let open = if i == 0 { '{' } else { ',' };
            let _ = write!(self.0, "{open}{label}=\"{text}\"");
        }
        if !labels.is_empty() {
            self.0.push('}');
        }
        let _ = writeln!(self.0, " {value}");
    }
}

fn flag(on: bool) -> f64 {
    if on { 1.0 } else { 0.0 }
}

#[expect(
    clippy::cast_precision_loss,
    reason = "OpenMetrics numbers are doubles; counts stay exact up to 2^53"
)]
fn number(count: u64) -> f64 {
    count as f64
}

#[cfg(test)]
mod tests {
    use super::text;
    use crate::record::{Snapshot, SourceView};

    #[test]
    fn labels_are_escaped_and_the_text_ends() {
        let mut snapshot = Snapshot {
            site: "s\"x\\y\nz".into(),
            ..Snapshot::default()
        };
        let mut view = SourceView::default();
        view.rejected.insert("checksum".into(), 3);
        snapshot.sources.insert("skid".into(), view);
        let told = text(
            &snapshot,
            &[("O 2".into(), -1.5, false), ("W".into(), f64::NAN, true)],
            4096,
            2,
        );
        assert!(told.contains(r#"site="s\"x\\y\nz"} 1"#), "{told}");
        assert!(
            told.contains(
                "borewake_source_rejected_total{source=\"skid\",reason=\"checksum\"} 3\n"
            )
        );
        assert!(told.contains("borewake_gauge_departure_deviations{gauge=\"O 2\"} -1.5\n"));
        assert!(!told.contains("NaN") && told.ends_with("# EOF\n"));
        // A family is told once, and its rows stand together.
        let mut seen = std::collections::BTreeSet::new();
        for line in told.lines().filter(|l| l.starts_with("# TYPE")) {
            assert!(seen.insert(line), "{line}");
        }
    }
}
