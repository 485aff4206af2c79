//! What all decoders share: a number becomes a reading or is refused, an instant is read or is refused.

use super::clock::ClockReading;
use super::conversions::Meaning;
use crate::record::{
    ChannelId, ClockEpoch, ClockState, DeviceStatus, Quality, Reading, RejectReason, Rejected,
    SourceName, Stamp,
};

/// Delivered text is kept up to this many characters.
const KEPT: usize = 512;

/// An instant this far ahead of the daemon's clock cannot be \[us\].
const AHEAD: i64 = 86_400 * Stamp::SECOND;

/// When a reading was taken.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) struct When {
    pub(crate) sampled: Stamp,
    pub(crate) received: Stamp,
    pub(crate) epoch: ClockEpoch,
    pub(crate) clock: ClockState,
}

impl When {
    /// Stamped on arrival by the daemon's clock.
    pub(crate) fn arrival(now: ClockReading) -> Self {
        Self {
            sampled: now.now,
            received: now.now,
            epoch: now.epoch,
            clock: now.state,
        }
    }

    /// Delivered with the reading: its clock is not ours to know.
    pub(crate) fn delivered(sampled: Stamp, received: Stamp) -> Self {
        Self {
            sampled,
            received,
            epoch: ClockEpoch(0),
            clock: ClockState::Foreign,
        }
    }
}

/// Why something is refused.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Refusal {
    pub(crate) reason: RejectReason,
    pub(crate) detail: String,
}

impl Refusal {
    pub(crate) fn new(reason: RejectReason, detail: impl Into<String>) -> Self {
        Self {
            reason,
            detail: detail.into(),
        }
    }

    /// The refusal as it is kept.
    pub(crate) fn keep(
        self,
        source: &SourceName,
        channel: Option<&ChannelId>,
        received: Stamp,
        raw: &[u8],
    ) -> Rejected {
        Rejected {
            channel: channel.cloned(),
            source: source.clone(),
            sampled: None,
            received,
            raw: printable(raw),
            reason: self.reason,
            detail: self.detail,
        }
    }
}

/// A reading of a delivered number.
///
/// # Errors
/// The number or its SI value is not finite.
pub(crate) fn reading(
    channel: &ChannelId,
    when: When,
    raw: f64,
    meaning: &Meaning,
) -> Result<Reading, Refusal> {
    let value = meaning.conversion.to_si(raw);
    if !raw.is_finite() || !value.is_finite() {
        return Err(Refusal::new(
            RejectReason::NotANumber,
            format!("{raw} is not a finite number"),
        ));
    }
    Ok(Reading {
        channel: channel.clone(),
        sampled: when.sampled,
        received: when.received,
        epoch: when.epoch,
        value: Some(value).filter(|_| !meaning.deferred),
        raw: Some(raw),
        quality: if meaning.deferred {
            Quality::NotEvaluated
        } else {
            Quality::Good
        },
        device: DeviceStatus::Normal,
        clock: when.clock,
    })
}

/// A reading without a value, kept so that the gap is seen.
pub(crate) fn missing(channel: &ChannelId, when: When, device: DeviceStatus) -> Reading {
    Reading {
        channel: channel.clone(),
        sampled: when.sampled,
        received: when.received,
        epoch: when.epoch,
        value: None,
        raw: None,
        quality: Quality::Missing,
        device,
        clock: when.clock,
    }
}

/// Reads a number as devices write them, alone or with the channel's unit behind it; `NaN` and `inf` are read too, and
/// refused by [`reading`].
///
/// # Errors
/// There is no number, or the unit behind it is another.
pub(crate) fn number(text: &str, meaning: &Meaning) -> Result<f64, Refusal> {
    let text = text.trim();
    if let Ok(number) = text.parse() {
        return Ok(number);
    }
    let end = text
        .find(|c: char| !c.is_ascii_digit() && !"+-.eE".contains(c))
        .unwrap_or(text.len());
    let (number, unit) = text.split_at(end);
    let unit = unit.trim();
    match number.trim().parse() {
        Ok(number) if meaning.unit.as_deref() == Some(unit) => Ok(number),
        Ok(_) if unit.starts_with(|c: char| c.is_alphabetic() || "%°[".contains(c)) => {
            let (unit, due) = (cut(unit, 30), meaning.unit.as_deref().unwrap_or("none"));
            Err(Refusal::new(
                RejectReason::Unit,
                format!("the unit behind the number is \"{unit}\", should be {due}"),
            ))
        }
        Ok(_) | Err(_) => Err(Refusal::new(
            RejectReason::NotANumber,
            format!("\"{}\" is not a number", cut(text, 60)),
        )),
    }
}

