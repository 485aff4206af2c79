//! Commands and answers of SDI-12. Pure: bytes in, bytes or values out.
//!
//! After SDI-12, a serial-digital interface standard for microprocessor-based sensors, version 1.4 (SDI-12 Support Group).

use thiserror::Error;

use crate::config::{Sdi12Address, Sdi12Command, Sdi12Kind};
use crate::intake::crc;

/// Longest answer there is: address, values of a continuous or concurrent measurement, checksum \[characters\].
pub const LONGEST: usize = 1 + 75 + 3;

/// Most digits of a value.
const DIGITS: usize = 7;

/// What is said to a sensor.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Ask {
    /// `a!`: are you there?
    Active,
    /// `aI!`: who are you?
    Identify,
    /// `aM!`, `aC!`, `aR0!` and their kin.
    Measure(Sdi12Command),
    /// `aD0!` to `aD9!`: the values of the last measurement.
    Data(u8),
}

impl Ask {
    /// The command to send.
    #[must_use]
    pub fn command(self, address: Sdi12Address) -> String {
        let a = address.letter();
        match self {
            Self::Active => format!("{a}!"),
            Self::Identify => format!("{a}I!"),
            Self::Measure(command) => format!("{a}{command}!"),
            Self::Data(part) => format!("{a}D{part}!"),
        }
    }
}

/// An answer that is none.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
pub enum AnswerError {
    /// Another sensor speaks.
    #[error("\"{found}\" answered where sensor {due} was asked")]
    Address {
        /// Who answered.
        found: String,
        /// Who was asked.
        due: Sdi12Address,
    },
    /// The checksum does not fit.
    #[error("checksum is {found}, should be {due}")]
    Checksum {
        /// As delivered.
        found: String,
        /// As computed.
        due: String,
    },
    /// It has another form than the command's answer.
    #[error("it is no {0}")]
    Form(&'static str),
    /// A value that cannot be read.
    #[error("\"{0}\" is no value: a sign, then up to seven digits")]
    Value(String),
    /// More values than were announced.
    #[error("{found} values where {due} were announced")]
    TooMany {
        /// As delivered.
        found: usize,
        /// As announced.
        due: usize,
    },
}

/// What a sensor announces of a measurement it has begun.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Announcement {
    /// Until the values are ready \[s\].
    pub seconds: u16,
    /// How many there will be.
    pub values: usize,
}

/// Takes the address off an answer without its line end.
///
/// # Errors
/// It is another sensor's.
pub fn own(address: Sdi12Address, answer: &str) -> Result<&str, AnswerError> {
    answer
        .strip_prefix(address.letter())
        .ok_or_else(|| AnswerError::Address {
            found: answer.chars().take(1).collect(),
            due: address,
        })
}

/// Reads the answer to a command that begins a measurement.
///
/// # Errors
/// It is none.
pub fn announcement(
    address: Sdi12Address,
    kind: Sdi12Kind,
    answer: &str,
) -> Result<Announcement, AnswerError> {
    let due =
        AnswerError::Form("announcement of a measurement (atttn, or atttnn where concurrent)");
    let text = own(address, answer)?;
    let digits = if kind == Sdi12Kind::Concurrent { 5 } else { 4 };
    if text.len() != digits || !text.bytes().all(|b| b.is_ascii_digit()) {
        return Err(due);
    }
    let (seconds, values) = text.split_at_checked(3).ok_or(due.clone())?;
    Ok(Announcement {
        seconds: seconds.parse().map_err(|_| due.clone())?,
        values: values.parse().map_err(|_| due)?,
    })
}

/// Reads the values of an answer; none at all means that the sensor has none to give.
///
/// # Errors
/// It is no such answer, or is damaged.
pub fn values(address: Sdi12Address, checked: bool, answer: &str) -> Result<Vec<f64>, AnswerError> {
    let answer = if checked { check(answer)? } else { answer };
    let text = own(address, answer)?;
    let Some(first) = text.chars().next() else {
        return Ok(Vec::new());
    };
    if !is_sign(first) {
        return Err(AnswerError::Form("list of values, each with its sign"));
    }
    let starts = text.match_indices(is_sign).map(|(at, _)| at);
    let ends = starts.clone().skip(1).chain([text.len()]);
    let parts = starts
        .zip(ends)
        .map(|(a, b)| text.get(a..b).unwrap_or_default());
    parts.map(value).collect()
}

fn is_sign(c: char) -> bool {
    c == '+' || c == '-'
}

/// Reads a sign, then digits with at most one point among them.
fn value(text: &str) -> Result<f64, AnswerError> {
    let wrong = || AnswerError::Value(text.to_owned());
    let body = text.get(1..).ok_or_else(wrong)?;
    let digits = body.bytes().filter(u8::is_ascii_digit).count();
    let others = body.len() - digits;
    let points = body.matches('.').count();
    if !(1..=DIGITS).contains(&digits) || others != points || points > 1 {
        return Err(wrong());
    }
    text.parse().map_err(|_| wrong())
}

/// Checks and takes off the three characters of the checksum.
fn check(answer: &str) -> Result<&str, AnswerError> {
    let split = answer
        .len()
        .checked_sub(3)
        .filter(|at| *at > 0)
        .and_then(|at| answer.split_at_checked(at));
    let (body, found) = split.ok_or(AnswerError::Form("answer with a checksum"))?;
    let due = checksum(body);
    if found == due {
        Ok(body)
    } else {
        Err(AnswerError::Checksum {
            found: found.to_owned(),
            due,
        })
    }
}

