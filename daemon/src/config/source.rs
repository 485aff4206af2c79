//! Sources and channels as read: what intake is given.

use std::path::PathBuf;
use std::sync::Arc;
use std::time::Duration;

use super::{
    Companion, FluidColumn, Instrument, QualityTests, ReferenceChange, Sdi12Source, SecretFile,
    TopicPattern,
};
use crate::record::{ChannelId, ChannelKind, Holds, SourceName};

/// What a channel's numbers mean.
#[derive(Debug, Clone, PartialEq)]
pub struct ChannelSettings {
    /// Its name.
    pub id: ChannelId,
    /// Where it comes from.
    pub source: SourceName,
    /// What it measures.
    pub kind: ChannelKind,
    /// Unit of the numbers after the channel's own `scale` and `offset`, as the site file spells it.
    pub unit: String,
    /// From the delivered number to the SI unit of the kind: the channel's own `scale` and `offset`, then its unit.
    pub conversion: Conversion,
    /// How the value stands to its instant.
    pub holds: Holds,
    /// The instrument behind the number; with one, [`ChannelSettings::conversion`] leads to the instrument's own number.
    pub instrument: Option<Arc<Instrument>>,
    /// What the zero of the pressures is changed to.
    pub reference: Option<Arc<ReferenceChange>>,
    /// What carries the pressures to another depth.
    pub column: Option<FluidColumn>,
    /// What is asked of its readings.
    pub quality: Option<Arc<QualityTests>>,
}

impl ChannelSettings {
    /// Whether a value needs more than the number and [`ChannelSettings::conversion`].
    #[must_use]
    pub fn is_instrument(&self) -> bool {
        self.instrument.is_some() || self.reference.is_some() || self.column.is_some()
    }

    /// Channels whose values are needed beside the number.
    pub fn companions(&self) -> impl Iterator<Item = &Companion> {
        let instrument = self.instrument.iter().flat_map(|i| i.companions());
        let reference = self.reference.iter().filter_map(|r| r.barometer.as_ref());
        instrument.chain(reference)
    }
}

/// An affine conversion, `scale * raw + offset`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Conversion {
    /// SI units per raw unit; not zero.
    pub scale: f64,
    /// SI value of raw zero.
    pub offset: f64,
}

impl Conversion {
    /// Raw number to SI.
    #[must_use]
    pub fn to_si(self, raw: f64) -> f64 {
        self.scale.mul_add(raw, self.offset)
    }

    /// SI to raw number.
    #[must_use]
    pub fn to_raw(self, si: f64) -> f64 {
        (si - self.offset) / self.scale
    }
}

/// A source.
#[derive(Debug, Clone, PartialEq)]
pub struct SourceSettings {
    /// Its name.
    pub name: SourceName,
    /// What it is, with its channels.
    pub config: SourceConfig,
}

/// What a source is.
#[derive(Debug, Clone, PartialEq)]
pub enum SourceConfig {
    /// One scan a line over a serial device.
    TextLine(TextLineSource),
    /// Registers polled over a serial device.
    ModbusRtu(ModbusRtuSource),
    /// Registers polled over TCP.
    ModbusTcp(ModbusTcpSource),
    /// Sensors of an SDI-12 line behind a serial adapter.
    Sdi12(Sdi12Source),
    /// Topics of a broker.
    Mqtt(MqttSource),
    /// Log files.
    Log(LogSource),
}

impl SourceConfig {
    /// The kind as the site file spells it.
    #[must_use]
    pub fn kind(&self) -> &'static str {
        match self {
            Self::TextLine(_) => "text-line",
            Self::ModbusRtu(_) => "modbus-rtu",
            Self::ModbusTcp(_) => "modbus-tcp",
            Self::Sdi12(_) => "sdi-12",
            Self::Mqtt(_) => "mqtt",
            Self::Log(_) => "log",
        }
    }

    /// Number of channels, a pattern counted once.
    #[must_use]
    pub fn channel_count(&self) -> usize {
        match self {
            Self::TextLine(s) => s.channels.len(),
            Self::ModbusRtu(s) => s.channels.len(),
            Self::ModbusTcp(s) => s.channels.len(),
            Self::Sdi12(s) => s.channels.len(),
            Self::Mqtt(s) => s.channels.len(),
            Self::Log(s) => s.channels.len(),
        }
    }
}

