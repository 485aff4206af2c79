//! What stands behind a channel's number: read, and explained where it is wrong.

use std::time::Duration;

use borewake::config::{
    Instrument, Sdi12Kind, SourceConfig, WireForm, WireReading, WireSense, Zero,
};
use borewake::record::{ChannelId, Holds};

use super::{FULL, mistakes, site};

/// The whole file with a barometer, and with this behind the unit of the pressure channel.
fn with(pressure: &str) -> String {
    let barometer = "[watch]\n";
    let source = r#"
[[source]]
name = "weather"
kind = "log"
[[source.channel]]
id = "baro"
kind = "barometer"
unit = "hPa"
[[source.channel]]
id = "t"
kind = "temperature"
unit = "degC"

[watch]
"#;
    let unit = "unit = \"kPa\"\n";
    assert_eq!(
        (FULL.matches(barometer).count(), FULL.matches(unit).count()),
        (1, 1)
    );
    FULL.replace(barometer, source)
        .replace(unit, &format!("{unit}{pressure}\n"))
}

/// What is said of a file with one mistake.
#[track_caller]
fn told(text: &str) -> String {
    match &mistakes(text)[..] {
        [one] => one.to_string(),
        found => panic!("{found:?}"),
    }
}

#[test]
fn a_vibrating_wire_is_read_to_si() {
    let site = site(&with(
        r#"convert = { kind = "vibrating-wire", reads = "hertz", form = "linear", sense = "reading-minus-zero", factor = "0.25 kPa", zero = 8900, temperature = "t", temperature_factor = "-0.1 kPa", zero_temperature = "12 degC", within = "10 min" }"#,
    ));
    let channel = &site.channels[&ChannelId::from("o2.pressure")];
    let Some(Instrument::VibratingWire(wire)) = channel.instrument.as_deref() else {
        panic!("{channel:?}");
    };
    assert_eq!(wire.reads, WireReading::Hertz);
    let WireForm::Linear { factor, sense } = wire.form else {
        panic!("{wire:?}");
    };
    assert!((factor - 250.0).abs() < 1e-9);
    assert_eq!((sense, wire.zero), (WireSense::ReadingMinusZero, 8900.0));
    let thermal = wire.thermal.as_ref().unwrap();
    assert!((thermal.factor + 100.0).abs() < 1e-9);
    assert_eq!(thermal.zero, 12.0);
    assert_eq!(thermal.temperature.within, Duration::from_secs(600));
    // The number is not yet a pressure: the unit is no part of its scale.
    assert_eq!(
        (channel.conversion.scale, channel.conversion.offset),
        (1.0, 0.0)
    );
}

#[test]
fn loops_references_and_columns_are_read_to_si() {
    let site = site(&with(
        r#"scale = 0.001
convert = { kind = "current-loop", low = "0 bar", high = "40 bar" }
reference = { from = "sealed", to = "vented", sealed_at = "1 bar", barometer = "baro" }
column = { depth = "-3 m", density = "1 g/cm3" }"#,
    ));
    let channel = &site.channels[&ChannelId::from("o2.pressure")];
    let Some(Instrument::CurrentLoop(current)) = channel.instrument.as_deref() else {
        panic!("{channel:?}");
    };
    assert!((current.high - 4e6).abs() < 1e-6 && current.low == 0.0);
    assert_eq!(channel.conversion.scale, 0.001);
    let reference = channel.reference.as_ref().unwrap();
    assert_eq!(
        (reference.from, reference.to),
        (Zero::Sealed(1e5), Zero::Vented)
    );
    let column = channel.column.unwrap();
    assert!((column.at_datum(0.0) + 3.0 * 1000.0 * 9.806_65).abs() < 1e-6);
}

