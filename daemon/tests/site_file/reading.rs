//! What is read.

use std::path::Path;
use std::time::Duration;

use borewake::config::{
    ByteOrder, Checksum, ConfigError, Parity, PublishSettings, Reference, RegisterNumber,
    RegisterTable, Separator, Side, SourceConfig, TopicPattern, load,
};
use borewake::record::{ChannelId, ChannelKind, Holds, Priority, SourceName, Stamp};
use borewake_model::ground::{EdgeKind, Seat};
use borewake_model::units::{DARCY, DAY, UnitSystem, YEAR};

use super::{FULL, site};

fn close(a: f64, b: f64) -> bool {
    (a - b).abs() <= 1e-12 * b.abs()
}

#[test]
fn the_whole_file_is_read_to_si() {
    let site = site(FULL);
    assert_eq!(
        (site.id.as_str(), site.name.as_str()),
        ("sorrel-flat", "Sorrel Flat")
    );
    assert_eq!(site.units, UnitSystem::Metric);
    assert_eq!(site.store.folder, Path::new("sorrel-flat"));
    assert_eq!(site.store.keep_raw, Some(Duration::from_secs(400 * 86_400)));
    assert_eq!(site.store.max_size, Some(20_000_000_000));

    let layer = &site.ground.layers[0];
    assert!(close(layer.transmissivity, 0.110 * DARCY * 22.0 / 0.62e-3));
    assert!(close(layer.storativity, 0.21 * 9.5e-10 * 22.0));
    assert_eq!(site.ground.edge.kind, EdgeKind::Open);
    assert!(close(site.ground.edge.distance, 12_000.0));
    assert_eq!(
        site.ground.barriers[0].line,
        [[1400.0, -2000.0], [1600.0, 2500.0]]
    );
    assert_eq!(site.ground.neighbours[0].at, [2400.0, -800.0]);

    let well = &site.ground.wells[0];
    assert_eq!((well.at, well.radius, well.skin), ([0.0, 0.0], 0.11, 1.5));
    assert_eq!(site.wells[0].rate, ChannelId::from("i1.flow"));
    assert_eq!(site.wells[0].holds, Holds::After);

    let gauge = &site.ground.gauges[0];
    assert_eq!(
        gauge.seat,
        Seat::InGround {
            at: [310.0, -480.0],
            layer: 0
        }
    );
    assert!(close(gauge.noise, 120.0) && close(gauge.drift, 2000.0 / YEAR));
    assert_eq!(site.gauges[0].reference, Reference::Absolute);
    assert_eq!(site.gauges[0].elevation, Some(-1492.0));

    let SourceConfig::ModbusRtu(skid) = &site.sources[0].config else {
        panic!("{:?}", site.sources[0]);
    };
    assert_eq!(
        (skid.serial.baud, skid.serial.parity),
        (19_200, Parity::Even)
    );
    assert_eq!(skid.every, Duration::from_secs(1));
    let register = skid.channels[0].register;
    assert_eq!(
        (skid.channels[0].unit_id, register.table),
        (3, RegisterTable::Holding)
    );
    assert_eq!(
        (register.address, register.number),
        (102, RegisterNumber::F32)
    );
    assert_eq!(register.order, ByteOrder::Big);

    let SourceConfig::Mqtt(broker) = &site.sources[1].config else {
        panic!("{:?}", site.sources[1]);
    };
    let endpoint = &broker.endpoint;
    assert_eq!(
        (endpoint.host.as_str(), endpoint.port, endpoint.tls),
        ("broker.example", 8883, true)
    );
    assert_eq!(broker.channels[0].topic.filter(), "pads/+/p");
    assert_eq!(broker.channels[0].value.as_deref(), Some("/p"));

    let flow = &site.channels[&ChannelId::from("i1.flow")];
    assert_eq!(flow.kind, ChannelKind::Rate);
    assert!(close(flow.conversion.to_si(DAY), 1.0));

    assert_eq!(site.watch.false_alarm_interval, 5.0 * YEAR);
    assert_eq!(site.watch.lateness, Duration::from_secs(120));
    let limit = &site.limits[0];
    assert_eq!(
        (limit.alarm.0.as_str(), limit.gauge, limit.side),
        ("limit-O-2-above", 0, Side::Above)
    );
    assert!(close(limit.value, 6.1e6) && close(limit.deadband, 480.0));
    assert_eq!(
        (limit.delay, limit.priority),
        (Duration::from_secs(30), Priority::High)
    );
    let PublishSettings::Mqtt(publish) = &site.publish[0];
    assert_eq!(publish.topic_root, "borewake");
    assert_eq!(site.http.listen, Some("127.0.0.1:8070".parse().unwrap()));
    assert_eq!(site.http.hosts, ["watch.example"]);
    let hours = |h: u64| Duration::from_secs(3600 * h);
    assert_eq!(site.care.shelve_at_most, hours(24));
    assert_eq!(
        (site.care.realarm, site.care.escalate),
        (Some(hours(12)), None)
    );
}

