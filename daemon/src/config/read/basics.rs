//! `[site]`, `[store]`, `[watch]` and `[http]`.

use std::net::SocketAddr;
use std::path::Path;
use std::time::Duration;

use borewake_model::units::{DAY, Dimension, UnitSystem, YEAR};

use super::super::section::{At, Section};
use super::super::values::Sign;
use super::super::{AlarmCare, HttpSettings, StoreSettings, WatchConfig};

const MINUTE: Duration = Duration::from_secs(60);
const HOUR: Duration = Duration::from_secs(3600);
const ONE_DAY: Duration = Duration::from_secs(86_400);
/// Longest id of a site; it stands in topics and file names.
const LONGEST_ID: usize = 64;

/// What `[site]` says.
pub(super) struct Basics {
    pub(super) id: String,
    pub(super) name: String,
    pub(super) units: UnitSystem,
    pub(super) origin: Option<(f64, f64)>,
}

/// Reads `[site]`.
pub(super) fn site(root: &mut Section<'_>) -> Basics {
    let table = root.must("site", "the heading [site] with an id", |r, k| r.table(k));
    let Some(mut table) = table else {
        return Basics {
            id: String::new(),
            name: String::new(),
            units: UnitSystem::default(),
            origin: None,
        };
    };
    let id = table.must("id", "id = \"my-site\"", |t, k| t.text(k));
    let id = id.map(|id| slug(&table, id)).unwrap_or_default();
    let name = table.text("name").map(|n| n.value);
    let systems = [UnitSystem::Metric, UnitSystem::Field, UnitSystem::Head];
    let units = table.word("units", &systems.map(|s| (s.name(), s)));
    let origin = table.table("origin").and_then(|mut origin| {
        let latitude = origin.must("latitude", "latitude = 51.2", |o, k| degrees(o, k, 90.0));
        let longitude = origin.must("longitude", "longitude = 4.4", |o, k| degrees(o, k, 180.0));
        origin.close();
        Some((latitude?, longitude?))
    });
    table.close();
    Basics {
        name: name.unwrap_or_else(|| id.clone()),
        id,
        units: units.unwrap_or_default(),
        origin,
    }
}

/// The site's id, which must do as a file name and as a level of a topic.
fn slug(table: &Section<'_>, id: At<String>) -> String {
    let plain = |c: char| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '-';
    let sound = id.value.chars().all(plain)
        && id.value.starts_with(|c: char| c.is_ascii_alphanumeric())
        && id.value.len() <= LONGEST_ID;
    if !sound {
        let what = format!(
            "an id stands in topics and file names: lower-case letters, digits and hyphens, at most {LONGEST_ID}"
        );
        table.wrong(
            "id",
            &id,
            what,
            "such as \"sorrel-flat\"; `name` is for people",
        );
    }
    id.value
}

/// An angle within `most` either way.
fn degrees(table: &mut Section<'_>, key: &'static str, most: f64) -> Option<f64> {
    let angle = table.number(key)?;
    if angle.value.abs() > most {
        let what = format!("it must lie between -{most} and {most}");
        table.wrong(key, &angle, what, "write degrees, north and east positive");
        return None;
    }
    Some(angle.value)
}

/// Reads `[store]`; without it the store is a folder of the site's name.
pub(super) fn store(root: &mut Section<'_>, base: &Path, id: &str) -> StoreSettings {
    let mut settings = StoreSettings {
        folder: base.join(if id.is_empty() { "site" } else { id }),
        keep_raw: None,
        max_size: None,
    };
    let Some(mut table) = root.table("store") else {
        return settings;
    };
    if let Some(folder) = table.text("folder") {
        settings.folder = base.join(folder.value);
    }
    let forever = Duration::from_secs(1_000_000 * 86_400);
    settings.keep_raw = table
        .duration("keep_raw", ONE_DAY, forever)
        .map(|d| d.value);
    settings.max_size = table
        .quantity("max_size", Dimension::Size, Sign::Positive)
        .and_then(|size| bytes(&table, &size));
    table.close();
    settings
}

/// A size in whole bytes, of 10 MB at least: below that no store can work.
fn bytes(table: &Section<'_>, size: &At<f64>) -> Option<u64> {
    let bounded = (1e7..1e18).contains(&size.value);
    if !bounded {
        table.wrong(
            "max_size",
            size,
            "it must be at least 10 MB",
            "such as \"20 GB\"",
        );
        return None;
    }
    // From text, so that no cast can cut: a whole number below 1e18 prints without exponent.
    format!("{:.0}", size.value).parse().ok()
}

