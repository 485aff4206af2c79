//! Instruments of a whole site, from the site file to the value.

use super::*;
use crate::config;
use crate::record::{ClockEpoch, ClockState, DeviceStatus};
use std::path::Path;

/// A site whose log source has these channels beside the well's and the gauge's own.
fn site(gauge: &str, channels: &str) -> Site {
    let text = format!(
        r#"
[site]
id = "dam"
name = "Dam"
[store]
folder = "dam"
[[layer]]
name = "fill"
transmissivity = "35 m2/d"
storativity = 2e-4
[edge]
kind = "open"
distance = "2 km"
[[well]]
name = "W-1"
at = ["0 m", "0 m"]
layer = "fill"
radius = "0.2 m"
rate = "w1.flow"
[[gauge]]
name = "P-1"
at = ["20 m", "0 m"]
layer = "fill"
channel = "p1"
noise = "50 Pa"
drift = "1 kPa/yr"
[[source]]
name = "logger"
kind = "log"
[[source.channel]]
id = "w1.flow"
kind = "rate"
unit = "m3/d"
[[source.channel]]
id = "p1"
kind = "pressure"
unit = "kPa"
{gauge}
{channels}
"#
    );
    config::read(&text, Path::new("site.toml")).unwrap()
}

const BESIDE: &str = r#"
[[source.channel]]
id = "p1.ohm"
kind = "temperature"
unit = "degC"
convert = { kind = "thermistor", a = 1.4051e-3, b = 2.369e-4, c = 1.019e-7 }
[[source.channel]]
id = "baro"
kind = "barometer"
unit = "hPa"
"#;

/// A reading as a decoder delivers it.
fn delivered(site: &Site, channel: &str, seconds: i64, raw: f64) -> Reading {
    let settings = &site.channels[&ChannelId::from(channel)];
    let deferred = settings.is_instrument();
    Reading {
        channel: channel.into(),
        sampled: Stamp(seconds * Stamp::SECOND),
        received: Stamp(seconds * Stamp::SECOND),
        epoch: ClockEpoch(1),
        value: (!deferred).then(|| settings.conversion.to_si(raw)),
        raw: Some(raw),
        quality: if deferred {
            Quality::NotEvaluated
        } else {
            Quality::Good
        },
        device: DeviceStatus::Normal,
        clock: ClockState::Synchronised,
    }
}

fn play(site: &Site, scans: &[&[(&str, i64, f64)]]) -> Vec<Vec<Reading>> {
    let mut deliveries: Vec<Delivery> = scans
        .iter()
        .map(|scan| Delivery {
            source: "logger".into(),
            readings: scan
                .iter()
                .map(|&(c, at, raw)| delivered(site, c, at, raw))
                .collect(),
            rejected: Vec::new(),
            ack: None,
        })
        .collect();
    Appraiser::new(site).appraise(&mut deliveries);
    deliveries.into_iter().map(|d| d.readings).collect()
}

const WIRE: &str = r#"convert = { kind = "vibrating-wire", reads = "digits", form = "linear", sense = "zero-minus-reading", factor = "0.25 kPa", zero = 8900, temperature = "p1.ohm", temperature_factor = "-0.1 kPa", zero_temperature = "12 degC", barometer = "baro", zero_barometer = "101.3 kPa" }"#;

/// The invented certificate whose pressure was computed by hand: 376.75 kPa at 9.5 degC and 99.80 kPa.
#[test]
fn a_vibrating_wire_takes_its_temperature_and_barometer_from_the_same_scan() {
    let site = site(WIRE, BESIDE);
    // The resistance of 9.5 degC on the thermistor's curve, found by halving.
    let settings = &site.channels[&ChannelId::from("p1.ohm")];
    let Some(config::Instrument::Thermistor(thermistor)) = settings.instrument.as_deref() else {
        panic!("{settings:?}");
    };
    let (mut low, mut high) = (3000.0, 9796.0);
    for _ in 0..80 {
        let middle = (low + high) / 2.0;
        if thermistor.temperature(middle).unwrap() > 9.5 {
            low = middle;
        } else {
            high = middle;
        }
    }
    // The pressure stands first in the scan, its companions behind it.
    let scans = play(
        &site,
        &[&[("p1", 0, 7400.0), ("baro", 0, 998.0), ("p1.ohm", 0, low)]],
    );
    let pressure = &scans[0][0];
    assert!((pressure.value.unwrap() - 376_750.0).abs() < 1e-3);
    assert_eq!(
        (pressure.quality, pressure.raw),
        (Quality::Good, Some(7400.0))
    );
    assert!((scans[0][2].value.unwrap() - 9.5).abs() < 1e-6);
    assert_eq!(scans[0][2].raw, Some(low), "the raw value is kept");
}

