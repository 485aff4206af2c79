//! Where the ticks of an axis stand, and what is written at them.

use jiff::civil::Date;
use jiff::tz::Offset;

use crate::record::Stamp;

const HOUR: i64 = 3600 * Stamp::SECOND;
const DAY: i64 = 24 * HOUR;
/// 1970-01-01 was a Thursday; ticks of whole weeks stand on Mondays.
const FIRST_MONDAY: i64 = 4 * DAY;

/// Tick distances below a month.
const STEPS: [i64; 12] = [
    60 * Stamp::SECOND,
    600 * Stamp::SECOND,
    1800 * Stamp::SECOND,
    HOUR,
    3 * HOUR,
    6 * HOUR,
    12 * HOUR,
    DAY,
    2 * DAY,
    7 * DAY,
    14 * DAY,
    28 * DAY,
];

/// Ticks of a value axis: one, two or five times a power of ten apart, about `count` of them, with as many decimals as they need.
pub(super) fn values(low: f64, high: f64, count: f64) -> Vec<(f64, String)> {
    let span = high - low;
    if !(span.is_finite() && span > 0.0) {
        return Vec::new();
    }
    let rough = span / count;
    let power = 10_f64.powf(rough.log10().floor());
    let step = [1.0, 2.0, 5.0, 10.0]
        .into_iter()
        .map(|m| m * power)
        .find(|s| *s >= rough)
        .unwrap_or(rough);
    let decimals = decimals(step);
    let mut ticks = Vec::new();
    // Counted, so that rounding never adds up; far from zero a step may be lost in the digits, and no tick is right then.
    let first = (low / step).ceil();
    for n in 0..20 {
        let value = (first + f64::from(n)) * step;
        if value > high + 1e-9 * span {
            break;
        }
        // The sum turns a negative zero into a plain one.
        let shown = format!("{:.decimals$}", value + 0.0);
        ticks.push((value, shown.replace('-', "\u{2212}")));
    }
    ticks
}

/// Decimals that show a step of one, two or five times a power of ten.
fn decimals(step: f64) -> usize {
    (0..12)
        .find(|d| {
            let shown = step * 10_f64.powi(*d);
            (shown - shown.round()).abs() < 1e-6 * shown
        })
        .and_then(|d| usize::try_from(d).ok())
        .unwrap_or(12)
}

/// Ticks of a time axis in UTC, at most `most` of them.
pub(super) fn times(from: Stamp, to: Stamp, most: i64) -> Vec<(Stamp, String)> {
    let span = to.0.saturating_sub(from.0).max(1);
    match STEPS.into_iter().find(|step| span / step < most) {
        Some(step) => even(from, to, step),
        None => months(from, to, span, most),
    }
}

/// Ticks at even distances.
fn even(from: Stamp, to: Stamp, step: i64) -> Vec<(Stamp, String)> {
    let zero = if step >= 7 * DAY { FIRST_MONDAY } else { 0 };
    let first = (from.0.saturating_sub(zero)).div_euclid(step) * step + zero;
    (0..64)
        .map(|n| Stamp(first.saturating_add(n * step)))
        .skip_while(|s| *s < from)
        .take_while(|s| *s <= to)
        .map(|s| (s, label(s, step)))
        .collect()
}

/// What is written at a tick: the day, or the time within it.
fn label(at: Stamp, step: i64) -> String {
    let Some(civil) = civil(at) else {
        return String::new();
    };
    if step < DAY && at.0.rem_euclid(DAY) != 0 {
        return format!("{:02}:{:02}", civil.hour(), civil.minute());
    }
    format!("{} {}", civil.day(), month(civil.month()))
}

/// Ticks at the first of months.
fn months(from: Stamp, to: Stamp, span: i64, most: i64) -> Vec<(Stamp, String)> {
    let (Some(start), Some(end)) = (civil(from), civil(to)) else {
        return Vec::new();
    };
    let count = span / (30 * DAY);
    let every = [1, 2, 3, 6, 12, 24, 60, 120]
        .into_iter()
        .find(|m| count / m < most)
        .unwrap_or(240);
    let number = |year: i16, month: i8| i64::from(year) * 12 + i64::from(month) - 1;
    let last = number(end.year(), end.month());
    let mut n = number(start.year(), start.month()).div_euclid(every) * every;
    let mut ticks = Vec::new();
    while n <= last && ticks.len() < 64 {
        let year = i16::try_from(n.div_euclid(12)).ok();
        let month_of_year = i8::try_from(n.rem_euclid(12) + 1).ok();
        let first = year.zip(month_of_year).and_then(|(y, m)| first_of(y, m));
        if let Some((at, y, m)) = first.filter(|(at, _, _)| (from..=to).contains(at)) {
            let text = if m == 1 {
                y.to_string()
            } else {
                month(m).to_owned()
            };
            ticks.push((at, text));
        }
        n += every;
    }
    ticks
}

/// Midnight at the first of a month.
fn first_of(year: i16, month: i8) -> Option<(Stamp, i16, i8)> {
    let date = Date::new(year, month, 1).ok()?;
    let at = Offset::UTC.to_timestamp(date.at(0, 0, 0, 0)).ok()?;
    Some((Stamp(at.as_microsecond()), year, month))
}

/// An instant as a date and time in UTC.
pub(super) fn civil(at: Stamp) -> Option<jiff::civil::DateTime> {
    let instant = jiff::Timestamp::from_microsecond(at.0).ok()?;
    Some(Offset::UTC.to_datetime(instant))
}

fn month(number: i8) -> &'static str {
    const MONTHS: [&str; 12] = [
        "Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec",
    ];
    usize::try_from(number - 1)
        .ok()
        .and_then(|index| MONTHS.get(index).copied())
        .unwrap_or("")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn texts<T>(ticks: Vec<(T, String)>) -> Vec<String> {
        ticks.into_iter().map(|(_, text)| text).collect()
    }

    fn between(from: &str, to: &str) -> Vec<String> {
        let at = |t| Stamp::parse(t).unwrap();
        texts(times(at(from), at(to), 7))
    }

    #[test]
    fn value_ticks_are_round() {
        assert_eq!(
            texts(values(0.0, 1.0, 5.0)),
            ["0.0", "0.2", "0.4", "0.6", "0.8", "1.0"]
        );
        assert_eq!(texts(values(-30.0, 70.0, 4.0)), ["0", "50"]);
        assert_eq!(
            texts(values(20_419.5, 20_421.0, 4.0)),
            ["20419.5", "20420.0", "20420.5", "20421.0"]
        );
        assert_eq!(texts(values(1.0, 1.0, 5.0)), Vec::<String>::new());
        assert_eq!(texts(values(f64::NAN, 1.0, 5.0)), Vec::<String>::new());
    }

    #[test]
    fn time_ticks_stand_on_days_and_months() {
        assert_eq!(
            between("2031-03-01T05:00:00Z", "2031-03-02T04:00:00Z"),
            ["06:00", "12:00", "18:00", "2 Mar"]
        );
        assert_eq!(
            between("2031-04-15T00:00:00Z", "2031-06-08T00:00:00Z"),
            ["21 Apr", "5 May", "19 May", "2 Jun"]
        );
        assert_eq!(
            between("2031-10-20T00:00:00Z", "2032-06-08T00:00:00Z"),
            ["Nov", "2032", "Mar", "May"]
        );
        assert_eq!(
            between("2031-10-20T00:00:00Z", "2031-10-20T00:00:00Z").len(),
            1
        );
    }
}