#[test]
fn a_channel_of_a_pattern_is_known_by_its_own_name() {
    let site = site(FULL);
    // The gauge takes it, so it is an entry of its own; another gauge's is found by the pattern.
    let o2 = ChannelId::from("o2.pressure");
    assert_eq!(site.channels[&o2].source, SourceName::from("field broker"));
    let o9 = site.channel(&ChannelId::from("o9.pressure")).unwrap();
    assert_eq!(o9.id, ChannelId::from("o9.pressure"));
    assert!(close(o9.conversion.to_si(1.0), 1000.0));
    assert_eq!(site.channel(&ChannelId::from("o9.flow")), None);
}

#[test]
fn what_is_accepted_and_not_acted_on_is_noted() {
    let keys: Vec<String> = site(FULL).notes.into_iter().map(|n| n.key).collect();
    assert_eq!(
        keys,
        [
            "neighbour \"old quarry well\": meter",
            "source \"field broker\": url",
        ]
    );
}

const LINE: &str = r#"
[site]
id = "bank"
units = "head"
[store]
folder = "/var/lib/borewake/bank"
[[layer]]
name = "gravel"
transmissivity = "350 m2/d"
storativity = 2e-4
[[layer]]
name = "sand"
top = "-20 m"
transmissivity = "1e-8 m3/(Pa s)"
specific_storage = "1e-5 /m"
thickness = "12 m"
leakance_up = "1e-3 /d"
[[well]]
name = "P"
at = ["0 ft", "100 ft"]
layer = "gravel"
radius = "6 in"
storage = "0.05 m2"
rate = { channel = "manifold", share = "40 %" }
meter = { bias = "1 %", error = 0.02, memory = "12 h" }
past = [{ from = "2029-01-01", rate = "-900 m3/d" }, { from = 2030-06-01T00:00:00Z, rate = "0 m3/d" }]
[[well]]
name = "Q"
at = ["50 m", "0 m"]
layer = "sand"
radius = "0.1 m"
rate = { channel = "manifold", share = 0.6 }
[[gauge]]
name = "P1"
at = ["10 m", "0 m"]
layer = "gravel"
channel = "p1"
reference = "vented"
string = "piezometer"
[[gauge]]
name = "Q1"
well = "Q"
channel = "q1"
[[source]]
name = "logger"
kind = "text-line"
port = "/dev/ttyS0"
separator = ";"
time_field = 1
checksum = "xor"
[[source.channel]]
id = "p1"
kind = "pressure"
unit = "m H2O"
field = 2
scale = 0.1
offset = -2
[[source.channel]]
id = "q1"
kind = "pressure"
unit = "mbar"
prefix = "Q="
[[source.channel]]
id = "air"
kind = "temperature"
unit = "degF"
field = 5
[[source]]
name = "notebook"
kind = "log"
path = "logs"
[[source.channel]]
id = "manifold"
kind = "rate"
unit = "L/s"
holds = "before"
[[limit]]
gauge = "P1"
above = "8 m H2O"
below = "2 m H2O"
deadband = "5 mm H2O"
author = "A. B., 2031-03-01"
[[limit]]
gauge = "P1"
above = "9 m H2O"
author = "A. B., 2031-03-01"
[watch]
block = "30 min"
false_alarms = "2 per year"
"#;