#[test]
fn a_companion_that_stops_makes_suspect_and_one_never_seen_gives_no_value() {
    let site = site(WIRE, BESIDE);
    let scans = play(
        &site,
        &[
            &[("p1", 0, 7400.0), ("baro", 0, 998.0)],
            &[("p1.ohm", 60, 3000.0)],
            &[("p1", 120, 7400.0)],
            &[("p1", 7200, 7400.0)],
        ],
    );
    let quality = |scan: usize| (scans[scan][0].quality, scans[scan][0].value.is_some());
    assert_eq!(quality(0), (Quality::Missing, false), "no temperature yet");
    assert_eq!(quality(2), (Quality::Good, true));
    assert_eq!(
        quality(3),
        (Quality::Suspect, true),
        "both are two hours old"
    );
    assert_eq!(scans[3][0].raw, Some(7400.0));
}

#[test]
fn a_broken_loop_never_becomes_a_number() {
    let convert = r#"convert = { kind = "current-loop", low = "0 kPa", high = "400 kPa" }
scale = 0.001"#;
    // The logger delivers microamperes.
    let site = site(convert, "");
    let scans = play(
        &site,
        &[&[("p1", 0, 12_000.0), ("p1", 1, 20.0), ("p1", 2, 20_300.0)]],
    );
    let found: Vec<_> = scans[0]
        .iter()
        .map(|r| (r.value, r.quality.flag(), r.device))
        .collect();
    assert_eq!(
        found,
        [
            (Some(200_000.0), 1, DeviceStatus::Normal),
            (None, 4, DeviceStatus::Failure),
            (Some(407_500.0), 3, DeviceStatus::Normal),
        ]
    );
    assert_eq!(
        scans[0][1].raw,
        Some(20.0),
        "the current is kept as delivered"
    );
}

#[test]
fn a_quartz_gauge_takes_the_frequency_of_its_own_instant() {
    let convert = r#"convert = { kind = "quartz", temperature = "p1.t", zero = 36000, temperature_zero = 172000, coefficients = [[100.0, 0.01], [-0.5]], range = [35000, 37000], temperature_range = [171000, 173000] }"#;
    let beside = r#"
[[source.channel]]
id = "p1.t"
kind = "temperature"
unit = "degC"
convert = { kind = "polynomial", zero = 172000, coefficients = [20.0, 0.05], range = [171000, 173000] }
"#;
    let site = site(convert, beside);
    let scans = play(
        &site,
        &[
            &[("p1", 0, 36_010.0), ("p1.t", 0, 172_100.0)],
            &[("p1", 60, 36_010.0)],
            &[("p1", 120, 38_000.0), ("p1.t", 120, 172_100.0)],
        ],
    );
    // kPa: 100 + 0.01 * 100 - 0.5 * 10.
    assert!((scans[0][0].value.unwrap() - 96_000.0).abs() < 1e-6);
    assert!((scans[0][1].value.unwrap() - 25.0).abs() < 1e-9);
    assert_eq!(
        (scans[1][0].value, scans[1][0].quality),
        (None, Quality::Missing)
    );
    let outside = &scans[2][0];
    assert_eq!(
        (outside.value, outside.quality, outside.device),
        (None, Quality::Bad, DeviceStatus::OutOfSpecification)
    );
}

#[test]
fn references_and_columns_follow_the_instrument() {
    let convert = r#"reference = { from = "vented", to = "absolute", barometer = "baro" }
column = { depth = "12 m", density = "1025 kg/m3" }"#;
    let site = site(convert, BESIDE);
    let scans = play(
        &site,
        &[
            &[("p1", 0, 50.0), ("baro", 0, 998.0)],
            &[("p1", 7200, 50.0)],
        ],
    );
    let due = 50_000.0 + 99_800.0 + 1025.0 * 9.806_65 * 12.0;
    assert!((scans[0][0].value.unwrap() - due).abs() < 1e-6);
    assert_eq!(scans[0][0].quality, Quality::Good);
    assert_eq!(
        scans[1][0].quality,
        Quality::Suspect,
        "never silently on an old barometer"
    );
}

#[test]
fn a_totaliser_gives_the_rate_and_holds_before() {
    let meter = r#"
[[source.channel]]
id = "meter"
kind = "rate"
unit = "m3/d"
convert = { kind = "totaliser", count = "100 L", wrap = 65536, most = "2 m3/s" }
"#;
    let site = site("", meter);
    assert_eq!(
        site.channels[&ChannelId::from("meter")].holds,
        crate::record::Holds::Before
    );
    let scans = play(&site, &[&[("meter", 0, 65_530.0)], &[("meter", 10, 4.0)]]);
    assert_eq!(scans[0][0].value, None);
    assert!((scans[1][0].value.unwrap() - 0.1).abs() < 1e-12);
}

