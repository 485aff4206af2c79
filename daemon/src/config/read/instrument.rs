//! What a channel says of the instrument behind it: `convert`, `reference` and `column`.

use std::sync::Arc;
use std::time::Duration;

use borewake_model::units::Dimension;
use toml::de::DeValue;

use super::super::section::{At, Section};
use super::super::values::{Sign, plain_number};
use super::super::{
    Barometric, Companion, CurrentLoop, FluidColumn, Instrument, Polynomial, Quartz,
    ReferenceChange, Thermal, Thermistor, Totaliser, VibratingWire, WireForm, WireReading,
    WireSense, Zero,
};
use super::sources::dimension;
use crate::record::{ChannelId, ChannelKind};

/// Standard gravity \[m/s2\], where the site states none.
const GRAVITY: f64 = 9.806_65;

/// How far apart a companion's reading may lie where nothing is stated.
const WITHIN: Duration = Duration::from_secs(3600);

/// The same for two frequencies of one gauge, which belong to one instant.
const AT_ONCE: Duration = Duration::from_secs(5);

/// What a channel says of its instrument.
#[derive(Default)]
pub(super) struct InstrumentRead {
    pub(super) instrument: Option<Arc<Instrument>>,
    pub(super) reference: Option<Arc<ReferenceChange>>,
    pub(super) column: Option<FluidColumn>,
    pub(super) companions: Vec<CompanionRead>,
}

/// A channel named by another.
pub(super) struct CompanionRead {
    pub(super) key: String,
    pub(super) channel: At<String>,
    pub(super) kind: ChannelKind,
}

#[derive(Clone, Copy, PartialEq)]
enum Kind {
    CurrentLoop,
    VibratingWire,
    Thermistor,
    Quartz,
    Polynomial,
    Totaliser,
}

/// Reads all three. `unit` leads from the channel's unit to SI: scale and offset.
pub(super) fn instrument(
    channel: &mut Section<'_>,
    kind: Option<ChannelKind>,
    unit: (f64, f64),
) -> InstrumentRead {
    let mut read = InstrumentRead::default();
    if channel.has("convert") {
        let instrument = convert(channel, kind, unit, &mut read.companions);
        read.instrument = instrument.map(Arc::new);
    } else {
        channel.take("convert");
    }
    if channel.has("reference") {
        let reference = reference(channel, kind, &mut read.companions);
        read.reference = reference.map(Arc::new);
    } else {
        channel.take("reference");
    }
    if channel.has("column") {
        read.column = column(channel, kind);
    } else {
        channel.take("column");
    }
    read
}

fn convert(
    channel: &mut Section<'_>,
    kind: Option<ChannelKind>,
    unit: (f64, f64),
    companions: &mut Vec<CompanionRead>,
) -> Option<Instrument> {
    let mut table = channel.table("convert")?;
    let kinds = [
        ("current-loop", Kind::CurrentLoop),
        ("vibrating-wire", Kind::VibratingWire),
        ("thermistor", Kind::Thermistor),
        ("quartz", Kind::Quartz),
        ("polynomial", Kind::Polynomial),
        ("totaliser", Kind::Totaliser),
    ];
    let which = table.must("kind", "kind = \"current-loop\"", |t, k| t.word(k, &kinds));
    let Some(which) = which else {
        table.close_partly();
        return None;
    };
    let due = match which {
        Kind::CurrentLoop | Kind::Polynomial => kind,
        Kind::VibratingWire | Kind::Quartz => kind
            .filter(|k| *k == ChannelKind::Barometer)
            .or(Some(ChannelKind::Pressure)),
        Kind::Thermistor => Some(ChannelKind::Temperature),
        Kind::Totaliser => Some(ChannelKind::Rate),
    };
    if let (Some(due), Some(found)) = (due, kind)
        && due != found
    {
        let what = format!(
            "it measures a {}, and the channel is a {}",
            due.name(),
            found.name()
        );
        let mend = format!(
            "write kind = \"{}\" for the channel, or take another conversion",
            due.name()
        );
        table
            .report
            .value(&table.value_span("kind"), table.key("kind"), what, mend);
    }
    let instrument = match which {
        Kind::CurrentLoop => current_loop(&mut table, kind),
        Kind::VibratingWire => vibrating_wire(&mut table, companions),
        Kind::Thermistor => thermistor(&mut table),
        Kind::Quartz => quartz(&mut table, unit, companions),
        Kind::Polynomial => polynomial(&mut table, unit),
        Kind::Totaliser => totaliser(&mut table),
    };
    table.close();
    instrument
}