#[test]
fn hydrogeological_spellings_shared_meters_and_text_lines() {
    const WEIGHT: f64 = 9806.65;
    let site = site(LINE);
    let [gravel, sand] = &site.ground.layers[..] else {
        panic!("{:?}", site.ground.layers);
    };
    assert!(close(gravel.transmissivity, 350.0 / DAY / WEIGHT));
    assert!(close(gravel.storativity, 2e-4 / WEIGHT));
    assert!(close(gravel.leakance_below.unwrap(), 1e-3 / DAY / WEIGHT));
    assert!(close(sand.storativity, 1e-5 / WEIGHT * 12.0));
    assert_eq!(site.store.folder, Path::new("/var/lib/borewake/bank"));
    // The edge is ours to put: 3.5 times the diffusion length of ten years in the faster layer.
    let eta = gravel.transmissivity / gravel.storativity;
    assert!(close(
        site.ground.edge.distance,
        3.5 * (eta * 10.0 * YEAR).sqrt()
    ));

    let well = &site.ground.wells[0];
    assert!(close(well.at[1], 30.48) && close(well.radius, 0.1524));
    assert!(close(well.storage, 0.05 / WEIGHT));
    assert!(close(site.wells[0].share, 0.4) && close(site.wells[1].share, 0.6));
    assert_eq!(site.wells[0].holds, Holds::Before);
    let meter = site.wells[0].meter.unwrap();
    assert!(close(meter.bias, 0.01) && close(meter.error, 0.02));
    assert_eq!(
        site.wells[0].past[1].from,
        Stamp::parse("2030-06-01T00:00:00Z").unwrap()
    );
    assert!(close(site.wells[0].past[0].rate, -900.0 / DAY));
    assert_eq!(site.ground.gauges[1].seat, Seat::InWell(1));
    assert!(!site.gauges[0].noise_stated);

    let SourceConfig::TextLine(line) = &site.sources[0].config else {
        panic!("{:?}", site.sources[0]);
    };
    assert_eq!(
        (line.separator, line.checksum),
        (Separator::Char(';'), Checksum::Xor)
    );
    assert_eq!(
        (line.time_field, line.serial.parity),
        (Some(1), Parity::None)
    );
    assert_eq!(line.channels[1].prefix.as_deref(), Some("Q="));
    // 0.1 x 150 - 2 = 13 m of water.
    let p1 = &site.channels[&ChannelId::from("p1")];
    assert!(close(p1.conversion.to_si(150.0), 13.0 * WEIGHT));
    assert!(close(p1.conversion.to_raw(13.0 * WEIGHT), 150.0));
    let air = &site.channels[&ChannelId::from("air")];
    assert!((air.conversion.to_si(50.0) - 10.0).abs() < 1e-12);

    let alarms: Vec<&str> = site.limits.iter().map(|l| l.alarm.0.as_str()).collect();
    assert_eq!(
        alarms,
        ["limit-P1-above", "limit-P1-below", "limit-P1-above-2"]
    );
    assert_eq!(site.watch.false_alarm_interval, YEAR / 2.0);
    assert_eq!(site.watch.block, Duration::from_secs(1800));
}

