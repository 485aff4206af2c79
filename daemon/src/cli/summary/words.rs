//! Words of the site file, as `check` says them.

use std::time::Duration;

use borewake_model::ground::{Anisotropy, EdgeKind, Well};
use borewake_model::units::significant;

use crate::config::{
    GaugeString, MqttEndpoint, Parity, Reference, SerialSettings, Side, Site, SourceConfig,
};
use crate::record::Priority;

pub(super) fn edge_word(kind: EdgeKind) -> &'static str {
    match kind {
        EdgeKind::Open => "open",
        EdgeKind::Closed => "closed",
        EdgeKind::Fixed => "fixed",
        EdgeKind::Driven => "at the pressure of open water",
    }
}

/// An anisotropy as the site file has it: its ratio, and the azimuth from 0 to 180 degrees.
pub(super) fn azimuth_words(anisotropy: Anisotropy) -> String {
    let azimuth = 90.0 - anisotropy.direction.to_degrees();
    format!(
        "{} toward {} deg",
        significant(anisotropy.ratio, 3),
        significant(azimuth.rem_euclid(180.0), 3)
    )
}

pub(super) fn reference_word(reference: Reference) -> &'static str {
    match reference {
        Reference::Absolute => "absolute",
        Reference::Vented => "vented",
        Reference::Sealed => "sealed",
        Reference::Differential => "differential",
    }
}

pub(super) fn string_word(string: GaugeString) -> &'static str {
    match string {
        GaugeString::Downhole => "downhole",
        GaugeString::Surface => "surface",
        GaugeString::Piezometer => "piezometer",
    }
}

pub(super) fn serial_words(serial: &SerialSettings) -> String {
    let parity = match serial.parity {
        Parity::None => 'N',
        Parity::Even => 'E',
        Parity::Odd => 'O',
    };
    format!(
        "{} {} {}{parity}{}",
        serial.port.display(),
        serial.baud,
        serial.data_bits,
        serial.stop_bits
    )
}

/// A broker's address and user; never its password.
pub(super) fn broker_words(endpoint: &MqttEndpoint) -> String {
    let scheme = if endpoint.tls { "mqtts" } else { "mqtt" };
    let user = endpoint.user.as_ref().map(|u| format!(" as {u}"));
    let host = if endpoint.host.contains(':') {
        format!("[{}]", endpoint.host)
    } else {
        endpoint.host.clone()
    };
    let user = user.unwrap_or_default();
    format!("{scheme}://{host}:{}{user}", endpoint.port)
}

fn every_words(every: Duration) -> String {
    format!("every {} s", significant(every.as_secs_f64(), 4))
}

pub(super) fn source_words(config: &SourceConfig) -> String {
    match config {
        SourceConfig::TextLine(source) => serial_words(&source.serial),
        SourceConfig::ModbusRtu(source) => {
            let line = serial_words(&source.serial);
            format!("{line}, {}", every_words(source.every))
        }
        SourceConfig::ModbusTcp(source) => {
            let every = every_words(source.every);
            format!("{}:{}, {every}", source.host, source.port)
        }
        SourceConfig::Sdi12(source) => {
            let line = serial_words(&source.serial);
            format!("{line}, {}", every_words(source.every))
        }
        SourceConfig::Mqtt(source) => broker_words(&source.endpoint),
        SourceConfig::Log(source) => match &source.path {
            Some(path) => path.display().to_string(),
            None => "named on the command line".to_owned(),
        },
    }
}

pub(super) fn side_word(side: Side) -> &'static str {
    match side {
        Side::Above => "above",
        Side::Below => "below",
    }
}

pub(super) fn priority_word(priority: Priority) -> &'static str {
    match priority {
        Priority::Low => "low",
        Priority::Medium => "medium",
        Priority::High => "high",
    }
}

/// The name of a layer.
pub(super) fn layer_name(site: &Site, layer: usize) -> String {
    let layer = site.ground.layers.get(layer);
    layer.map(|l| l.name.clone()).unwrap_or_default()
}

/// Names of the layers that a well is open to.
pub(super) fn layer_names(site: &Site, well: &Well) -> String {
    let names: Vec<String> = well.layers().map(|l| layer_name(site, l)).collect();
    names.join(", ")
}
