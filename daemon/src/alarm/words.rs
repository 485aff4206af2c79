//! One line for people: what, where, how large, since when, how sure. In the site's display units.

use std::fmt::Write as _;

use crate::record::{
    Cause, ChannelKind, Finding, Names, Size, SizeUnit, Stamp, Subject, UnitSystem,
};

const DAY: f64 = 86_400.0;
/// Julian year, as in drift specifications.
const YEAR: f64 = 365.25 * DAY;
/// Oil barrel of 42 US gallons.
const BARREL: f64 = 0.158_987_294_928;
const PSI: f64 = 6_894.757_293_168;
/// Conventional metre of water (1000 kg/m3, 9.80665 m/s2).
const METRE_OF_WATER: f64 = 9_806.65;
const FOOT: f64 = 0.3048;

/// A display unit: how many SI units it is, and its name.
#[derive(Debug, Clone, Copy)]
struct Unit(f64, &'static str);

fn pressure_unit(units: UnitSystem, size: f64) -> Unit {
    match units {
        UnitSystem::Metric if size.abs() >= 1e6 => Unit(1e6, "MPa"),
        UnitSystem::Metric => Unit(1e3, "kPa"),
        UnitSystem::Field => Unit(PSI, "psi"),
        UnitSystem::Head => Unit(METRE_OF_WATER, "m H2O"),
    }
}

fn rate_unit(units: UnitSystem) -> Unit {
    match units {
        UnitSystem::Field => Unit(BARREL / DAY, "bbl/d"),
        UnitSystem::Metric | UnitSystem::Head => Unit(1.0 / DAY, "m3/d"),
    }
}

fn length_unit(units: UnitSystem) -> Unit {
    match units {
        UnitSystem::Field => Unit(FOOT, "ft"),
        UnitSystem::Metric | UnitSystem::Head => Unit(1.0, "m"),
    }
}

/// Decimals that show `step` to `digits` significant digits, 0 to 6.
fn decimals(step: f64, digits: i32) -> usize {
    if !(step.is_finite() && step > 0.0) {
        return 2;
    }
    (0..6_usize)
        .find(|&d| {
            let d = i32::try_from(d).unwrap_or(0);
            step * 10_f64.powi(d) >= 10_f64.powi(digits - 1) * 0.999_999
        })
        .unwrap_or(6)
}

/// A value with a standard deviation, to the deviation's second digit.
fn spread(value: f64, sd: f64, unit: Unit) -> String {
    let (value, sd) = (value / unit.0, sd / unit.0);
    let places = decimals(sd, 2);
    format!("{value:.places$} ± {sd:.places$} {}", unit.1)
        .trim_end()
        .to_owned()
}

/// A value of a channel, to five digits or so.
pub(super) fn value(kind: ChannelKind, si: f64, units: UnitSystem) -> String {
    let unit = match kind {
        ChannelKind::Pressure | ChannelKind::Barometer => pressure_unit(units, si),
        ChannelKind::Rate => rate_unit(units),
        ChannelKind::Stage => length_unit(units),
        ChannelKind::Temperature => Unit(1.0, "degC"),
        ChannelKind::Rain => Unit(1e-3 / DAY, "mm/d"),
    };
    let shown = si / unit.0;
    let places = decimals(shown.abs() / 1000.0, 1).max(1);
    format!("{shown:.places$} {}", unit.1)
}

/// A length of time in the unit that reads best.
pub(crate) fn duration(seconds: f64) -> String {
    let (value, unit) = if seconds >= 2.0 * DAY {
        (seconds / DAY, "d")
    } else if seconds >= 5400.0 {
        (seconds / 3600.0, "h")
    } else if seconds >= 120.0 {
        (seconds / 60.0, "min")
    } else {
        (seconds, "s")
    };
    let places = usize::from(value < 10.0 && (value - value.round()).abs() > 0.05);
    format!("{value:.places$} {unit}")
}

/// An instant to the minute, in UTC.
pub(crate) fn minute(at: Stamp) -> String {
    let text = at.to_string();
    match (text.get(..10), text.get(11..16)) {
        (Some(day), Some(time)) => format!("{day} {time} UTC"),
        _ => text,
    }
}

/// A size with its standard deviation.
pub(crate) fn size(size: &Size, cause: Cause, units: UnitSystem) -> String {
    let unit = match size.unit {
        SizeUnit::CubicMetrePerSecond => rate_unit(units),
        SizeUnit::Pascal => pressure_unit(units, size.value),
        SizeUnit::PascalPerSecond => match units {
            UnitSystem::Metric => Unit(1e3 / YEAR, "kPa/yr"),
            UnitSystem::Field => Unit(PSI / YEAR, "psi/yr"),
            UnitSystem::Head => Unit(METRE_OF_WATER / YEAR, "m H2O/yr"),
        },
        SizeUnit::Ratio if cause == Cause::WellSkin => Unit(1.0, ""),
        SizeUnit::Ratio => Unit(0.01, "%"),
    };
    spread(size.value, size.sd, unit)
}

/// A cause in plain words.
pub(crate) fn plain(cause: Cause) -> &'static str {
    match cause {
        Cause::Leak => "leak",
        Cause::CrossLayer => "flow between layers",
        Cause::Interference => "interference",
        Cause::Barrier => "barrier",
        Cause::Support => "pressure support",
        Cause::GaugeStep => "gauge step",
        Cause::GaugeDrift => "gauge drift",
        Cause::GaugeStuck => "gauge stuck",
        Cause::GaugeScale => "gauge scale",
        Cause::GaugeClock => "gauge clock",
        Cause::MeterScale => "meter scale",
        Cause::WellSkin => "well skin",
        Cause::Unexplained => "unexplained departure",
    }
}

