//! An instant of wall-clock or sample time.

use std::fmt;

use jiff::Timestamp;
use serde::{Deserialize, Deserializer, Serialize, Serializer, de::Error as _};

/// Microseconds since 1970-01-01T00:00:00Z. Text form: RFC 3339 in UTC with `Z`, milliseconds unless finer is needed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Default)]
pub struct Stamp(pub i64);

impl Stamp {
    /// Microseconds in a second.
    pub const SECOND: i64 = 1_000_000;

    /// The instant now, by the machine's wall clock.
    #[must_use]
    pub fn now() -> Self {
        Self(Timestamp::now().as_microsecond())
    }

    /// Reads RFC 3339 text with any offset.
    ///
    /// # Errors
    /// The text is no instant.
    pub fn parse(text: &str) -> Result<Self, jiff::Error> {
        text.parse::<Timestamp>().map(|t| Self(t.as_microsecond()))
    }

    /// Seconds since the epoch.
    #[must_use]
    #[expect(
        clippy::cast_precision_loss,
        reason = "microseconds of this century fit 53 bits"
    )]
    pub fn seconds(self) -> f64 {
        self.0 as f64 / 1e6
    }

    /// From seconds since the epoch, rounded to a microsecond; saturates outside the calendar.
    #[must_use]
    #[expect(
        clippy::cast_possible_truncation,
        reason = "float-to-int casts saturate, which is what is wanted"
    )]
    pub fn from_seconds(seconds: f64) -> Self {
        Self((seconds * 1e6).round() as i64)
    }

    /// This instant moved by `micros`, saturating.
    #[must_use]
    pub fn plus(self, micros: i64) -> Self {
        Self(self.0.saturating_add(micros))
    }
}

impl fmt::Display for Stamp {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match Timestamp::from_microsecond(self.0) {
            Ok(t) if self.0 % 1000 == 0 => write!(f, "{t:.3}"),
            Ok(t) => write!(f, "{t:.6}"),
            Err(_) => write!(f, "{} us", self.0),
        }
    }
}

impl Serialize for Stamp {
    fn serialize<S: Serializer>(&self, s: S) -> Result<S::Ok, S::Error> {
        if s.is_human_readable() {
            s.collect_str(self)
        } else {
            s.serialize_i64(self.0)
        }
    }
}

impl<'de> Deserialize<'de> for Stamp {
    fn deserialize<D: Deserializer<'de>>(d: D) -> Result<Self, D::Error> {
        if d.is_human_readable() {
            let text = String::deserialize(d)?;
            Self::parse(&text).map_err(D::Error::custom)
        } else {
            i64::deserialize(d).map(Self)
        }
    }
}

#[cfg(test)]
mod tests {
    use super::Stamp;

    #[test]
    fn text_form_is_rfc_3339_in_utc() {
        let s = Stamp::parse("2031-03-01T02:00:00+02:00").unwrap();
        assert_eq!(s.to_string(), "2031-03-01T00:00:00.000Z");
        assert_eq!(Stamp::parse(&s.plus(1).to_string()).unwrap(), s.plus(1));
    }
}