#[test]
fn the_digest_sees_the_ground_and_nothing_else() {
    let digest = |text: &str| site(text).ground_digest();
    let first = digest(FULL);
    assert_eq!(first.len(), 64);
    let respelled = FULL
        .replace("# invented", "# another remark")
        .replace("\"22 m\"", "\"2200 cm\"")
        .replace(
            "false_alarms = \"1 per 5 years\"",
            "false_alarms = \"1 per year\"",
        )
        .replace("\"6.1 MPa\"", "\"6.2 MPa\"")
        .replace("baud = 19200", "baud = 9600");
    assert_ne!(respelled, FULL);
    assert_eq!(digest(&respelled), first);
    for (from, to) in [
        ("\"22 m\"", "\"23 m\""),
        ("[\"310 m\", \"-480 m\"]", "[\"311 m\", \"-480 m\"]"),
        ("noise = \"120 Pa\"", "noise = \"121 Pa\""),
        ("skin = 1.5", "skin = 1.6"),
        ("kind = \"open\"", "kind = \"closed\""),
        ("old quarry well", "new quarry well"),
    ] {
        let changed = FULL.replace(from, to);
        assert_ne!(changed, FULL, "{from}");
        assert_ne!(digest(&changed), first, "{from}");
    }
}

#[test]
fn a_file_that_cannot_be_read_says_why() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("site.toml");
    assert!(matches!(load(&path), Err(ConfigError::Unreadable { .. })));
    assert!(matches!(
        load(folder.path()),
        Err(ConfigError::Unreadable { .. })
    ));
    std::fs::write(&path, b"[site]\nid = \"\xff\"\n").unwrap();
    let wrong = load(&path).unwrap_err().to_string();
    assert!(
        wrong.ends_with("it is no UTF-8 text from byte 13 on; save it as UTF-8"),
        "{wrong}"
    );
    std::fs::write(&path, FULL).unwrap();
    let site = load(&path).unwrap();
    assert_eq!(site.store.folder, folder.path().join("sorrel-flat"));
}

#[test]
fn a_secret_is_read_from_its_file_and_never_shown() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("site.toml");
    std::fs::write(&path, FULL).unwrap();
    let site = load(&path).unwrap();
    let secret = site.secrets().next().unwrap();
    let wrong = secret.read().unwrap_err().to_string();
    assert!(wrong.contains("broker.secret"), "{wrong}");
    std::fs::write(folder.path().join("broker.secret"), "hunter2\n").unwrap();
    let read = secret.read().unwrap();
    assert_eq!(read.expose(), "hunter2");
    assert!(!format!("{read:?} {site:?}").contains("hunter2"));
}

#[test]
fn patterns_fit_whole_levels() {
    let pattern = TopicPattern::parse("{pad}/g-{gauge}/p").unwrap();
    assert_eq!(pattern.filter(), "+/+/p");
    let values = pattern.capture("north/g-7/p").unwrap();
    assert_eq!(
        values,
        [("pad", "north".to_owned()), ("gauge", "7".to_owned())]
    );
    let id = TopicPattern::parse("{pad}.{gauge}.pressure").unwrap();
    assert_eq!(id.fill(&values).as_deref(), Some("north.7.pressure"));
    for topic in [
        "north/7/p",
        "north/g-/p",
        "a/b/g-7/p",
        "north/g-7/p/x",
        "/g-7/p",
    ] {
        assert!(!pattern.fits(topic), "{topic}");
    }
    for text in ["{", "a}", "{}", "{a b}", "{a}{b}", "{a}/{a}", "{a{b}}"] {
        assert!(TopicPattern::parse(text).is_err(), "{text}");
    }
}

#[test]
fn the_demonstration_site_holds() {
    let site = site(include_str!("../../../demo-data/site.toml"));
    assert_eq!((site.wells.len(), site.gauges.len()), (3, 6));
    assert_eq!(site.notes, []);
}