/// Reads RFC 3339 text.
pub(crate) fn instant(text: &str) -> Result<Stamp, Refusal> {
    Stamp::parse(text.trim()).map_err(|_| {
        Refusal::new(
            RejectReason::Time,
            format!(
                "\"{}\" is not an RFC 3339 instant with its offset",
                cut(text, 60)
            ),
        )
    })
}

/// Reads a number of seconds since 1970, or of milliseconds: from 1e11 on it is those, as seconds that would be the year 5138.
pub(crate) fn instant_of_number(number: f64) -> Result<Stamp, Refusal> {
    let seconds = if number.abs() >= 1e11 {
        number / 1e3
    } else {
        number
    };
    if seconds.is_finite() && seconds.abs() < 1e11 {
        Ok(Stamp::from_seconds(seconds))
    } else {
        Err(Refusal::new(
            RejectReason::Time,
            format!("{number} is neither seconds nor milliseconds since 1970"),
        ))
    }
}

/// Refuses an instant too far ahead of the daemon's clock.
pub(crate) fn not_ahead(sampled: Stamp, now: Stamp) -> Result<Stamp, Refusal> {
    if sampled.0.saturating_sub(now.0) > AHEAD {
        return Err(Refusal::new(
            RejectReason::Time,
            format!("{sampled} is more than a day ahead of {now}; set the clock of the device"),
        ));
    }
    Ok(sampled)
}

/// Delivered bytes as kept text: bytes that are no text as `\xNN`, cut at [`KEPT`] characters.
pub(crate) fn printable(bytes: &[u8]) -> String {
    let mut text = String::new();
    for chunk in bytes.utf8_chunks() {
        for c in chunk.valid().chars() {
            if c.is_control() {
                text.extend(c.escape_default());
            } else {
                text.push(c);
            }
        }
        for byte in chunk.invalid() {
            text.push_str(&format!("\\x{byte:02X}"));
        }
        if text.len() > 4 * KEPT {
            break;
        }
    }
    cut(&text, KEPT).to_owned()
}

/// The first `most` characters.
pub(crate) fn cut(text: &str, most: usize) -> &str {
    text.char_indices()
        .nth(most)
        .and_then(|(end, _)| text.get(..end))
        .unwrap_or(text)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::intake::conversions::kilo;

    #[test]
    fn numbers_that_are_not_finite_are_refused() {
        let when = When::delivered(Stamp(0), Stamp(0));
        let one = kilo();
        let mut huge = kilo();
        huge.conversion.scale = 1e300;
        for (raw, meaning) in [(f64::NAN, &one), (f64::INFINITY, &one), (1e300, &huge)] {
            let refused = reading(&"p".into(), when, raw, meaning).unwrap_err();
            assert_eq!(refused.reason, RejectReason::NotANumber);
        }
    }

    #[test]
    fn a_number_may_bring_its_unit_but_no_other() {
        let meaning = kilo();
        let read = |text| number(text, &meaning).map_err(|r| r.reason);
        assert_eq!(read(" +1.5e3 "), Ok(1500.0));
        assert_eq!(read("12.5 kPa"), Ok(12.5));
        assert_eq!(read("12.5kPa"), Ok(12.5));
        for text in ["12.5 psi", "12.5 kpa", "12.5 kPa g", "12.5 %"] {
            assert_eq!(read(text), Err(RejectReason::Unit), "{text}");
        }
        for text in ["", "kPa", "----", "1-2", "1,5", "1.2.3"] {
            assert_eq!(read(text), Err(RejectReason::NotANumber), "{text}");
        }
    }

    #[test]
    fn instants_are_read_as_seconds_milliseconds_or_text() {
        let expected = Stamp::parse("2031-03-01T00:00:00Z").unwrap();
        assert_eq!(instant_of_number(1_930_089_600.0).unwrap(), expected);
        assert_eq!(instant_of_number(1_930_089_600_000.0).unwrap(), expected);
        assert_eq!(instant("2031-03-01T01:00:00+01:00").unwrap(), expected);
        for wrong in [f64::NAN, f64::INFINITY, 1e15] {
            assert_eq!(
                instant_of_number(wrong).unwrap_err().reason,
                RejectReason::Time
            );
        }
        assert!(
            instant("2031-03-01T01:00:00").is_err(),
            "without offset it is no instant"
        );
        assert!(not_ahead(expected, expected.plus(-AHEAD)).is_ok());
        assert!(not_ahead(expected, expected.plus(-AHEAD - 1)).is_err());
    }

    #[test]
    fn what_is_kept_is_text_and_short() {
        assert_eq!(printable(b"a\xff\x00b\n"), "a\\xFF\\u{0}b\\n");
        assert_eq!(printable(&[b'x'; 5000]).len(), KEPT);
        assert_eq!(cut("h\u{e9}llo", 2), "h\u{e9}");
    }
}
