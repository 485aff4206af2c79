//! A small invented site for tests, to which each test adds its own sources and outputs.

use std::fs;
use std::path::{Path, PathBuf};

use tempfile::TempDir;

/// Ground, one well and one gauge of a dewatered pit, without sources. Channels: `w1.flow`, `p1.pressure`.
pub const PIT: &str = r#"[site]
id = "pit"
name = "Pit"
[store]
folder = "pit"
[[layer]]
name = "gravel"
transmissivity = "35 m2/d"
storativity = 2e-4
[edge]
kind = "open"
distance = "2 km"
[[well]]
name = "W-1"
at = ["0 m", "0 m"]
layer = "gravel"
radius = "0.2 m"
rate = "w1.flow"
[[gauge]]
name = "P-1"
at = ["20 m", "0 m"]
layer = "gravel"
channel = "p1.pressure"
noise = "50 Pa"
drift = "1 kPa/yr"
"#;

/// Ground, one well and two gauges. Channels: `w.rate`, `w.pressure`, `o.pressure`.
const GROUND: &str = r#"
[site]
id = "bench"
name = "Bench (invented)"
units = "metric"

[store]
folder = "store"

[[layer]]
name = "sand"
permeability = "120 mD"
thickness = "20 m"
porosity = 0.2
compressibility = "8e-10 /Pa"
viscosity = "0.6 cP"

[edge]
kind = "open"
distance = "15 km"

[[well]]
name = "W"
at = ["0 m", "0 m"]
layer = "sand"
radius = "0.11 m"
rate = "w.rate"

[[gauge]]
name = "W"
well = "W"
layer = "sand"
channel = "w.pressure"
reference = "absolute"
noise = "100 Pa"
drift = "2 kPa/yr"

[[gauge]]
name = "O"
at = ["400 m", "150 m"]
layer = "sand"
channel = "o.pressure"
reference = "absolute"
noise = "100 Pa"
drift = "2 kPa/yr"

[watch]
lateness = "1 s"
"#;

/// The limit that tests drive pressure through: gauge O above 6 MPa, without delay.
pub const LIMIT: &str = r#"
[[limit]]
gauge = "O"
practice = "injection-pressure"
above = "6 MPa"
delay = "0 s"
priority = "high"
response = "reduce the rate at W, call the duty engineer"
author = "invented, 2031-01-01"
"#;

/// A site file in a temporary folder of its own.
pub struct Site {
    folder: TempDir,
}

impl Site {
    /// Writes the site file: the common ground, what the test adds, and a log source for channels that nothing delivers.
    ///
    /// # Panics
    /// No temporary folder can be made.
    #[must_use]
    pub fn new(additions: &[&str]) -> Self {
        let folder = tempfile::tempdir().expect("a temporary folder");
        let mut text = format!("{GROUND}{}", additions.concat());
        if !text.contains("[http]") {
            // A free port: tests run beside each other.
            text += "\n[http]\nlisten = \"127.0.0.1:0\"\n";
        }
        let left = undelivered(&text);
        fs::write(folder.path().join("site.toml"), text + &left).expect("a site file");
        Self { folder }
    }

    /// The site file.
    #[must_use]
    pub fn file(&self) -> PathBuf {
        self.folder.path().join("site.toml")
    }

    /// The folder of the site file.
    #[must_use]
    pub fn folder(&self) -> &Path {
        self.folder.path()
    }

    /// The store's folder.
    #[must_use]
    pub fn store(&self) -> PathBuf {
        self.folder.path().join("store")
    }
}

/// A log source for the channels of the common ground that no source of `text` delivers; empty where there are none.
fn undelivered(text: &str) -> String {
    let channels: String = [
        ("w.rate", "rate", "m3/d"),
        ("w.pressure", "pressure", "kPa"),
        ("o.pressure", "pressure", "kPa"),
    ]
    .iter()
    .filter(|(id, kind, _)| {
        let pattern = *kind == "pressure" && text.contains("id = \"{gauge}.pressure\"");
        !pattern && !text.contains(&format!("id = \"{id}\""))
    })
    .map(|(id, kind, unit)| {
        format!("[[source.channel]]\nid = \"{id}\"\nkind = \"{kind}\"\nunit = \"{unit}\"\n")
    })
    .collect();
    if channels.is_empty() {
        return channels;
    }
    format!("\n[[source]]\nname = \"log\"\nkind = \"log\"\n{channels}")
}

/// Rate and well pressure from a Modbus RTU device: unit 3, floats at 100 in m3/d and 200 in kPa.
///
/// The two lie apart, so that they are asked for one after the other in requests of the same length: a late answer to the
/// one fits the other in all but its meaning.
#[must_use]
pub fn modbus_source(port: &str) -> String {
    format!(
        r#"
[[source]]
name = "skid"
kind = "modbus-rtu"
port = "{port}"
baud = 19200
every = "400 ms"
timeout = "150 ms"
[[source.channel]]
id = "w.rate"
kind = "rate"
unit = "m3/d"
holds = "after"
unit_id = 3
register = {{ table = "holding", address = 100, type = "f32", order = "big" }}
[[source.channel]]
id = "w.pressure"
kind = "pressure"
unit = "kPa"
unit_id = 3
register = {{ table = "holding", address = 200, type = "f32", order = "big" }}
"#
    )
}

/// Pressure of O from lines `O=<kPa> <RFC 3339>*<checksum>`.
#[must_use]
pub fn text_source(port: &str) -> String {
    format!(
        r#"
[[source]]
name = "logger"
kind = "text-line"
port = "{port}"
baud = 9600
separator = "blank"
time_field = 2
checksum = "xor"
[[source.channel]]
id = "o.pressure"
kind = "pressure"
unit = "kPa"
prefix = "O="
"#
    )
}

/// Pressure of observation gauges from a broker: topic `pads/<gauge>/p`, payload `{"p": kPa, "t": RFC 3339}`.
#[must_use]
pub fn mqtt_source(url: &str) -> String {
    format!(
        r#"
[[source]]
name = "field broker"
kind = "mqtt"
url = "{url}"
[[source.channel]]
id = "{{gauge}}.pressure"
kind = "pressure"
unit = "kPa"
topic = "pads/{{gauge}}/p"
value = "/p"
time = "/t"
"#
    )
}

/// Alarms to a broker.
#[must_use]
pub fn mqtt_publish(url: &str) -> String {
    format!("\n[[publish]]\nkind = \"mqtt\"\nurl = \"{url}\"\n")
}
