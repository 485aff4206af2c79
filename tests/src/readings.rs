//! Seeded readings for tests: a gauge that walks up and down through a limit.

use std::path::Path;
use std::time::{Duration, SystemTime};

use crate::stored::Stored;
use crate::{Publisher, until};

/// The reading that [`heard`] leaves in `o.pressure`: its value \[Pa\], older than all that tests send.
pub const PROBE: f64 = 5e6;

/// Waits until the daemon hears what is published for gauge O: a broker keeps nothing for a client it has not met yet.
pub async fn heard(publisher: &mut Publisher, store: &Path) {
    let mut stored = Stored::open(store).await;
    until("the daemon to hear the broker", async || {
        publisher
            .publish("pads/o/p", "{\"p\": 5000, \"t\": \"2021-04-30T00:00:00Z\"}")
            .await;
        (!stored.readings("o.pressure").await.is_empty()).then_some(())
    })
    .await;
}

/// A small generator of numbers (splitmix64), so that tests need no crate and the same seed gives the same run.
pub struct Dice(pub u64);

impl Dice {
    /// The next number.
    pub fn roll(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// A number from `low` to below `high`.
    pub fn within(&mut self, low: u64, high: u64) -> u64 {
        low + self.roll() % (high - low)
    }
}

/// An instant in RFC 3339, `seconds` after the first of May 2021, long past on any clock.
#[must_use]
pub fn instant(seconds: u64) -> String {
    let (day, rest) = (seconds / 86400, seconds % 86400);
    assert!(day < 28, "stay within the month");
    format!(
        "2021-05-{:02}T{:02}:{:02}:{:02}Z",
        day + 1,
        rest / 3600,
        rest / 60 % 60,
        rest % 60
    )
}

/// An instant of the present in RFC 3339, moved by `seconds`.
#[must_use]
pub fn now_plus(seconds: i64) -> String {
    let shift = Duration::from_secs(seconds.unsigned_abs());
    let then = if seconds < 0 {
        SystemTime::now() - shift
    } else {
        SystemTime::now() + shift
    };
    let since = then
        .duration_since(SystemTime::UNIX_EPOCH)
        .expect("after 1970");
    rfc3339(since.as_millis())
}

/// Milliseconds since 1970 as RFC 3339 in UTC (days to civil date after Hinnant, 2013).
fn rfc3339(millis: u128) -> String {
    let seconds = (millis / 1000) as i64;
    let (days, rest) = (seconds.div_euclid(86400), seconds.rem_euclid(86400));
    let z = days + 719_468;
    let era = z.div_euclid(146_097);
    let of_era = z.rem_euclid(146_097);
    let year = (of_era - of_era / 1460 + of_era / 36_524 - of_era / 146_096) / 365;
    let of_year = of_era - (365 * year + year / 4 - year / 100);
    let m = (5 * of_year + 2) / 153;
    let (day, month) = (
        of_year - (153 * m + 2) / 5 + 1,
        if m < 10 { m + 3 } else { m - 9 },
    );
    let year = year + era * 400 + i64::from(month <= 2);
    format!(
        "{year:04}-{month:02}-{day:02}T{:02}:{:02}:{:02}.{:03}Z",
        rest / 3600,
        rest / 60 % 60,
        rest % 60,
        millis % 1000
    )
}

#[cfg(test)]
mod tests {
    use super::{instant, rfc3339};

    #[test]
    fn instants_are_written_as_rfc_3339() {
        assert_eq!(instant(86_400 + 3661), "2021-05-02T01:01:01Z");
        // `date -u -d @1935705600` of GNU coreutils says the same.
        assert_eq!(rfc3339(1_935_705_600_123), "2031-05-05T00:00:00.123Z");
    }
}
