//! Reads a line: checksum, fields, instant, numbers. Pure.

use super::framer::Line;
use crate::config::{Checksum, Separator, TextChannel, TextLineSource};
use crate::intake::Conversions;
use crate::intake::clock::ClockReading;
use crate::intake::decode::{Refusal, When, instant, not_ahead, number, reading};
use crate::record::{ChannelId, Reading, RejectReason, Rejected, SourceName};

/// What a line says: a reading or a refusal for every channel of the line, or one refusal of the whole.
#[must_use]
pub fn read(
    line: &Line,
    settings: &TextLineSource,
    conversions: &Conversions,
    source: &SourceName,
    now: ClockReading,
) -> (Vec<Reading>, Vec<Rejected>) {
    let (Line::Whole(raw) | Line::TooLong(raw)) = line;
    let mut readings = Vec::new();
    let mut rejected = Vec::new();
    match open(line, settings, now) {
        Ok((fields, when)) => {
            for channel in &settings.channels {
                match take(channel, &fields, when, conversions) {
                    Ok(Some(reading)) => readings.push(reading),
                    Ok(None) => {}
                    Err(refusal) => {
                        let id = Some(&channel.id);
                        rejected.push(refusal.keep(source, id, now.now, raw));
                    }
                }
            }
            if readings.is_empty() && rejected.is_empty() {
                let refusal = Refusal::new(
                    RejectReason::Malformed,
                    "no channel of the site file has its field in this line",
                );
                rejected.push(refusal.keep(source, None, now.now, raw));
            }
        }
        Err(refusal) => rejected.push(refusal.keep(source, only(settings), now.now, raw)),
    }
    (readings, rejected)
}

/// The source's channel, where it has one only.
fn only(settings: &TextLineSource) -> Option<&ChannelId> {
    match &settings.channels[..] {
        [one] => Some(&one.id),
        _ => None,
    }
}

/// What concerns the line as a whole: its text, checksum, fields and instant.
fn open<'l>(
    line: &'l Line,
    settings: &TextLineSource,
    now: ClockReading,
) -> Result<(Vec<&'l str>, When), Refusal> {
    let malformed = |detail: String| Refusal::new(RejectReason::Malformed, detail);
    let raw = match line {
        Line::Whole(raw) => raw,
        Line::TooLong(_) => {
            let most = settings.max_line;
            return Err(malformed(format!("the line is longer than {most} bytes")));
        }
    };
    let text = std::str::from_utf8(raw).map_err(|_| malformed("the line is no text".to_owned()))?;
    let text = match settings.checksum {
        Checksum::None => text,
        Checksum::Xor => check_xor(text)?,
    };
    let fields = split(text, settings.separator);
    let when = match settings.time_field {
        None => When::arrival(now),
        Some(position) => {
            let field = field(&fields, position)
                .ok_or_else(|| malformed(format!("there is no field {position} with the time")))?;
            When::delivered(not_ahead(instant(field)?, now.now)?, now.now)
        }
    };
    Ok((fields, when))
}

/// Checks and takes off `*` and two hexadecimal digits: the exclusive or of all before the `*`, a leading `$` left out.
fn check_xor(text: &str) -> Result<&str, Refusal> {
    let wrong = |detail: String| Refusal::new(RejectReason::Checksum, detail);
    let (body, sum) = text
        .trim_end()
        .rsplit_once('*')
        .ok_or_else(|| wrong("there is no * with a checksum".to_owned()))?;
    let digits = sum.len() == 2 && sum.bytes().all(|b| b.is_ascii_hexdigit());
    let found = u8::from_str_radix(sum, 16).ok().filter(|_| digits);
    let found = found.ok_or_else(|| wrong(format!("\"{sum}\" is not two hexadecimal digits")))?;
    let body = body.strip_prefix('$').unwrap_or(body);
    let due = body.bytes().fold(0, |sum, byte| sum ^ byte);
    if found == due {
        Ok(body)
    } else {
        Err(wrong(format!(
            "checksum is {found:02X}, should be {due:02X}"
        )))
    }
}

fn split(text: &str, separator: Separator) -> Vec<&str> {
    let at = |c: char| text.split(c).map(str::trim).collect();
    match separator {
        Separator::Char(c) => at(c),
        Separator::CommaOrBlank if text.contains(',') => at(','),
        Separator::CommaOrBlank | Separator::Blank => text.split_ascii_whitespace().collect(),
    }
}

/// The field at a position from 1.
fn field<'l>(fields: &[&'l str], position: usize) -> Option<&'l str> {
    fields.get(position.checked_sub(1)?).copied()
}

