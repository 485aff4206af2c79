//! How readings and enumerations are written in columns, and read back.

use serde::Serialize;
use serde::de::DeserializeOwned;

use super::error::{Result, StoreError};
use crate::record::{ChannelId, ClockEpoch, ClockState, DeviceStatus, Quality, Reading, Stamp};

/// Columns of a reading: channel, sampled, epoch, received, value, raw, quality, device, clock.
pub(super) type ReadingRow = (i64, i64, i64, i64, Option<f64>, Option<f64>, i64, i64, i64);

pub(super) fn reading(row: ReadingRow, channel: ChannelId) -> Result<Reading> {
    let (_, sampled, epoch, received, value, raw, quality, device, clock) = row;
    let bad = |what: &str, found: i64| {
        StoreError::unreadable(
            format!("the reading of {channel} at {}", Stamp(sampled)),
            format!("{what} {found}"),
        )
    };
    Ok(Reading {
        sampled: Stamp(sampled),
        received: Stamp(received),
        epoch: ClockEpoch(u32::try_from(epoch).map_err(|_| bad("clock epoch", epoch))?),
        value,
        raw,
        quality: Quality::from_flag(quality).ok_or_else(|| bad("quality", quality))?,
        device: device_from(device).ok_or_else(|| bad("device status", device))?,
        clock: clock_from(clock).ok_or_else(|| bad("clock state", clock))?,
        channel,
    })
}

pub(super) fn device_code(device: DeviceStatus) -> i64 {
    match device {
        DeviceStatus::Normal => 0,
        DeviceStatus::Failure => 1,
        DeviceStatus::FunctionCheck => 2,
        DeviceStatus::OutOfSpecification => 3,
        DeviceStatus::MaintenanceRequired => 4,
    }
}

fn device_from(code: i64) -> Option<DeviceStatus> {
    Some(match code {
        0 => DeviceStatus::Normal,
        1 => DeviceStatus::Failure,
        2 => DeviceStatus::FunctionCheck,
        3 => DeviceStatus::OutOfSpecification,
        4 => DeviceStatus::MaintenanceRequired,
        _ => return None,
    })
}

pub(super) fn clock_code(clock: ClockState) -> i64 {
    match clock {
        ClockState::Synchronised => 0,
        ClockState::Holdover => 1,
        ClockState::Unsynchronised => 2,
        ClockState::Foreign => 3,
    }
}

fn clock_from(code: i64) -> Option<ClockState> {
    Some(match code {
        0 => ClockState::Synchronised,
        1 => ClockState::Holdover,
        2 => ClockState::Unsynchronised,
        3 => ClockState::Foreign,
        _ => return None,
    })
}

/// The spelling of a plain enumeration, which is the one it has in events and commands.
pub(super) fn spelled<T: Serialize>(what: &'static str, value: &T) -> Result<String> {
    match serde_json::to_value(value) {
        Ok(serde_json::Value::String(text)) => Ok(text),
        Ok(other) => Err(StoreError::Unwritable {
            what,
            why: format!("{other} is no single word"),
        }),
        Err(e) => Err(StoreError::Unwritable {
            what,
            why: e.to_string(),
        }),
    }
}

/// The value of a spelling.
pub(super) fn from_spelled<T: DeserializeOwned>(what: &'static str, text: &str) -> Result<T> {
    serde_json::from_value(serde_json::Value::String(text.to_owned()))
        .map_err(|e| StoreError::unreadable(what, e))
}

/// Writes as JSON what must read back the same: JSON has no word for infinity or NaN, and a number lost that
/// way would only be missed at the next start.
pub(super) fn to_json<T>(what: &'static str, value: &T) -> Result<String>
where
    T: Serialize + DeserializeOwned + PartialEq,
{
    let unwritable = |why: String| StoreError::Unwritable { what, why };
    let text = serde_json::to_string(value).map_err(|e| unwritable(e.to_string()))?;
    match serde_json::from_str::<T>(&text) {
        Ok(back) if back == *value => Ok(text),
        Ok(_) => Err(unwritable("it reads back differently".to_owned())),
        Err(e) => Err(unwritable(format!(
            "it does not read back ({e}); is a number in it not finite?"
        ))),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::RejectReason;

    #[test]
    fn codes_read_back() {
        for code in 0..5 {
            assert_eq!(device_code(device_from(code).unwrap()), code);
        }
        for code in 0..4 {
            assert_eq!(clock_code(clock_from(code).unwrap()), code);
        }
        assert!(device_from(5).is_none() && clock_from(4).is_none());
    }

    #[test]
    fn spellings_are_those_of_events_and_read_back() {
        let word = spelled("a reason", &RejectReason::NotANumber).unwrap();
        assert_eq!(word, RejectReason::NotANumber.name());
        assert_eq!(
            from_spelled::<RejectReason>("a reason", &word).unwrap(),
            RejectReason::NotANumber
        );
        assert!(from_spelled::<RejectReason>("a reason", "no-such").is_err());
        assert!(spelled("a pair", &(1, 2)).is_err());
    }

    #[test]
    fn what_json_cannot_say_is_refused() {
        assert!(to_json("a number", &1.5_f64).is_ok());
        assert!(to_json("a number", &f64::NAN).is_err());
        assert!(to_json("a number", &f64::NEG_INFINITY).is_err());
        assert!(to_json("an absent number", &Some(f64::INFINITY)).is_err());
    }
}
