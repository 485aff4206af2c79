//! How readings and enumerations are written in columns, and read back.

use super::error::{Result, StoreError};
use crate::record::{
    Acknowledgement, AlarmKind, ChannelId, ClockEpoch, ClockState, Condition, DeviceStatus, Latch,
    Priority, Quality, Reading, Stamp, Suppression, TransitionKind,
};

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

pub(super) fn transition_code(kind: TransitionKind) -> &'static str {
    match kind {
        TransitionKind::Raised => "raised",
        TransitionKind::Acknowledged => "acknowledged",
        TransitionKind::Returned => "returned",
        TransitionKind::Changed => "changed",
        TransitionKind::Revised => "revised",
        TransitionKind::Adopted => "adopted",
    }
}

pub(super) fn transition_from(code: &str) -> Option<TransitionKind> {
    Some(match code {
        "raised" => TransitionKind::Raised,
        "acknowledged" => TransitionKind::Acknowledged,
        "returned" => TransitionKind::Returned,
        "changed" => TransitionKind::Changed,
        "revised" => TransitionKind::Revised,
        "adopted" => TransitionKind::Adopted,
        _ => return None,
    })
}

pub(super) fn kind_code(kind: AlarmKind) -> &'static str {
    match kind {
        AlarmKind::Limit => "limit",
        AlarmKind::Watch => "watch",
        AlarmKind::Blind => "blind",
    }
}

pub(super) fn condition_code(condition: Condition) -> &'static str {
    match condition {
        Condition::Present => "present",
        Condition::Absent => "absent",
    }
}

pub(super) fn acknowledgement_code(acknowledgement: Acknowledgement) -> &'static str {
    match acknowledgement {
        Acknowledgement::Acknowledged => "acknowledged",
        Acknowledgement::Unacknowledged => "unacknowledged",
    }
}

pub(super) fn latch_code(latch: Latch) -> &'static str {
    match latch {
        Latch::None => "none",
        Latch::Open => "open",
        Latch::Set => "set",
    }
}

pub(super) fn suppression_code(suppression: &Suppression) -> &'static str {
    match suppression {
        Suppression::None => "none",
        Suppression::Shelved { .. } => "shelved",
        Suppression::Design { .. } => "design",
        Suppression::OutOfService => "out-of-service",
    }
}

pub(super) fn priority_code(priority: Priority) -> &'static str {
    match priority {
        Priority::Low => "low",
        Priority::Medium => "medium",
        Priority::High => "high",
    }
}

/// Writes as JSON what must read back the same: JSON has no word for infinity or NaN, and a number lost that
/// way would only be missed at the next start.
pub(super) fn to_json<T>(what: &'static str, value: &T) -> Result<String>
where
    T: serde::Serialize + serde::de::DeserializeOwned + PartialEq,
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

    #[test]
    fn codes_read_back() {
        for code in 0..5 {
            assert_eq!(device_code(device_from(code).unwrap()), code);
        }
        for code in 0..4 {
            assert_eq!(clock_code(clock_from(code).unwrap()), code);
        }
        assert!(device_from(5).is_none() && clock_from(4).is_none());
        for kind in [
            TransitionKind::Raised,
            TransitionKind::Acknowledged,
            TransitionKind::Returned,
            TransitionKind::Changed,
            TransitionKind::Revised,
            TransitionKind::Adopted,
        ] {
            assert_eq!(transition_from(transition_code(kind)), Some(kind));
        }
    }

    #[test]
    fn what_json_cannot_say_is_refused() {
        assert!(to_json("a number", &1.5_f64).is_ok());
        assert!(to_json("a number", &f64::NAN).is_err());
        assert!(to_json("a number", &f64::NEG_INFINITY).is_err());
        assert!(to_json("an absent number", &Some(f64::INFINITY)).is_err());
    }
}
