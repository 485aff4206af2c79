//! Readings, and what a source hands over.

use serde::{Deserialize, Serialize};

use super::{ChannelId, SourceName, Stamp};

/// Number of the clock's run: advances at each boot and each step of the clock.
#[derive(
    Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Default, Serialize, Deserialize,
)]
#[serde(transparent)]
pub struct ClockEpoch(pub u32);

/// One number of one channel at one instant. The key is (channel, clock epoch, sampled).
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Reading {
    /// Whose it is.
    pub channel: ChannelId,
    /// When it was true of the ground.
    pub sampled: Stamp,
    /// When it reached this daemon.
    pub received: Stamp,
    /// The clock's run at `sampled` (0 where the instant came with the reading from elsewhere).
    pub epoch: ClockEpoch,
    /// Value in the channel's SI unit; `None` when there is none (quality missing, or undecodable).
    pub value: Option<f64>,
    /// The number as it was delivered, before conversion.
    pub raw: Option<f64>,
    /// Quality of the value.
    pub quality: Quality,
    /// Health the device reports of itself.
    pub device: DeviceStatus,
    /// What is known of the clock that gave `sampled`.
    pub clock: ClockState,
}

impl Reading {
    /// Whether watch and limits may use it: it has a finite value that is not known to be bad.
    #[must_use]
    pub fn is_usable(&self) -> bool {
        self.quality.usable() && self.value.is_some_and(f64::is_finite)
    }
}

/// Primary quality flag of IOC/IODE (UNESCO-IOC Manuals and Guides 54, volume 3, 2013).
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Quality {
    /// 1: passed.
    Good,
    /// 2: not evaluated.
    NotEvaluated,
    /// 3: questionable, or of high interest; never hidden from the watch.
    Suspect,
    /// 4: bad; not used.
    Bad,
    /// 9: missing.
    Missing,
}

impl Quality {
    /// The flag's number.
    #[must_use]
    pub fn flag(self) -> u8 {
        match self {
            Self::Good => 1,
            Self::NotEvaluated => 2,
            Self::Suspect => 3,
            Self::Bad => 4,
            Self::Missing => 9,
        }
    }

    /// The flag of a number; `None` for a number the scheme does not have.
    #[must_use]
    pub fn from_flag(flag: i64) -> Option<Self> {
        Some(match flag {
            1 => Self::Good,
            2 => Self::NotEvaluated,
            3 => Self::Suspect,
            4 => Self::Bad,
            9 => Self::Missing,
            _ => return None,
        })
    }

    /// The more worrying of the two: bad and missing before suspect, before not evaluated, before good.
    #[must_use]
    pub fn max_concern(self, other: Self) -> Self {
        let concern = |q: Self| match q {
            Self::Good => 0,
            Self::NotEvaluated => 1,
            Self::Suspect => 2,
            Self::Bad => 3,
            Self::Missing => 4,
        };
        if concern(other) > concern(self) {
            other
        } else {
            self
        }
    }

    /// Whether the watch and limits may use the value.
    #[must_use]
    pub fn usable(self) -> bool {
        !matches!(self, Self::Bad | Self::Missing)
    }
}

/// Device status after NAMUR NE 107.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum DeviceStatus {
    /// Nothing reported.
    #[default]
    Normal,
    /// F.
    Failure,
    /// C.
    FunctionCheck,
    /// S.
    OutOfSpecification,
    /// M.
    MaintenanceRequired,
}

/// What is known of the clock behind an instant.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum ClockState {
    /// Synchronised.
    Synchronised,
    /// Was synchronised, runs free now.
    Holdover,
    /// Never synchronised since boot.
    Unsynchronised,
    /// The instant came with the reading; its clock is not ours to know.
    #[default]
    Foreign,
}

/// Something delivered that could not become a reading, kept with its reason.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Rejected {
    /// The channel it belongs to, where that can be told.
    pub channel: Option<ChannelId>,
    /// Where it came from.
    pub source: SourceName,
    /// Its instant, where it has a readable one.
    pub sampled: Option<Stamp>,
    /// When it reached this daemon.
    pub received: Stamp,
    /// What was delivered, cut at 512 characters; bytes that are no text as `\xNN`.
    pub raw: String,
    /// Why it was refused.
    pub reason: RejectReason,
    /// The particular of the reason, in words.
    pub detail: String,
}

/// Why something delivered was refused.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum RejectReason {
    /// A line or frame that cannot be read.
    Malformed,
    /// A checksum that does not fit.
    Checksum,
    /// A payload without the value or time that was asked of it.
    Payload,
    /// A unit that does not match the channel's kind.
    Unit,
    /// Not a number, or not finite.
    NotANumber,
    /// An instant that cannot be: unreadable, or too far in the future.
    Time,
    /// A channel the site file does not know.
    UnknownChannel,
    /// The device answered with an error.
    DeviceError,
    /// Same key as a stored reading, another value.
    Conflict,
}

impl RejectReason {
    /// The name used in tables and metrics.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Malformed => "malformed",
            Self::Checksum => "checksum",
            Self::Payload => "payload",
            Self::Unit => "unit",
            Self::NotANumber => "not-a-number",
            Self::Time => "time",
            Self::UnknownChannel => "unknown-channel",
            Self::DeviceError => "device-error",
            Self::Conflict => "conflict",
        }
    }
}

/// What a source wants to be told when its delivery is on disk; opaque to everybody else.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub struct AckToken(pub u64);

/// What a source hands over at once: decoded readings and refusals, and the token to be acknowledged after commit.
#[derive(Debug, Clone, PartialEq)]
pub struct Delivery {
    /// Where it came from.
    pub source: SourceName,
    /// Readings, in the order delivered.
    pub readings: Vec<Reading>,
    /// Refusals.
    pub rejected: Vec<Rejected>,
    /// Returned to the source after commit.
    pub ack: Option<AckToken>,
}