#[test]
fn tests_of_quality_are_read_to_si() {
    let asked = r#"quality = { span = ["0 kPa", "10 MPa"], usual = ["1 MPa", "6 MPa"], flat = 30, jump = 6, least = "20 Pa", window = "1 d" }"#;
    let site_with = site(&with(asked));
    let tests = site_with.channels[&ChannelId::from("o2.pressure")]
        .quality
        .clone()
        .unwrap();
    assert_eq!((tests.span, tests.flat), (Some((0.0, 1e7)), Some(30)));
    assert_eq!((tests.jump, tests.least), (Some(6.0), Some(20.0)));
    assert_eq!(tests.window, Duration::from_secs(86_400));
    let text = told(&with(r#"quality = { span = ["10 MPa", "0 kPa"] }"#));
    assert!(text.contains("write the lower one first"), "{text}");
    let text = told(&with(r#"quality = { usual = "5 MPa" }"#));
    assert!(text.contains("a pair of quantities is due"), "{text}");
}

#[test]
fn a_totaliser_is_the_mean_since_the_count_before() {
    let meter = "unit = \"m3/d\"\nconvert = { kind = \"totaliser\", count = \"10 L\", most = \"900 m3/d\" }\n#";
    let text = FULL.replace("unit = \"m3/d\"\nholds", &format!("{meter}holds"));
    let flow = &site(&text).channels[&ChannelId::from("i1.flow")];
    assert_eq!(flow.holds, Holds::Before);
    let Some(Instrument::Totaliser(totaliser)) = flow.instrument.as_deref() else {
        panic!("{flow:?}");
    };
    assert!((totaliser.count - 0.01).abs() < 1e-12);
    // With `holds = "after"` left in place it is a contradiction.
    let text = FULL.replace("unit = \"m3/d\"\n", &meter.replace('#', ""));
    assert!(told(&text).contains("the rate of a totaliser is the mean since the count before"));
}

#[test]
fn what_is_missing_or_does_not_fit_is_explained() {
    let text = told(&with(
        r#"convert = { kind = "thermistor", a = 1e-3, b = 2e-4, c = 1e-7 }"#,
    ));
    assert!(
        text.contains("it measures a temperature, and the channel is a pressure"),
        "{text}"
    );
    let text = told(&with(
        r#"convert = { kind = "vibrating-wire", reads = "digits", form = "linear", factor = "0.25 kPa", zero = 8900 }"#,
    ));
    assert!(
        text.contains("`sense` is missing") && text.contains("makers differ"),
        "{text}"
    );
    let text = told(&with(r#"reference = { from = "vented", to = "absolute" }"#));
    assert!(text.contains("`barometer` is missing"), "{text}");
    let text = told(&with(
        r#"reference = { from = "vented", to = "absolute", barometer = "barro" }"#,
    ));
    assert!(text.contains("did you mean \"baro\"?"), "{text}");
    let text = told(&with(r#"reference = { from = "sealed", to = "absolute" }"#));
    assert!(text.contains("sealed_at"), "{text}");
    let text = told(&with(
        r#"convert = { kind = "quartz", temperature = "t", zero = 1, temperature_zero = 1, coefficients = [[1.0]], range = [2, 1], temperature_range = [1, 2] }"#,
    ));
    assert!(text.contains("the smaller first"), "{text}");
}

#[test]
fn modbus_tcp_and_sdi_12_are_read() {
    let other = r#"
[[source]]
name = "gateway"
kind = "modbus-tcp"
host = "gateway.example"
[[source.channel]]
id = "x"
kind = "stage"
unit = "m"
unit_id = 255
register = { table = "input", address = 9999, type = "u64" }
[[source]]
name = "string"
kind = "sdi-12"
port = "/dev/ttyUSB9"
wake = "port"
[[source.channel]]
id = "y"
kind = "temperature"
unit = "degC"
address = "z"
command = "CC3"
value = 2

[watch]
"#;
    let text = FULL.replace("[watch]\n", other);
    let site = site(&text);
    let config = |name: &str| &site.source(&name.into()).unwrap().config;
    let SourceConfig::ModbusTcp(gateway) = config("gateway") else {
        panic!();
    };
    assert_eq!(
        (gateway.host.as_str(), gateway.port),
        ("gateway.example", 502)
    );
    let channel = &gateway.channels[0];
    assert_eq!(
        (channel.unit_id, channel.register.manual_number()),
        (255, 310_000)
    );
    let SourceConfig::Sdi12(string) = config("string") else {
        panic!();
    };
    assert_eq!((string.serial.baud, string.serial.data_bits), (1200, 7));
    assert!(string.wake);
    let channel = &string.channels[0];
    assert_eq!((channel.address.letter(), channel.value), ('z', 2));
    let command = channel.command;
    assert_eq!(
        (command.kind, command.checked, command.index),
        (Sdi12Kind::Concurrent, true, 3)
    );
    let wrong = text.replace("command = \"CC3\"", "command = \"D0\"");
    assert!(told(&wrong).contains("\"D0\" is no command that measures"));
    let wrong = text.replace("address = \"z\"", "address = \"12\"");
    assert!(told(&wrong).contains("one digit or letter"));
}