fn current_loop(table: &mut Section<'_>, kind: Option<ChannelKind>) -> Option<Instrument> {
    let of = kind.map_or(Dimension::Pressure, dimension);
    let low = table.must("low", "low = \"0 kPa\", the value at 4 mA", |t, k| {
        t.quantity(k, of, Sign::Any)
    });
    let high = table.must("high", "high = \"400 kPa\", the value at 20 mA", |t, k| {
        t.quantity(k, of, Sign::Any)
    });
    let hold = table.duration("hold", Duration::ZERO, Duration::from_secs(3600));
    let (low, high) = (low?, high?);
    if low.value == high.value {
        let what = "4 mA and 20 mA mean the same";
        table.wrong("high", &high, what, "give the value at 20 mA");
    }
    Some(Instrument::CurrentLoop(CurrentLoop {
        low: low.value,
        high: high.value,
        hold: hold.map_or(Duration::from_secs(4), |h| h.value),
    }))
}

fn vibrating_wire(
    table: &mut Section<'_>,
    companions: &mut Vec<CompanionRead>,
) -> Option<Instrument> {
    let readings = [
        ("digits", WireReading::Digits),
        ("hertz", WireReading::Hertz),
        ("microseconds", WireReading::Microseconds),
    ];
    let mend = "reads = \"digits\", \"hertz\" or \"microseconds\", what the readout delivers";
    let reads = table.must("reads", mend, |t, k| t.word(k, &readings));
    let mend = "form = \"linear\" or \"polynomial\", as the certificate has it";
    let linear = table.must("form", mend, |t, k| {
        t.word(k, &[("linear", true), ("polynomial", false)])
    });
    let mend = "zero = 8900, the reading at installation in digits";
    let zero = table.must("zero", mend, Section::number);
    let pressure = |t: &mut Section<'_>, k| t.quantity(k, Dimension::Pressure, Sign::Any);
    let form = match linear {
        Some(true) => {
            let senses = [
                ("zero-minus-reading", WireSense::ZeroMinusReading),
                ("reading-minus-zero", WireSense::ReadingMinusZero),
            ];
            let mend = "sense = \"zero-minus-reading\" for G (R0 - R1), \"reading-minus-zero\" for G (R1 - R0): makers differ";
            let sense = table.must("sense", mend, |t, k| t.word(k, &senses));
            let mend = "factor = \"0.25 kPa\", G, a digit";
            let factor = table.must("factor", mend, pressure);
            sense.zip(factor).map(|(sense, factor)| WireForm::Linear {
                factor: factor.value,
                sense,
            })
        }
        Some(false) => {
            let a = table.must("a", "a = \"-1.2e-6 kPa\", A, a digit squared", pressure);
            let b = table.must("b", "b = \"-0.23 kPa\", B, a digit", pressure);
            table.noted(
                "c",
                "the certificate's C belongs to another day's atmosphere: C here is such that the zero reading gives 0",
            );
            a.zip(b).map(|(a, b)| WireForm::Polynomial {
                a: a.value,
                b: b.value,
            })
        }
        None => None,
    };
    let within = within(table, WITHIN);
    let temperature = companion(
        table,
        "temperature",
        ChannelKind::Temperature,
        within,
        companions,
    );
    let mut thermal = None;
    if let Some(temperature) = temperature {
        let mend = "temperature_factor = \"-0.1 kPa\", K, a kelvin";
        let factor = table.must("temperature_factor", mend, pressure);
        let mend = "zero_temperature = \"12 degC\", T0";
        let zero = table.must("zero_temperature", mend, |t, k| {
            t.quantity(k, Dimension::Temperature, Sign::Any)
        });
        thermal = factor.zip(zero).map(|(factor, zero)| Thermal {
            factor: factor.value,
            zero: zero.value,
            temperature,
        });
    }
    let barometer = companion(
        table,
        "barometer",
        ChannelKind::Barometer,
        within,
        companions,
    );
    let mut barometric = None;
    if let Some(barometer) = barometer {
        let mend = "zero_barometer = \"101.3 kPa\", S0";
        let zero = table.must("zero_barometer", mend, pressure);
        barometric = zero.map(|zero| Barometric {
            zero: zero.value,
            barometer,
        });
    }
    Some(Instrument::VibratingWire(VibratingWire {
        reads: reads?,
        form: form?,
        zero: zero?.value,
        thermal,
        barometric,
    }))
}