/// A serial device.
#[derive(Debug, Clone, PartialEq)]
pub struct SerialSettings {
    /// Device file.
    pub port: PathBuf,
    /// Bits per second.
    pub baud: u32,
    /// Data bits in a character, 7 or 8.
    pub data_bits: u8,
    /// Parity bit.
    pub parity: Parity,
    /// Stop bits, 1 or 2.
    pub stop_bits: u8,
}

/// Parity bit.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Parity {
    /// None.
    None,
    /// Even.
    Even,
    /// Odd.
    Odd,
}

/// Lines of text, one scan each.
///
/// A line ends with LF or CR LF. It is cut into fields at [`TextLineSource::separator`]; each channel takes its number from one field.
#[derive(Debug, Clone, PartialEq)]
pub struct TextLineSource {
    /// The device.
    pub serial: SerialSettings,
    /// What cuts a line into fields.
    pub separator: Separator,
    /// Field with the scan's instant (RFC 3339), from 1; without it the scan is stamped on arrival.
    pub time_field: Option<usize>,
    /// Checksum at the line's end.
    pub checksum: Checksum,
    /// A longer line is refused whole \[bytes\].
    pub max_line: usize,
    /// Channels, in file order.
    pub channels: Vec<TextChannel>,
}

/// What cuts a line into fields.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Separator {
    /// One comma, with blanks round it, or any run of blanks: whichever the line has.
    CommaOrBlank,
    /// Any run of blanks and tabs.
    Blank,
    /// This character; blanks round a field are dropped.
    Char(char),
}

/// Checksum at a line's end.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Checksum {
    /// None.
    None,
    /// `*` and two hexadecimal digits: the exclusive or of all bytes before the `*`, a leading `$` left out (as in NMEA 0183).
    Xor,
}

/// A channel of a text line. At least one of `field` and `prefix` is given.
#[derive(Debug, Clone, PartialEq)]
pub struct TextChannel {
    /// The channel.
    pub id: ChannelId,
    /// Its field, from 1; without it the first field that starts with the prefix.
    pub field: Option<usize>,
    /// What stands before the number in its field, such as `P1=`.
    pub prefix: Option<String>,
}

/// Registers polled over a serial device.
#[derive(Debug, Clone, PartialEq)]
pub struct ModbusRtuSource {
    /// The device.
    pub serial: SerialSettings,
    /// Time from one scan's start to the next.
    pub every: Duration,
    /// How long an answer may take.
    pub timeout: Duration,
    /// How often a request without a good answer is made again within a scan.
    pub retries: u32,
    /// Channels, in file order.
    pub channels: Vec<ModbusChannel>,
}

/// Registers polled over TCP, of a device or of the devices behind a gateway.
#[derive(Debug, Clone, PartialEq)]
pub struct ModbusTcpSource {
    /// Name or address of the device or gateway.
    pub host: String,
    /// Its port.
    pub port: u16,
    /// Time from one scan's start to the next.
    pub every: Duration,
    /// How long an answer may take; more than the gateway's own patience with its devices.
    pub timeout: Duration,
    /// How often a request without a good answer is made again within a scan.
    pub retries: u32,
    /// Channels, in file order.
    pub channels: Vec<ModbusChannel>,
}

/// A channel of a Modbus device.
#[derive(Debug, Clone, PartialEq)]
pub struct ModbusChannel {
    /// The channel.
    pub id: ChannelId,
    /// Address of the device: 1 to 247 on a serial line, 0 to 255 over TCP.
    pub unit_id: u8,
    /// Where the number is.
    pub register: Register,
}