/// A finding in one line.
pub(super) fn finding(finding: &Finding, names: &Names) -> String {
    let units = names.units;
    let Some(leading) = finding.causes.first() else {
        return "unexplained departure".to_owned();
    };
    let mut line = plain(leading.cause).to_owned();
    if let Some(s) = &finding.size {
        let _ = write!(line, " of {}", size(s, leading.cause, units));
    }
    match (leading.subject, finding.place) {
        (Some(subject), place) if subject != Subject::Place || place.is_none() => {
            if let Some(name) = names.subject(subject) {
                let _ = write!(line, " at {name}");
            }
        }
        (_, Some(place)) => {
            let Unit(scale, unit) = length_unit(units);
            let (x, y) = (place.x / scale, place.y / scale);
            let _ = write!(line, " near ({x:.0} {unit}, {y:.0} {unit})");
            if names.layers.len() > 1 {
                let _ = write!(line, " in {}", names.layer(place.layer));
            }
        }
        _ => {}
    }
    if leading.cause == Cause::Unexplained && !finding.gauges.is_empty() {
        let at: Vec<String> = finding
            .gauges
            .iter()
            .take(3)
            .map(|g| names.gauge(g.0))
            .collect();
        let _ = write!(line, " at {}", at.join(", "));
    }
    let _ = write!(
        line,
        ", since {} ± {}",
        minute(Stamp::from_seconds(finding.onset)),
        duration(finding.onset_sd)
    );
    if finding.named {
        let _ = write!(line, "; leads with {:.2}", leading.probability);
    } else {
        let rivals: Vec<String> = finding
            .causes
            .iter()
            .take(3)
            .map(|w| {
                let name = w.subject.and_then(|s| names.subject(s));
                let at = name.map(|n| format!(" at {n}")).unwrap_or_default();
                format!("{}{at} {:.2}", plain(w.cause), w.probability)
            })
            .collect();
        let _ = write!(line, "; no cause named, candidates {}", rivals.join(", "));
    }
    line
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::{Place, Weighed};

    fn names(units: UnitSystem) -> Names {
        Names {
            site: "sorrel-flat".into(),
            units,
            gauges: vec!["O-1".into(), "O-2".into()],
            wells: vec!["I-1".into()],
            neighbours: vec![],
            layers: vec!["lower sand".into()],
        }
    }

    fn leak() -> Finding {
        Finding {
            block: 1,
            causes: vec![Weighed {
                cause: Cause::Leak,
                probability: 0.97,
                subject: Some(Subject::Place),
                log_evidence: 30.0,
            }],
            named: true,
            onset: Stamp::parse("2031-05-02T04:00:00Z").unwrap().seconds(),
            onset_sd: 10_800.0,
            size: Some(Size {
                value: 14.2 / DAY,
                sd: 1.1 / DAY,
                unit: SizeUnit::CubicMetrePerSecond,
            }),
            place: Some(Place {
                x: 310.0,
                y: -480.0,
                layer: 0,
                radius_90: 90.0,
            }),
            gauges: vec![(1, -2000.0, 40.0)],
            log_mixture: 12.0,
            log_threshold: 10.0,
        }
    }

    #[test]
    fn a_leak_reads_as_people_say_it() {
        assert_eq!(
            finding(&leak(), &names(UnitSystem::Metric)),
            "leak of 14.2 ± 1.1 m3/d near (310 m, -480 m), since 2031-05-02 04:00 UTC ± 3 h; leads with 0.97"
        );
        assert_eq!(
            finding(&leak(), &names(UnitSystem::Field)),
            "leak of 89.3 ± 6.9 bbl/d near (1017 ft, -1575 ft), since 2031-05-02 04:00 UTC ± 3 h; leads with 0.97"
        );
    }

    #[test]
    fn instruments_are_named_and_rivals_told() {
        let mut f = leak();
        f.named = false;
        f.place = None;
        f.causes = vec![
            Weighed {
                cause: Cause::GaugeStep,
                probability: 0.55,
                subject: Some(Subject::Gauge(1)),
                log_evidence: 20.0,
            },
            Weighed {
                cause: Cause::MeterScale,
                probability: 0.41,
                subject: Some(Subject::Well(0)),
                log_evidence: 19.7,
            },
        ];
        f.size = Some(Size {
            value: -1234.0,
            sd: 87.0,
            unit: SizeUnit::Pascal,
        });
        assert_eq!(
            finding(&f, &names(UnitSystem::Metric)),
            "gauge step of -1.234 ± 0.087 kPa at O-2, since 2031-05-02 04:00 UTC ± 3 h; no cause named, \
             candidates gauge step at O-2 0.55, meter scale at I-1 0.41"
        );
    }

    #[test]
    fn numbers_keep_the_digits_that_matter() {
        use ChannelKind::{Pressure, Rate};
        assert_eq!(value(Pressure, 6.1e6, UnitSystem::Metric), "6.100 MPa");
        assert_eq!(value(Pressure, 412_300.0, UnitSystem::Metric), "412.3 kPa");
        assert_eq!(value(Pressure, 6.1e6, UnitSystem::Field), "884.7 psi");
        assert_eq!(value(Pressure, 98_066.5, UnitSystem::Head), "10.00 m H2O");
        assert_eq!(value(Rate, 900.0 / DAY, UnitSystem::Metric), "900.0 m3/d");
        assert_eq!(duration(30.0), "30 s");
        assert_eq!(duration(5400.0), "1.5 h");
        assert_eq!(duration(400_000.0), "4.6 d");
        // Deviations that are no numbers must not hang or panic.
        assert!(spread(1.0, f64::NAN, Unit(1.0, "m")).contains("NaN"));
    }
}