/// The three characters that check an answer, from its address on (SDI-12 1.4, section 4.4.12).
#[must_use]
pub fn checksum(body: &str) -> String {
    let crc = crc::crc16(0, body.as_bytes());
    [crc >> 12, crc >> 6 & 0x3F, crc & 0x3F]
        .into_iter()
        .map(|six| char::from(u8::try_from(0x40 | six).unwrap_or(b'?')))
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn zero() -> Sdi12Address {
        Sdi12Address::new('0').unwrap()
    }

    /// Examples printed in SDI-12 1.4, sections 4.4.8.1 and 4.4.12.3; all recomputed.
    #[test]
    #[expect(
        clippy::approx_constant,
        reason = "the standard's examples are no constants"
    )]
    fn checksums_fit_the_published_answers() {
        for (answer, crc, due) in [
            ("0+3.14OqZ", 0xFC5A, vec![3.14]),
            ("0+3.14+2.718+1.414Ipz", 0x9C3A, vec![3.14, 2.718, 1.414]),
            (
                "0+1.11+2.22+3.33+4.44+5.55+6.66I]q",
                0x9771,
                vec![1.11, 2.22, 3.33, 4.44, 5.55, 6.66],
            ),
            ("0+7.77+8.88+9.99IvW", 0x9D97, vec![7.77, 8.88, 9.99]),
            ("0+3.14+2.718IWO", 0x95CF, vec![3.14, 2.718]),
            ("0AP@", 0x1400, vec![]),
        ] {
            let body = &answer[..answer.len() - 3];
            assert_eq!(crc::crc16(0, body.as_bytes()), crc, "{answer}");
            assert_eq!(checksum(body), answer[answer.len() - 3..]);
            assert_eq!(values(zero(), true, answer), Ok(due));
        }
        assert_eq!(crc::crc16(0, b"123456789"), 0xBB3D, "CRC-16/ARC");
    }

    #[test]
    fn commands_are_spelt_as_the_standard_has_them() {
        let a = Sdi12Address::new('c').unwrap();
        for command in [
            "M", "M1", "MC", "MC9", "C", "C4", "CC", "CC2", "R0", "R9", "RC0",
        ] {
            let read = Sdi12Command::parse(command).unwrap();
            assert_eq!(Ask::Measure(read).command(a), format!("c{command}!"));
        }
        for wrong in ["", "m", "M10", "M0", "R", "RC", "V", "D0", "A1", "XM"] {
            assert_eq!(Sdi12Command::parse(wrong), None, "{wrong}");
        }
        assert_eq!(Ask::Active.command(a), "c!");
        assert_eq!(Ask::Identify.command(a), "cI!");
        assert_eq!(Ask::Data(3).command(a), "cD3!");
        assert!(Sdi12Address::new('?').is_none());
    }

    #[test]
    fn announcements_have_one_digit_of_count_or_two() {
        let read = |kind, text| announcement(zero(), kind, text);
        let of = |seconds, values| Ok(Announcement { seconds, values });
        assert_eq!(read(Sdi12Kind::Measurement, "00105"), of(10, 5));
        assert_eq!(read(Sdi12Kind::Concurrent, "001012"), of(10, 12));
        assert!(read(Sdi12Kind::Measurement, "001012").is_err());
        assert!(read(Sdi12Kind::Measurement, "0+1.5").is_err());
        assert!(matches!(
            read(Sdi12Kind::Measurement, "10105"),
            Err(AnswerError::Address { .. })
        ));
    }

    #[test]
    fn what_is_no_value_is_refused() {
        let read = |text| values(zero(), false, text);
        assert_eq!(
            read("0+1-2.5+.5+1234567"),
            Ok(vec![1.0, -2.5, 0.5, 1_234_567.0])
        );
        assert_eq!(read("0"), Ok(Vec::new()));
        for wrong in [
            "01.5",
            "0+",
            "0+-1",
            "0+1e5",
            "0+12345678",
            "0+1.2.3",
            "0+1 +2",
            "0+inf",
        ] {
            assert!(read(wrong).is_err(), "{wrong}");
        }
        assert!(matches!(
            values(zero(), true, "0+3.15OqZ"),
            Err(AnswerError::Checksum { .. })
        ));
    }

    proptest! {
        #[test]
        fn values_come_back(numbers in prop::collection::vec(-9_999_999_i32..=9_999_999, 0..9), places in 0_usize..5) {
            let scale = 10_f64.powi(i32::try_from(places).unwrap());
            let due: Vec<f64> = numbers.iter().map(|&n| f64::from(n) / scale).collect();
            let written: Vec<String> = due.iter().map(|v| format!("{v:+.places$}")).collect();
            let fits = written.iter().all(|w| w.bytes().filter(u8::is_ascii_digit).count() <= DIGITS);
            prop_assume!(fits);
            let body = format!("0{}", written.concat());
            prop_assert_eq!(values(zero(), false, &body), Ok(due.clone()));
            let checked = format!("{body}{}", checksum(&body));
            prop_assert_eq!(values(zero(), true, &checked), Ok(due));
        }

        #[test]
        fn no_text_upsets_the_reader(text in "[ -~\u{e9}]{0,90}", checked in any::<bool>()) {
            let _ = values(zero(), checked, &text);
            let _ = announcement(zero(), Sdi12Kind::Measurement, &text);
        }
    }
}