fn thermistor(table: &mut Section<'_>) -> Option<Instrument> {
    let mut coefficient = |key, mend: &str| table.must(key, mend, Section::number).map(|c| c.value);
    let a = coefficient("a", "a = 1.4051e-3, of the thermistor's own type");
    let b = coefficient("b", "b = 2.369e-4");
    let c = coefficient("c", "c = 1.019e-7");
    Some(Instrument::Thermistor(Thermistor {
        a: a?,
        b: b?,
        c: c?,
    }))
}

fn quartz(
    table: &mut Section<'_>,
    unit: (f64, f64),
    companions: &mut Vec<CompanionRead>,
) -> Option<Instrument> {
    let within = within(table, AT_ONCE);
    let key = "temperature";
    if !table.has(key) {
        table.must(
            key,
            "temperature = \"p1.temperature\", the channel of the temperature frequency",
            |_, _| None::<()>,
        );
    }
    let temperature = companion(table, key, ChannelKind::Temperature, within, companions);
    let mut number = |key, mend: &str| table.must(key, mend, Section::number).map(|c| c.value);
    let zero = number(
        "zero",
        "zero = 36000, the pressure frequency the polynomial counts from",
    );
    let temperature_zero = number(
        "temperature_zero",
        "temperature_zero = 172000, the temperature frequency it counts from",
    );
    let range = range(table, "range");
    let temperature_range = self::range(table, "temperature_range");
    let coefficients = coefficients(table);
    Some(Instrument::Quartz(Quartz {
        temperature: temperature?,
        zero: zero?,
        temperature_zero: temperature_zero?,
        coefficients: coefficients?,
        range: range?,
        temperature_range: temperature_range?,
        unit,
    }))
}

fn polynomial(table: &mut Section<'_>, unit: (f64, f64)) -> Option<Instrument> {
    let zero = table.number("zero");
    let range = range(table, "range");
    let coefficients = coefficients(table);
    Some(Instrument::Polynomial(Polynomial {
        zero: zero.map_or(0.0, |z| z.value),
        coefficients: coefficients?.into_iter().flatten().collect(),
        range: range?,
        unit,
    }))
}

fn totaliser(table: &mut Section<'_>) -> Option<Instrument> {
    let mend = "count = \"0.1 m3\", the volume of a count";
    let count = table.must("count", mend, volume);
    let wrap = table.number("wrap");
    if let Some(wrap) = &wrap
        && wrap.value <= 1.0
    {
        let what = "a meter that begins again at once counts nothing";
        table.wrong(
            "wrap",
            wrap,
            what,
            "such as 4294967296, or leave it out where it never does",
        );
    }
    let mend = "most = \"500 m3/d\": more than that is a reset or a fault";
    let most = table.must("most", mend, |t, k| {
        t.quantity(k, Dimension::Rate, Sign::Positive)
    });
    Some(Instrument::Totaliser(Totaliser {
        count: count?,
        wrap: wrap.map(|w| w.value),
        most: most?.value,
    }))
}

/// A volume: the units of rates, without their time.
fn volume(table: &mut Section<'_>, key: &'static str) -> Option<f64> {
    let text = table.text(key)?;
    match Dimension::Rate.parse(&format!("{}/s", text.value)) {
        Ok(volume) if volume > 0.0 => Some(volume),
        _ => {
            let what = "this is no volume above zero";
            table.wrong(
                key,
                &text,
                what,
                "such as \"0.1 m3\", \"1 L\", \"1 bbl\" or \"100 gal\"",
            );
            None
        }
    }
}

fn reference(
    channel: &mut Section<'_>,
    kind: Option<ChannelKind>,
    companions: &mut Vec<CompanionRead>,
) -> Option<ReferenceChange> {
    let mut table = channel.table("reference")?;
    pressures_only(&table, kind);
    let within = within(&mut table, WITHIN);
    let sealed = table.quantity("sealed_at", Dimension::Pressure, Sign::Positive);
    let words = [
        ("absolute", Some(Zero::Absolute)),
        ("vented", Some(Zero::Vented)),
        ("sealed", None),
    ];
    let mut zero = |key, mend: &str| {
        let word = table.must(key, mend, |t, k| t.word(k, &words))?;
        word.or_else(|| {
            let sealed = sealed.as_ref().map(|s| Zero::Sealed(s.value));
            if sealed.is_none() {
                table.report.missing(
                    &table.span,
                    table.whole(),
                    "the pressure sealed in is not stated",
                    "add sealed_at = \"101.3 kPa\", from the certificate",
                );
            }
            sealed
        })
    };
    let from = zero(
        "from",
        "from = \"vented\", \"sealed\" or \"absolute\": what is delivered",
    );
    let to = zero(
        "to",
        "to = \"absolute\", \"vented\" or \"sealed\": what is kept",
    );
    let vented = [from, to].contains(&Some(Zero::Vented));
    if vented && !table.has("barometer") {
        table.must(
            "barometer",
            "barometer = \"site.barometer\", the channel of the atmosphere",
            |_, _| None::<()>,
        );
    }
    let barometer = companion(
        &mut table,
        "barometer",
        ChannelKind::Barometer,
        within,
        companions,
    );
    table.close();
    Some(ReferenceChange {
        from: from?,
        to: to?,
        barometer,
    })
}