#[test]
fn a_gap_stays_a_gap() {
    let site = site(WIRE, BESIDE);
    let mut gap = delivered(&site, "p1", 0, 1.0);
    gap.raw = None;
    gap.quality = Quality::Missing;
    gap.device = DeviceStatus::Failure;
    let mut deliveries = [Delivery {
        source: "logger".into(),
        readings: vec![gap.clone()],
        rejected: Vec::new(),
        ack: None,
    }];
    Appraiser::new(&site).appraise(&mut deliveries);
    assert_eq!(deliveries[0].readings, [gap]);
}

#[test]
fn tests_of_quality_follow_the_conversion_and_never_mend() {
    let convert = r#"convert = { kind = "current-loop", low = "0 kPa", high = "400 kPa" }
quality = { span = ["0 kPa", "400 kPa"], usual = ["50 kPa", "300 kPa"], flat = 3 }"#;
    let site = site(convert, "");
    let scans = play(
        &site,
        &[&[
            ("p1", 0, 12.0),
            ("p1", 1, 5.0),
            ("p1", 2, 20.2),
            ("p1", 3, 12.0),
            ("p1", 4, 12.0),
            ("p1", 5, 12.0),
            ("p1", 6, 2.0),
        ]],
    );
    let flags: Vec<u8> = scans[0].iter().map(|r| r.quality.flag()).collect();
    // Fine; unusual; beyond the span, though NE 43 only doubts it; fine twice; flat; a fault.
    assert_eq!(flags, [1, 3, 4, 1, 1, 3, 4]);
    assert!(
        scans[0][2].value.is_some(),
        "a bad value is kept, and not used"
    );
    assert!(!scans[0][2].is_usable());
}

#[test]
fn a_start_takes_up_what_companions_said_last() {
    let site = site(WIRE, BESIDE);
    let scans = play(&site, &[&[("baro", 0, 998.0), ("p1.ohm", 0, 3000.0)]]);
    let mut appraiser = Appraiser::new(&site);
    let needed: Vec<String> = appraiser.companions().map(ToString::to_string).collect();
    assert_eq!(needed, ["baro", "p1.ohm"]);
    for reading in &scans[0] {
        appraiser.recall(reading);
    }
    let mut deliveries = [Delivery {
        source: "logger".into(),
        readings: vec![delivered(&site, "p1", 60, 7400.0)],
        rejected: Vec::new(),
        ack: None,
    }];
    appraiser.appraise(&mut deliveries);
    let reading = &deliveries[0].readings[0];
    assert_eq!(
        (reading.quality, reading.value.is_some()),
        (Quality::Good, true)
    );
}

/// A broker repeats what it was not told of: the same count again is the same reading, not another one.
#[test]
fn a_count_that_comes_twice_gives_its_rate_twice() {
    let meter = r#"
[[source.channel]]
id = "meter"
kind = "rate"
unit = "m3/d"
convert = { kind = "totaliser", count = "100 L", most = "2 m3/s" }
"#;
    let site = site("", meter);
    let scans = play(
        &site,
        &[
            &[("meter", 0, 10.0)],
            &[("meter", 10, 30.0)],
            &[("meter", 10, 30.0)],
        ],
    );
    assert_eq!(scans[1][0], scans[2][0]);
    assert!((scans[2][0].value.unwrap() - 0.2).abs() < 1e-12);
}

/// A log delivers a thousand readings at once, a line one scan at a time: both must give the same.
#[test]
fn how_readings_are_gathered_makes_no_difference() {
    let reference = r#"reference = { from = "vented", to = "absolute", barometer = "baro" }
quality = { jump = 4, flat = 5, window = "10 min" }"#;
    let site = site(reference, BESIDE);
    let rows: Vec<(&str, i64, f64)> = (0..200)
        .flat_map(|i| {
            let wave = f64::from(i % 7);
            let second = i64::from(i) * 10;
            [
                ("p1", second, 50.0 + wave),
                ("baro", second + i64::from(i % 2), 990.0 + wave),
            ]
        })
        .collect();
    let scans: Vec<&[(&str, i64, f64)]> = rows.chunks(2).collect();
    let apart: Vec<Reading> = play(&site, &scans).concat();
    let together = play(&site, &[&rows]).concat();
    assert_eq!(apart, together);
    assert!(apart.iter().filter(|r| r.value.is_some()).count() > 390);
}
