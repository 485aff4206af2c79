//! The site file: read, check, explain.
//!
//! [`load`] reads a `site.toml`, reports every mistake at once, and gives a [`Site`] in which every reference is
//! resolved and every quantity is SI. Nothing but this room reads the file.

mod mistake;
mod site;
mod source;

pub use mistake::{ConfigError, Mistake, Note};
pub use site::{
    GaugeSettings, GaugeString, LimitSettings, Meter, MqttPublish, PastRate, PatternChannel,
    PublishSettings, Reference, Side, Site, StoreSettings, WatchConfig, WellSettings,
};
pub use source::{
    ByteOrder, ChannelSettings, Checksum, Conversion, LogSource, ModbusChannel, ModbusRtuSource,
    MqttChannel, MqttEndpoint, MqttSource, Parity, PatternError, Register, RegisterNumber,
    RegisterTable, Secret, SecretError, SecretFile, Separator, SerialSettings, SourceConfig,
    SourceSettings, TextChannel, TextLineSource, TopicPattern,
};
