//! Sources and channels as read: what intake is given.

use std::fmt;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::Duration;

use thiserror::Error;

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
    /// Unit of the numbers after [`ChannelSettings::scale`] and [`ChannelSettings::offset`], as the site file spells it.
    pub unit: String,
    /// From the delivered number to the SI unit of the kind: the channel's own `scale` and `offset`, then its unit.
    pub conversion: Conversion,
    /// How the value stands to its instant.
    pub holds: Holds,
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

/// A channel of a Modbus device.
#[derive(Debug, Clone, PartialEq)]
pub struct ModbusChannel {
    /// The channel.
    pub id: ChannelId,
    /// Address of the device on the line, 1 to 247.
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
    /// IEEE 754, 32 bits.
    F32,
    /// IEEE 754, 64 bits.
    F64,
}

impl RegisterNumber {
    /// Registers of 16 bits it takes.
    #[must_use]
    pub fn registers(self) -> u16 {
        match self {
            Self::U16 | Self::I16 => 1,
            Self::U32 | Self::I32 | Self::F32 => 2,
            Self::F64 => 4,
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

/// Text with `{placeholders}`: a topic, or the name of a channel. Each placeholder stands for one level of a topic, and is not empty.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct TopicPattern {
    text: Arc<str>,
    parts: Arc<[PatternPart]>,
}

/// A piece of a [`TopicPattern`].
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash)]
enum PatternPart {
    /// These characters.
    Literal(String),
    /// Whatever stands here, without `/`, under this name.
    Placeholder(String),
}

/// A pattern that cannot be read.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum PatternError {
    /// A brace without its partner, or a placeholder without a proper name.
    #[error("a placeholder is a name of letters, digits and _ in braces, such as {{gauge}}")]
    Brace,
    /// The same placeholder twice.
    #[error("the placeholder {{{0}}} stands twice")]
    Twice(String),
    /// Two placeholders with nothing between.
    #[error("between two placeholders there must be some text")]
    Touching,
}

impl TopicPattern {
    /// Reads a pattern.
    ///
    /// # Errors
    /// Braces that do not pair, a placeholder without a proper name, twice, or right after another.
    pub fn parse(text: &str) -> Result<Self, PatternError> {
        let mut parts = Vec::new();
        let mut rest = text;
        while let Some((before, after)) = rest.split_once('{') {
            let (name, tail) = after.split_once('}').ok_or(PatternError::Brace)?;
            let proper = |c: char| c.is_ascii_alphanumeric() || c == '_';
            if before.contains('}') || name.is_empty() || !name.chars().all(proper) {
                return Err(PatternError::Brace);
            }
            let twice = |p: &PatternPart| matches!(p, PatternPart::Placeholder(n) if n == name);
            if parts.iter().any(twice) {
                return Err(PatternError::Twice(name.to_owned()));
            }
            if !before.is_empty() {
                parts.push(PatternPart::Literal(before.to_owned()));
            } else if matches!(parts.last(), Some(PatternPart::Placeholder(_))) {
                return Err(PatternError::Touching);
            }
            parts.push(PatternPart::Placeholder(name.to_owned()));
            rest = tail;
        }
        if rest.contains('}') {
            return Err(PatternError::Brace);
        }
        if !rest.is_empty() {
            parts.push(PatternPart::Literal(rest.to_owned()));
        }
        Ok(Self {
            text: text.into(),
            parts: parts.into(),
        })
    }

    /// A text without placeholders, whatever it holds.
    #[must_use]
    pub fn plain(text: &str) -> Self {
        Self {
            text: text.into(),
            parts: [PatternPart::Literal(text.to_owned())].into(),
        }
    }

    /// The pattern as written.
    #[must_use]
    pub fn as_str(&self) -> &str {
        &self.text
    }

    /// Names of the placeholders, in order.
    pub fn placeholders(&self) -> impl Iterator<Item = &str> {
        self.parts.iter().filter_map(|p| match p {
            PatternPart::Placeholder(name) => Some(name.as_str()),
            PatternPart::Literal(_) => None,
        })
    }