/// Where a number is in a Modbus device.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Register {
    /// Which table.
    pub table: RegisterTable,
    /// Address in the protocol, from 0 (the device's manual may count from 1, or from 40001).
    pub address: u16,
    /// How the number is written.
    pub number: RegisterNumber,
    /// Order of its bytes.
    pub order: ByteOrder,
}

/// Which table of registers.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum RegisterTable {
    /// Holding registers, function 3.
    Holding,
    /// Input registers, function 4.
    Input,
}

/// How a number is written in registers.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum RegisterNumber {
    /// 16 bits, unsigned.
    U16,
    /// 16 bits, signed.
    I16,
    /// 32 bits, unsigned.
    U32,
    /// 32 bits, signed.
    I32,
    /// 64 bits, unsigned.
    U64,
    /// 64 bits, signed.
    I64,
    /// IEEE 754, 32 bits.
    F32,
    /// IEEE 754, 64 bits.
    F64,
}

impl Register {
    /// Its number in manuals that count from 1 and put the table before it: 40103 for holding register 102, six digits
    /// beyond the 9999th.
    #[must_use]
    pub fn manual_number(&self) -> u32 {
        let table = match self.table {
            RegisterTable::Holding => 4,
            RegisterTable::Input => 3,
        };
        let ordinal = u32::from(self.address) + 1;
        let place = if ordinal > 9999 { 100_000 } else { 10_000 };
        table * place + ordinal
    }
}

impl RegisterNumber {
    /// Registers of 16 bits it takes.
    #[must_use]
    pub fn registers(self) -> u16 {
        match self {
            Self::U16 | Self::I16 => 1,
            Self::U32 | Self::I32 | Self::F32 => 2,
            Self::U64 | Self::I64 | Self::F64 => 4,
        }
    }
}

/// Order of the bytes of a number, first delivered first; A is the most significant of ABCD.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ByteOrder {
    /// `big`, ABCD: most significant register first, most significant byte first (the standard's).
    Big,
    /// `little`, DCBA: all reversed.
    Little,
    /// `word-swapped`, CDAB: least significant register first, bytes within as the standard has them.
    WordSwapped,
    /// `byte-swapped`, BADC: most significant register first, bytes within reversed.
    ByteSwapped,
}

/// Topics of a broker.
#[derive(Debug, Clone, PartialEq)]
pub struct MqttSource {
    /// The broker.
    pub endpoint: MqttEndpoint,
    /// Channels, in file order.
    pub channels: Vec<MqttChannel>,
}

/// A broker and how to enter.
#[derive(Debug, Clone, PartialEq)]
pub struct MqttEndpoint {
    /// Name or address of the machine.
    pub host: String,
    /// Its port.
    pub port: u16,
    /// Whether the connection is TLS.
    pub tls: bool,
    /// User name.
    pub user: Option<String>,
    /// File with the password.
    pub password: Option<SecretFile>,
    /// Client id; `None` for one made of the site's id and the source's name.
    pub client_id: Option<String>,
}

/// Channels of a topic.
#[derive(Debug, Clone, PartialEq)]
pub struct MqttChannel {
    /// Name of the channel, with placeholders where the topic has them.
    pub id: TopicPattern,
    /// Topic, with placeholders.
    pub topic: TopicPattern,
    /// JSON Pointer (RFC 6901) to the number; `None` where the whole payload is the number.
    pub value: Option<String>,
    /// JSON Pointer to the instant (RFC 3339 text, or a number of seconds since 1970); `None` stamps on arrival.
    pub time: Option<String>,
}

/// Log files.
#[derive(Debug, Clone, PartialEq)]
pub struct LogSource {
    /// File or folder of logs; `None` where logs are named on the command line.
    pub path: Option<PathBuf>,
    /// Channels, in file order.
    pub channels: Vec<ChannelId>,
}
