//! The site file: read, check, explain.
//!
//! [`load`] reads a `site.toml`, reports every mistake at once, and gives a [`Site`] in which every reference is
//! resolved and every quantity is SI. Nothing but this room reads the file.

mod digest;
mod instrument;
mod mistake;
mod pattern;
mod quality;
mod read;
mod report;
mod sdi12;
mod secret;
mod section;
mod site;
mod source;
mod values;

use std::path::Path;

pub use instrument::{
    Barometric, Companion, CurrentLoop, FluidColumn, Instrument, Polynomial, Quartz,
    ReferenceChange, Thermal, Thermistor, Totaliser, VibratingWire, WireForm, WireReading,
    WireSense, Zero,
};
pub use mistake::{ConfigError, Mistake, Note};
pub use pattern::{PatternError, TopicPattern};
pub use quality::QualityTests;
pub use read::read;
pub use sdi12::{Sdi12Address, Sdi12Channel, Sdi12Command, Sdi12Kind, Sdi12Source};
pub use secret::{Secret, SecretError, SecretFile};
pub use site::{
    AlarmCare, DriveSettings, EmbankmentSettings, GaugeSettings, GaugeString, HttpSettings,
    LimitSettings, Meter, MqttPublish, PastRate, PatternChannel, PublishSettings, Reference, Side,
    Site, StoreSettings, WatchConfig, WaterSettings, WellSettings,
};
pub use source::{
    ByteOrder, ChannelSettings, Checksum, Conversion, LogSource, ModbusChannel, ModbusRtuSource,
    ModbusTcpSource, MqttChannel, MqttEndpoint, MqttSource, Parity, Register, RegisterNumber,
    RegisterTable, Separator, SerialSettings, SourceConfig, SourceSettings, TextChannel,
    TextLineSource,
};

/// Largest site file read \[bytes\].
const LARGEST: u64 = 4 << 20;

/// Reads a site file. Relative paths in it start at its own folder.
///
/// # Errors
/// The file cannot be read, or anything in it is wrong: all of it is told at once.
pub fn load(path: &Path) -> Result<Site, ConfigError> {
    let unreadable = |why: String| ConfigError::Unreadable {
        path: path.to_owned(),
        why,
    };
    let about = std::fs::metadata(path).map_err(|e| unreadable(e.to_string()))?;
    if !about.is_file() {
        return Err(unreadable(
            "it is no file; name the site.toml itself".to_owned(),
        ));
    }
    if about.len() > LARGEST {
        return Err(unreadable(format!(
            "it is larger than {} MiB",
            LARGEST >> 20
        )));
    }
    let bytes = std::fs::read(path).map_err(|e| unreadable(e.to_string()))?;
    let text = String::from_utf8(bytes).map_err(|e| {
        let at = e.utf8_error().valid_up_to();
        unreadable(format!(
            "it is no UTF-8 text from byte {at} on; save it as UTF-8"
        ))
    })?;
    read(&text, path)
}