    /// Whether it has no placeholder.
    #[must_use]
    pub fn is_plain(&self) -> bool {
        self.placeholders().next().is_none()
    }

    /// What the placeholders stand for in `text`, where it fits. Each takes the shortest run that lets the rest fit.
    #[must_use]
    pub fn capture(&self, text: &str) -> Option<Vec<(&str, String)>> {
        let mut found = Vec::new();
        capture(&self.parts, text, &mut found).then_some(found)
    }

    /// Whether `text` fits.
    #[must_use]
    pub fn fits(&self, text: &str) -> bool {
        self.capture(text).is_some()
    }

    /// The text with every placeholder filled in; `None` where one of them is not among `values`.
    #[must_use]
    pub fn fill(&self, values: &[(&str, String)]) -> Option<String> {
        self.parts
            .iter()
            .map(|part| match part {
                PatternPart::Literal(text) => Some(text.as_str()),
                PatternPart::Placeholder(name) => values
                    .iter()
                    .find(|(n, _)| n == name)
                    .map(|(_, v)| v.as_str()),
            })
            .collect()
    }

    /// The topic filter to subscribe to: every level that has a placeholder becomes `+`.
    #[must_use]
    pub fn filter(&self) -> String {
        let levels: Vec<&str> = self
            .text
            .split('/')
            .map(|level| if level.contains('{') { "+" } else { level })
            .collect();
        levels.join("/")
    }
}

/// Fits `text` to `parts` from the left, going back where a shorter run does not let the rest fit.
fn capture<'p>(parts: &'p [PatternPart], text: &str, found: &mut Vec<(&'p str, String)>) -> bool {
    match parts.split_first() {
        None => text.is_empty(),
        Some((PatternPart::Literal(literal), rest)) => text
            .strip_prefix(literal.as_str())
            .is_some_and(|tail| capture(rest, tail, found)),
        Some((PatternPart::Placeholder(name), rest)) => {
            let level = text.split('/').next().unwrap_or_default();
            for (end, c) in level.char_indices() {
                let (run, tail) = text.split_at(end + c.len_utf8());
                found.push((name, run.to_owned()));
                if capture(rest, tail, found) {
                    return true;
                }
                found.pop();
            }
            false
        }
    }
}

impl fmt::Display for TopicPattern {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.text)
    }
}

/// A file that holds a secret. It is read when it is used; neither it nor its text is ever printed.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SecretFile(PathBuf);

/// A secret that cannot be read.
#[derive(Debug, Error)]
#[error("the secret file {} cannot be used: {why}", path.display())]
pub struct SecretError {
    /// The file.
    pub path: PathBuf,
    /// Why.
    pub why: String,
}

impl SecretFile {
    /// A secret in this file.
    #[must_use]
    pub fn new(path: PathBuf) -> Self {
        Self(path)
    }

    /// The file.
    #[must_use]
    pub fn path(&self) -> &Path {
        &self.0
    }

    /// Whether others than the owner may read it.
    #[must_use]
    pub fn open_to_others(&self) -> bool {
        use std::os::unix::fs::PermissionsExt as _;
        std::fs::metadata(&self.0).is_ok_and(|m| m.permissions().mode() & 0o077 != 0)
    }

    /// Reads the secret; a line end at its end is dropped.
    ///
    /// # Errors
    /// The file cannot be read, is not text, or is empty.
    pub fn read(&self) -> Result<Secret, SecretError> {
        let wrong = |why: String| SecretError {
            path: self.0.clone(),
            why,
        };
        let text = std::fs::read_to_string(&self.0).map_err(|e| wrong(e.to_string()))?;
        let secret = text.trim_end_matches(['\r', '\n']);
        if secret.is_empty() {
            return Err(wrong("it is empty".to_owned()));
        }
        Ok(Secret(secret.to_owned()))
    }
}

/// A secret; shown as dots.
#[derive(Clone, PartialEq, Eq)]
pub struct Secret(String);

impl Secret {
    /// The secret itself, for the one call that needs it.
    #[must_use]
    pub fn expose(&self) -> &str {
        &self.0
    }
}

impl fmt::Debug for Secret {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("Secret(…)")
    }
}