fn column(channel: &mut Section<'_>, kind: Option<ChannelKind>) -> Option<FluidColumn> {
    let mut table = channel.table("column")?;
    pressures_only(&table, kind);
    let mend = "depth = \"12 m\", how far the datum lies below the sensor";
    let depth = table.must("depth", mend, |t, k| {
        t.quantity(k, Dimension::Length, Sign::Any)
    });
    let mend = "density = \"1025 kg/m3\", of the fluid between";
    let density = table.must("density", mend, |t, k| {
        t.quantity(k, Dimension::Density, Sign::Positive)
    });
    let gravity = table.number("gravity");
    if let Some(gravity) = &gravity
        && !(9.7..=9.9).contains(&gravity.value)
    {
        let what = "gravity lies between 9.7 and 9.9 m/s2 anywhere on earth";
        table.wrong("gravity", gravity, what, "leave it out for 9.80665");
    }
    table.close();
    Some(FluidColumn {
        depth: depth?.value,
        density: density?.value,
        gravity: gravity.map_or(GRAVITY, |g| g.value),
    })
}

fn pressures_only(table: &Section<'_>, kind: Option<ChannelKind>) {
    if kind.is_some_and(|k| !matches!(k, ChannelKind::Pressure | ChannelKind::Barometer)) {
        let mend = "leave it out";
        table
            .report
            .missing(&table.span, table.whole(), "only pressures have it", mend);
    }
}

/// Reads how far apart a companion's reading may lie.
fn within(table: &mut Section<'_>, usual: Duration) -> Duration {
    let most = Duration::from_secs(30 * 86_400);
    let stated = table.duration("within", Duration::from_millis(1), most);
    stated.map_or(usual, |w| w.value)
}

/// Reads the name of another channel.
fn companion(
    table: &mut Section<'_>,
    key: &'static str,
    kind: ChannelKind,
    within: Duration,
    companions: &mut Vec<CompanionRead>,
) -> Option<Companion> {
    let channel = table.text(key)?;
    let id = ChannelId::from(channel.value.as_str());
    companions.push(CompanionRead {
        key: table.key(key),
        channel,
        kind,
    });
    Some(Companion {
        channel: id,
        within,
    })
}

/// Reads a pair of numbers, the smaller first.
fn range(table: &mut Section<'_>, key: &'static str) -> Option<(f64, f64)> {
    let mend = format!("{key} = [35000, 40000], what was calibrated");
    let found = table.must(key, &mend, |t, k| t.take(k))?;
    let numbers = found
        .get_ref()
        .as_array()
        .map(|a| a.iter().map(|v| number(v.get_ref())));
    let numbers: Option<Vec<f64>> = numbers.and_then(Iterator::collect);
    match numbers.as_deref() {
        Some([low, high]) if low < high => Some((*low, *high)),
        _ => {
            table.due(key, found, "a pair of numbers, the smaller first,", &mend);
            None
        }
    }
}

/// Reads rows of numbers; one row may stand alone.
fn coefficients(table: &mut Section<'_>) -> Option<Vec<Vec<f64>>> {
    let key = "coefficients";
    let mend = "coefficients = [[…], […]], a row for each power of the frequency, in rising powers";
    let found = table.must(key, mend, |t, k| t.take(k))?;
    let row = |value: &DeValue<'_>| -> Option<Vec<f64>> {
        let items = value.as_array()?;
        items.iter().map(|v| number(v.get_ref())).collect()
    };
    let array = found.get_ref().as_array();
    let rows = array.and_then(|a| a.iter().map(|v| row(v.get_ref())).collect());
    let rows: Option<Vec<Vec<f64>>> = rows.or_else(|| Some(vec![row(found.get_ref())?]));
    match rows {
        Some(rows) if rows.iter().any(|r| !r.is_empty()) => Some(rows),
        _ => {
            table.due(key, found, "rows of numbers", mend);
            None
        }
    }
}

fn number(value: &DeValue<'_>) -> Option<f64> {
    plain_number(value)?
        .parse()
        .ok()
        .filter(|n: &f64| n.is_finite())
}
