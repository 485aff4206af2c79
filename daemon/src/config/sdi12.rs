//! What the site file says of SDI-12 sensors.

use std::fmt;
use std::time::Duration;

use super::SerialSettings;
use crate::record::ChannelId;

/// Sensors of an SDI-12 line behind a transparent serial adapter.
#[derive(Debug, Clone, PartialEq)]
pub struct Sdi12Source {
    /// The adapter.
    pub serial: SerialSettings,
    /// Time from one round's start to the next.
    pub every: Duration,
    /// How long an answer may take, the adapter's own doings included.
    pub timeout: Duration,
    /// How often a measurement that failed is begun again within a round.
    pub retries: u32,
    /// Whether the break that wakes the sensors is sent through the port; adapters mostly make it themselves.
    pub wake: bool,
    /// Channels, in file order.
    pub channels: Vec<Sdi12Channel>,
}

/// A channel of an SDI-12 sensor.
#[derive(Debug, Clone, PartialEq)]
pub struct Sdi12Channel {
    /// The channel.
    pub id: ChannelId,
    /// The sensor.
    pub address: Sdi12Address,
    /// What it is asked.
    pub command: Sdi12Command,
    /// Which of the values it gives, from 1.
    pub value: usize,
}

/// Address of a sensor: a digit or a letter, great and small ones apart.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub struct Sdi12Address(char);

impl Sdi12Address {
    /// The address, where the letter can be one.
    #[must_use]
    pub fn new(letter: char) -> Option<Self> {
        letter.is_ascii_alphanumeric().then_some(Self(letter))
    }

    /// Its letter.
    #[must_use]
    pub fn letter(self) -> char {
        self.0
    }
}

impl fmt::Display for Sdi12Address {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}", self.0)
    }
}

/// How a sensor measures.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Sdi12Kind {
    /// `M`: alone; the sensor says when it is ready.
    Measurement,
    /// `C`: while others measure too.
    Concurrent,
    /// `R`: always, so that the values are there at once.
    Continuous,
}

/// A command that measures, without the sensor's address: `M`, `M1` to `M9`, `C`, `C1` to `C9`, `R0` to `R9`, and `MC`, `CC`,
/// `RC` for values with a checksum.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Sdi12Command {
    /// How.
    pub kind: Sdi12Kind,
    /// Whether the values come with a checksum.
    pub checked: bool,
    /// Which of the sensor's measurements, 0 to 9.
    pub index: u8,
}

impl Sdi12Command {
    /// Reads a command as the standard spells it.
    #[must_use]
    pub fn parse(text: &str) -> Option<Self> {
        let (kind, rest) = match text.split_at_checked(1)? {
            ("M", rest) => (Sdi12Kind::Measurement, rest),
            ("C", rest) => (Sdi12Kind::Concurrent, rest),
            ("R", rest) => (Sdi12Kind::Continuous, rest),
            _ => return None,
        };
        let (checked, digit) = match rest.strip_prefix('C') {
            Some(digit) => (true, digit),
            None => (false, rest),
        };
        let index = match (digit.as_bytes(), kind) {
            // Only a continuous measurement has a 0.
            ([], Sdi12Kind::Measurement | Sdi12Kind::Concurrent) => 0,
            ([b'0'], Sdi12Kind::Continuous) => 0,
            ([digit @ b'1'..=b'9'], _) => digit - b'0',
            _ => return None,
        };
        Some(Self {
            kind,
            checked,
            index,
        })
    }
}

impl fmt::Display for Sdi12Command {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self.kind {
            Sdi12Kind::Measurement => "M",
            Sdi12Kind::Concurrent => "C",
            Sdi12Kind::Continuous => "R",
        })?;
        if self.checked {
            f.write_str("C")?;
        }
        if self.index > 0 || self.kind == Sdi12Kind::Continuous {
            write!(f, "{}", self.index)?;
        }
        Ok(())
    }
}