/// Reads `[watch]`. An embankment is slower than a field of wells, and its pool is often read once a day.
pub(super) fn watch(root: &mut Section<'_>, embankment: bool) -> WatchConfig {
    let (hold_rate, block) = if embankment {
        (2 * ONE_DAY, 6 * HOUR)
    } else {
        (HOUR, HOUR)
    };
    let mut settings = WatchConfig {
        false_alarm_interval: 5.0 * YEAR,
        lateness: 2 * MINUTE,
        hold_rate,
        block,
    };
    let Some(mut table) = root.table("watch") else {
        return settings;
    };
    if let Some(text) = table.text("false_alarms") {
        settings.false_alarm_interval = false_alarms(&table, &text);
    }
    if let Some(lateness) = table.duration("lateness", Duration::ZERO, 7 * ONE_DAY) {
        settings.lateness = lateness.value;
    }
    if let Some(hold) = table.duration("hold_rate", MINUTE, 30 * ONE_DAY) {
        settings.hold_rate = hold.value;
    }
    if let Some(block) = table.duration("block", MINUTE, ONE_DAY) {
        let seconds = block.value.as_secs();
        if block.value.subsec_nanos() == 0 && ONE_DAY.as_secs().is_multiple_of(seconds) {
            settings.block = block.value;
        } else {
            let what = "blocks must divide a day into equal parts";
            table.wrong(
                "block",
                &block,
                what,
                "such as \"10 min\", \"30 min\" or \"1 h\"",
            );
        }
    }
    table.close();
    settings
}

/// Reads `"1 per 5 years"` as the mean time between false alarms \[s\].
fn false_alarms(table: &Section<'_>, text: &At<String>) -> f64 {
    match interval(&text.value) {
        Some(interval) if (DAY..=1000.0 * YEAR).contains(&interval) => interval,
        Some(_) => {
            let what = "it must lie between one a day and one in 1000 years";
            table.wrong("false_alarms", text, what, "such as \"1 per 5 years\"");
            YEAR
        }
        None => {
            let what = "a number of false alarms per time is due";
            table.wrong(
                "false_alarms",
                text,
                what,
                "write \"1 per 5 years\" or \"2 per yr\"",
            );
            YEAR
        }
    }
}

/// Time over number.
fn interval(text: &str) -> Option<f64> {
    let (count, time) = text.split_once(" per ")?;
    let count: f64 = count.trim().parse().ok().filter(|n| *n > 0.0)?;
    let time = time.trim();
    let seconds = Dimension::Time
        .parse(time)
        .or_else(|_| Dimension::Time.parse(&format!("1 {time}")))
        .ok()?;
    Some(seconds / count).filter(|i| i.is_finite())
}

/// Reads `[alarms]`: what the wall clock brings about.
pub(super) fn alarms(root: &mut Section<'_>) -> AlarmCare {
    let mut care = AlarmCare::default();
    let Some(mut table) = root.table("alarms") else {
        return care;
    };
    let longest = 366 * ONE_DAY;
    if let Some(span) = table.duration("shelve_at_most", MINUTE, longest) {
        care.shelve_at_most = span.value;
    }
    care.realarm = table
        .duration("realarm", MINUTE, longest)
        .map(|span| span.value);
    care.escalate = table
        .duration("escalate", MINUTE, longest)
        .map(|span| span.value);
    table.close();
    care
}

/// Reads `[http]`; without it the page is served where it is by default.
pub(super) fn http(root: &mut Section<'_>) -> HttpSettings {
    let mut settings = HttpSettings::default();
    let Some(mut table) = root.table("http") else {
        return settings;
    };
    if let Some(listen) = table.text("listen") {
        match listen.value.parse::<SocketAddr>() {
            Ok(address) => settings.listen = Some(address),
            Err(_) if listen.value == "off" => settings.listen = None,
            Err(_) => table.wrong(
                "listen",
                &listen,
                "an address with a port is due, or \"off\"",
                "such as \"127.0.0.1:8070\"",
            ),
        }
    }
    if let Some(hosts) = table.texts("hosts") {
        for host in hosts {
            let plain = |c: char| c.is_ascii_alphanumeric() || matches!(c, '.' | '-');
            if host.value.chars().all(plain) {
                settings.hosts.push(host.value.to_ascii_lowercase());
            } else {
                let what = "a host name is due, without scheme and port";
                table.wrong("hosts", &host, what, "such as \"watch.example\"");
            }
        }
    }
    table.close();
    settings
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn false_alarm_rates_are_read() {
        assert_eq!(interval("1 per 5 years"), Some(5.0 * YEAR));
        assert_eq!(interval("1 per year"), Some(YEAR));
        assert_eq!(interval("2 per 10 yr"), Some(5.0 * YEAR));
        assert_eq!(interval("1 per 180 d"), Some(180.0 * DAY));
        for text in [
            "1",
            "per year",
            "1 per",
            "0 per year",
            "-1 per year",
            "1 per kPa",
            "NaN per year",
        ] {
            assert_eq!(interval(text), None, "{text}");
        }
    }
}