#[test]
fn zones_take_what_they_do_not_state_from_their_layer() {
    let text = FULL.replace(
        "[[barrier]]",
        "[[zone]]\nname = \"channel\"\noutline = [[\"0.2 km\", \"1 km\"], [\"1 km\", \"1 km\"], [\"1 km\", \"2 km\"]]\npermeability = \"400 mD\"\nthickness = \"11 m\"\n[[zone]]\nname = \"silt\"\noutline = [[\"-1 km\", \"1 km\"], [\"-2 km\", \"1 km\"], [\"-2 km\", \"2 km\"]]\ntransmissivity = \"1e-12 m3/(Pa s)\"\nstorativity = \"1e-8 m/Pa\"\n[[barrier]]",
    );
    let zones = site(&text).ground.zones;
    assert_eq!(
        (zones.len(), zones[0].layer, zones[0].outline.len()),
        (2, 0, 3)
    );
    assert!(close(
        zones[0].transmissivity,
        0.400 * DARCY * 11.0 / 0.62e-3
    ));
    assert!(close(zones[0].storativity, 0.21 * 9.5e-10 * 11.0));
    assert!(close(zones[1].transmissivity, 1e-12) && close(zones[1].storativity, 1e-8));
    // The ground file belongs to the zones too.
    assert_ne!(site(&text).ground_digest(), site(FULL).ground_digest());
}

#[test]
fn a_fluid_stands_for_viscosity_and_for_its_share_of_the_compressibility() {
    let text = FULL
        .replace(
            "viscosity = \"0.62 cP\"",
            "fluid = { temperature = \"60 degC\", pressure = \"15 MPa\", salinity = \"5 %\" }",
        )
        .replace(
            "compressibility = \"9.5e-10 /Pa\"",
            "rock_compressibility = \"5e-10 /Pa\"",
        );
    let fluid = borewake_model::fluid::brine(60.0, 15e6, 0.05).unwrap();
    let layer = &site(&text).ground.layers[0];
    assert!(close(
        layer.transmissivity,
        0.110 * DARCY * 22.0 / fluid.viscosity
    ));
    assert!(close(
        layer.storativity,
        0.21 * (fluid.compressibility + 5e-10) * 22.0
    ));
    let both = FULL.replace(
        "viscosity = \"0.62 cP\"",
        "viscosity = \"0.62 cP\"\nfluid = { temperature = \"20 degC\", pressure = \"15 MPa\" }",
    );
    let site = site(&both);
    assert!(close(
        site.ground.layers[0].transmissivity,
        0.110 * DARCY * 22.0 / 0.62e-3
    ));
    assert!(
        site.notes
            .iter()
            .any(|n| n.text.contains("what is stated here holds"))
    );
}

#[test]
fn the_best_direction_is_an_azimuth() {
    let text = FULL.replace(
        "viscosity = \"0.62 cP\"",
        "viscosity = \"0.62 cP\"\nanisotropy = { ratio = 4, azimuth = \"30 deg\" }",
    );
    let anisotropy = site(&text).ground.layers[0].anisotropy.unwrap();
    assert!(
        close(anisotropy.ratio, 4.0) && close(anisotropy.direction, std::f64::consts::PI / 3.0)
    );
    // North conducts better than east.
    let [[east, _], [_, north]] = anisotropy.tensor();
    assert!(north > east);
}

#[test]
fn a_well_may_be_open_to_several_layers() {
    let text = LINE.replace(
        "at = [\"0 ft\", \"100 ft\"]\nlayer = \"gravel\"",
        "at = [\"0 ft\", \"100 ft\"]\nlayer = [\"sand\", \"gravel\"]",
    );
    let site = site(&text);
    let open: Vec<usize> = site.ground.wells[0].layers().collect();
    assert_eq!(open, [1, 0]);
    assert!(site.notes.iter().any(|n| n.key == "well \"P\": skin"));
    // A gauge in it is in every one of them.
    let seated = text.replace("well = \"Q\"", "well = \"P\"\nlayer = \"gravel\"");
    assert_eq!(super::site(&seated).ground.gauges[1].seat, Seat::InWell(0));
}
