//! What a channel asks of its readings: `quality`.

use std::time::Duration;

use borewake_model::units::Dimension;

use super::super::QualityTests;
use super::super::section::Section;
use super::super::values::Sign;
use super::sources::dimension;
use crate::record::ChannelKind;

/// Window of the manual's rate of change test.
const WINDOW: Duration = Duration::from_secs(25 * 3600);

/// Reads `quality`.
pub(super) fn quality(
    channel: &mut Section<'_>,
    kind: Option<ChannelKind>,
) -> Option<QualityTests> {
    if !channel.has("quality") {
        channel.take("quality");
        return None;
    }
    let of = kind.map_or(Dimension::Pressure, dimension);
    let mut table = channel.table("quality")?;
    let span = range(&mut table, "span", of);
    let usual = range(&mut table, "usual", of);
    let flat = table.whole_number::<u32>("flat", 2, 1_000_000);
    let jump = table.number("jump");
    if let Some(jump) = &jump
        && jump.value <= 0.0
    {
        let what = "a jump is so many standard deviations, above zero";
        table.wrong("jump", jump, what, "such as 6, or leave it out");
    }
    let least = table.quantity("least", of, Sign::Positive);
    let most = Duration::from_secs(400 * 86_400);
    let window = table.duration("window", Duration::from_secs(60), most);
    table.close();
    Some(QualityTests {
        span,
        usual,
        flat: flat.map(|f| f.value),
        jump: jump.map(|j| j.value),
        least: least.map(|l| l.value),
        window: window.map_or(WINDOW, |w| w.value),
    })
}

/// Reads a pair of quantities, the smaller first.
fn range(table: &mut Section<'_>, key: &'static str, of: Dimension) -> Option<(f64, f64)> {
    let found = table.take(key)?;
    let items = found.get_ref().as_array().map(|a| a.as_ref());
    if let Some([low, high]) = items {
        let low = table.quantity_of(key, low, of, Sign::Any)?;
        let high = table.quantity_of(key, high, of, Sign::Any)?;
        if low.value < high.value {
            return Some((low.value, high.value));
        }
        let what = "the second of the two is not above the first";
        table.wrong(key, &high, what, "write the lower one first");
        return None;
    }
    let mend = format!("write {key} = [\"…\", \"{}\"]", of.example());
    table.due(key, found, "a pair of quantities", &mend);
    None
}