/// The channel's reading; `None` where the line is of another kind, which its prefix tells.
fn take(
    channel: &TextChannel,
    fields: &[&str],
    when: When,
    conversions: &Conversions,
) -> Result<Option<Reading>, Refusal> {
    let prefix = channel.prefix.as_deref().unwrap_or_default();
    let text = match channel.field {
        None => match fields.iter().find_map(|f| f.strip_prefix(prefix)) {
            Some(text) => text,
            None => return Ok(None),
        },
        Some(position) => {
            let text = field(fields, position).ok_or_else(|| {
                let detail = format!(
                    "there is no field {position}, the line has {}",
                    fields.len()
                );
                Refusal::new(RejectReason::Malformed, detail)
            })?;
            match text.strip_prefix(prefix) {
                Some(text) => text,
                None => return Ok(None),
            }
        }
    };
    let meaning = conversions.of(&channel.id)?;
    reading(&channel.id, when, number(text, meaning)?, meaning).map(Some)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::{Parity, SerialSettings};
    use crate::intake::conversions::{Meaning, kilo};
    use crate::record::{ClockEpoch, ClockState, Quality, Stamp};
    use proptest::prelude::*;

    fn settings(channels: &[(&str, Option<usize>, Option<&str>)]) -> TextLineSource {
        let channel = |&(id, field, prefix): &(&str, Option<usize>, Option<&str>)| TextChannel {
            id: id.into(),
            field,
            prefix: prefix.map(str::to_owned),
        };
        TextLineSource {
            serial: SerialSettings {
                port: "/dev/null".into(),
                baud: 9600,
                data_bits: 8,
                parity: Parity::None,
                stop_bits: 1,
            },
            separator: Separator::CommaOrBlank,
            time_field: None,
            checksum: Checksum::None,
            max_line: 80,
            channels: channels.iter().map(channel).collect(),
        }
    }

    fn run(settings: &TextLineSource, text: &[u8]) -> (Vec<Reading>, Vec<Rejected>) {
        let known = settings.channels.iter().map(|c| (c.id.clone(), kilo()));
        let now = ClockReading {
            now: Stamp::parse("2031-03-01T00:00:00Z").unwrap(),
            epoch: ClockEpoch(4),
            state: ClockState::Synchronised,
        };
        let line = Line::Whole(text.to_vec());
        read(
            &line,
            settings,
            &Conversions::new::<_, Meaning>(known, []),
            &"pit".into(),
            now,
        )
    }

    #[test]
    fn a_scan_gives_a_reading_for_each_channel() {
        let settings = settings(&[("p1", Some(1), None), ("p2", Some(3), None)]);
        for text in ["101.5, 7, 99", "101.5 7\t99", "101.5,7 ,99\t"] {
            let (readings, rejected) = run(&settings, text.as_bytes());
            assert_eq!(rejected, [], "{text}");
            let values: Vec<_> = readings.iter().map(|r| (r.value, r.raw)).collect();
            assert_eq!(
                values,
                [(Some(101_500.0), Some(101.5)), (Some(99_000.0), Some(99.0))]
            );
            assert_eq!(readings[0].quality, Quality::Good);
            assert_eq!(
                (readings[0].epoch, readings[0].clock),
                (ClockEpoch(4), ClockState::Synchronised)
            );
        }
    }

    #[test]
    fn a_bad_field_costs_its_own_channel_only() {
        let settings = settings(&[
            ("p1", Some(1), None),
            ("p2", Some(2), None),
            ("p3", Some(3), None),
        ]);
        let (readings, rejected) = run(&settings, b"101.5,----");
        assert_eq!(readings.len(), 1);
        let reasons: Vec<_> = rejected
            .iter()
            .map(|r| (r.channel.clone().unwrap(), r.reason))
            .collect();
        assert_eq!(
            reasons,
            [
                ("p2".into(), RejectReason::NotANumber),
                ("p3".into(), RejectReason::Malformed)
            ]
        );
        assert_eq!(run(&settings, b"nan,1,inf").1.len(), 2);
    }

    #[test]
    fn prefixes_tell_whose_number_it_is() {
        let settings = settings(&[("p", None, Some("P=")), ("q", Some(2), Some("Q="))]);
        assert_eq!(run(&settings, b"T=1 Q=2 P=3").0.len(), 2);
        assert_eq!(run(&settings, b"P=3 T=1").0.len(), 1);
        let (readings, rejected) = run(&settings, b"hello there");
        assert!(readings.is_empty());
        assert_eq!(
            (rejected[0].reason, &rejected[0].channel),
            (RejectReason::Malformed, &None)
        );
    }

    #[test]
    fn a_time_field_brings_its_own_clock() {
        let mut settings = settings(&[("p", Some(2), None)]);
        settings.time_field = Some(1);
        let (readings, _) = run(&settings, b"2031-02-28T22:00:00-01:00,5");
        let reading = &readings[0];
        assert_eq!(
            reading.sampled,
            Stamp::parse("2031-02-28T23:00:00Z").unwrap()
        );
        assert_eq!(
            (reading.epoch, reading.clock),
            (ClockEpoch(0), ClockState::Foreign)
        );
        for late in ["2031-03-02T00:00:01Z,5", "yesterday,5"] {
            assert_eq!(
                run(&settings, late.as_bytes()).1[0].reason,
                RejectReason::Time
            );
        }
    }

    /// The sentence and its checksum 47 are an example often printed with NMEA 0183; from memory, recomputed here.
    #[test]
    fn checksums_are_checked() {
        let mut settings = settings(&[("p", Some(10), None)]);
        settings.separator = Separator::Char(',');
        settings.checksum = Checksum::Xor;
        let good = "$GPGGA,123519,4807.038,N,01131.000,E,1,08,0.9,545.4,M,46.9,M,,*47";
        assert_eq!(run(&settings, good.as_bytes()).0[0].raw, Some(545.4));
        for bad in [
            good.replace("545.4", "545.5"),
            good.replace("*47", "*4"),
            good.replace("*47", ""),
            good.replace("*47", "*+7"),
        ] {
            let (readings, rejected) = run(&settings, bad.as_bytes());
            assert_eq!(
                (readings.len(), rejected[0].reason),
                (0, RejectReason::Checksum),
                "{bad}"
            );
        }
    }

    proptest! {
        #[test]
        fn no_line_upsets_the_reader(bytes in prop::collection::vec(any::<u8>(), 0..120)) {
            let mut settings = settings(&[("p", Some(2), None), ("q", None, Some("Q"))]);
            settings.checksum = Checksum::Xor;
            settings.time_field = Some(1);
            let (readings, rejected) = run(&settings, &bytes);
            prop_assert!(readings.len() + rejected.len() >= 1);
        }
    }
}
