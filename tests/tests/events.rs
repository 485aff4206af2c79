//! Events as consumers get them, held against the published schemas by a general validator.

use serde_json::Value;

use borewake::alarm::NOTICE;
use borewake::publish::events::{
    ALARM, EXPECTATION, GaugeNews, HEALTH, alarm, alarm_outgoing, expectation, health,
};
use borewake::record::{
    Acknowledgement, Alarm, AlarmId, AlarmKind, AlarmView, Blind, Cause, Condition, Expectation,
    Finding, GaugeView, Latch, Names, Place, Priority, Size, SizeUnit, Snapshot, SourceView, Stamp,
    Subject, Suppression, Transition, TransitionKind, UnitSystem, Weighed,
};

const SCHEMAS: [(&str, &str); 3] = [
    (
        ALARM,
        include_str!("../../deploy/schemas/borewake.alarm.v1.json"),
    ),
    (
        EXPECTATION,
        include_str!("../../deploy/schemas/borewake.expectation.v1.json"),
    ),
    (
        HEALTH,
        include_str!("../../deploy/schemas/borewake.health.v1.json"),
    ),
];

/// Parses an event and holds it against the schema its type names.
fn checked(event: &str) -> Value {
    let value: Value = serde_json::from_str(event).unwrap();
    let kind = value["type"].as_str().unwrap();
    let text = SCHEMAS.iter().find(|s| s.0 == kind).unwrap().1;
    let schema: Value = serde_json::from_str(text).unwrap();
    assert_eq!(value["dataschema"], schema["$id"]);
    let mut compiler = boon::Compiler::new();
    compiler.enable_format_assertions();
    let mut all = boon::Schemas::new();
    let at = "http://schemas.test/event.json";
    compiler.add_resource(at, schema).unwrap();
    let index = compiler.compile(at, &mut all).unwrap();
    if let Err(why) = all.validate(&value, index) {
        panic!("{why:#}\n{event}");
    }
    assert!(
        event.len() < 64 * 1024,
        "intermediaries forward up to 64 KiB"
    );
    assert!(!event.contains('\n'));
    value
}

fn names() -> Names {
    Names {
        site: "sorrel-flat".into(),
        units: UnitSystem::Metric,
        gauges: vec!["O-1".into(), "O-2".into()],
        wells: vec!["I-1".into()],
        neighbours: vec!["old quarry well".into()],
        layers: vec!["lower sand".into()],
    }
}

fn leak() -> Transition {
    let weighed = |cause, probability, subject| Weighed {
        cause,
        probability,
        subject: Some(subject),
        log_evidence: 20.0,
    };
    let finding = Finding {
        block: 1,
        causes: vec![
            weighed(Cause::Leak, 0.97, Subject::Place),
            weighed(Cause::Interference, 0.02, Subject::Neighbour(0)),
        ],
        named: true,
        onset: Stamp::parse("2031-05-02T04:00:00Z").unwrap().seconds(),
        onset_sd: 10_800.0,
        size: Some(Size {
            value: 1.6e-4,
            sd: 1.2e-5,
            unit: SizeUnit::CubicMetrePerSecond,
        }),
        place: Some(Place {
            x: 310.0,
            y: -480.5,
            layer: 0,
            radius_90: 90.0,
        }),
        gauges: vec![(1, -2000.0, 40.0)],
        log_mixture: 12.0,
        log_threshold: 10.0,
    };
    Transition {
        alarm: Alarm {
            id: AlarmId("watch".into()),
            kind: AlarmKind::Watch,
            occurrence: 3,
            sequence: 7,
            condition: Condition::Present,
            acknowledgement: Acknowledgement::Unacknowledged,
            latch: Latch::None,
            suppression: Suppression::None,
            priority: Priority::High,
            since: Stamp::parse("2031-05-02T04:00:00Z").unwrap(),
            summary: "leak".into(),
            response: "call the duty engineer".into(),
            finding: Some(finding),
        },
        kind: TransitionKind::Changed,
        at: Stamp::parse("2031-05-03T00:30:00Z").unwrap(),
        recorded: Stamp::parse("2031-05-03T00:32:00.123Z").unwrap(),
        by: None,
        note: String::new(),
    }
}

#[test]
fn an_alarm_says_what_consumers_are_promised() {
    let event = checked(&alarm(&leak(), &names(), false));
    assert_eq!(event["id"], "watch.3.7");
    assert_eq!(event["subject"], "watch-3");
    assert_eq!(event["source"], "borewake/sorrel-flat");
    assert_eq!(event["time"], "2031-05-03T00:30:00.000Z");
    assert_eq!(event["recordedtime"], "2031-05-03T00:32:00.123Z");
    assert_eq!(event["sequence"], "00000003.00000007");
    assert!(event.get("replay").is_none());
    let data = &event["data"];
    assert_eq!(
        (&data["state"], &data["transition"]),
        (&"unacknowledged".into(), &"changed".into())
    );
    assert_eq!(
        (&data["advisory"], &data["notice"]),
        (&true.into(), &NOTICE.into())
    );
    let finding = &data["finding"];
    assert_eq!(
        (&finding["cause"], &finding["named"]),
        (&"leak".into(), &true.into())
    );
    assert_eq!(finding["causes"][0]["probability"], 0.97);
    assert_eq!(finding["causes"][1]["of"], "old quarry well");
    assert_eq!(finding["onset"], "2031-05-02T04:00:00.000Z");
    assert_eq!(finding["onset_sd_s"], 10_800.0);
    assert_eq!(
        (&finding["size"]["value"], &finding["size"]["unit"]),
        (&1.6e-4.into(), &"m3/s".into())
    );
    assert_eq!(
        (&finding["place"]["x"], &finding["place"]["y"]),
        (&310.0.into(), &(-480.5).into())
    );
    assert_eq!(
        (&finding["place"]["layer"], &finding["place"]["radius_90_m"]),
        (&"lower sand".into(), &90.0.into())
    );
    assert_eq!(finding["gauges"][0]["name"], "O-2");
    assert_eq!(checked(&alarm(&leak(), &names(), true))["replay"], true);
}

#[test]
fn every_state_kind_and_act_fits_the_schema() {
    for kind in [AlarmKind::Limit, AlarmKind::Watch, AlarmKind::Blind] {
        for act in [
            TransitionKind::Raised,
            TransitionKind::Acknowledged,
            TransitionKind::Returned,
            TransitionKind::Changed,
            TransitionKind::Updated,
            TransitionKind::Revised,
            TransitionKind::Adopted,
        ] {
            for suppression in [
                Suppression::None,
                Suppression::Shelved { until: Stamp(0) },
                Suppression::Design { rule: "r".into() },
                Suppression::OutOfService,
            ] {
                let mut t = leak();
                t.alarm.kind = kind;
                t.alarm.suppression = suppression;
                t.kind = act;
                t.by = Some("jm".into());
                t.note = "\"quoted\"\nand broken".into();
                if kind != AlarmKind::Watch {
                    t.alarm.finding = None;
                }
                let event = checked(&alarm(&t, &names(), false));
                assert_eq!(event["subject"] == "watch-3", kind == AlarmKind::Watch);
            }
        }
    }
    // A finding without place or size, about what the ground does not have.
    let mut t = leak();
    let f = t.alarm.finding.as_mut().unwrap();
    (f.place, f.size, f.named) = (None, None, false);
    f.gauges = vec![(9, 1.0, f64::MAX)];
    f.causes[0].subject = Some(Subject::Well(9));
    let event = checked(&alarm(&t, &names(), false));
    assert_eq!(event["data"]["finding"]["causes"][0]["of"], "well 10");
}

#[test]
fn brokers_keep_an_alarm_until_it_is_normal() {
    let kept = alarm_outgoing(&leak(), &names(), false);
    assert_eq!(kept.len(), 1);
    assert_eq!(
        (kept[0].topic.as_str(), kept[0].retain),
        ("alarm/watch", true)
    );
    let mut t = leak();
    t.alarm.condition = Condition::Absent;
    t.alarm.acknowledgement = Acknowledgement::Acknowledged;
    let gone = alarm_outgoing(&t, &names(), false);
    assert_eq!(gone.len(), 2);
    assert!(!gone[0].retain && gone[0].payload.contains("\"normal\""));
    assert!(gone[1].retain && gone[1].payload.is_empty());
    assert_ne!(gone[0].id, gone[1].id);
}

#[test]
fn expectations_and_the_heartbeat_fit_their_schemas() {
    let mut news = GaugeNews {
        gauge: 1,
        block: 1_085_000,
        end: Stamp::parse("2031-11-20T04:30:00Z").unwrap(),
        expectation: Some(Expectation {
            mean: 2.5e6,
            sd: 60.0,
        }),
        departure: Some(-100.0),
        blind: None,
    };
    let (topic, event) = expectation(&news, &names(), Stamp(0), false);
    assert_eq!(topic, "gauge/O-2/expectation");
    assert_eq!(checked(&event)["data"]["reading"], 2_499_900.0);
    news.expectation = None;
    news.departure = None;
    news.blind = Some(Blind::StaleRate);
    let event = checked(&expectation(&news, &names(), Stamp(0), true).1);
    assert_eq!(event["data"]["blind"], "stale-rate");
    assert_eq!(event["data"]["mean"], Value::Null);
    // Numbers that are none become null, never NaN.
    news.expectation = Some(Expectation {
        mean: f64::NAN,
        sd: f64::INFINITY,
    });
    checked(&expectation(&news, &names(), Stamp(0), false).1);

    let t = leak();
    let mut snapshot = Snapshot {
        site: "sorrel-flat".into(),
        ..Snapshot::default()
    };
    checked(&health(&snapshot, false));
    snapshot.alarms.push(AlarmView {
        state: t.alarm.state(),
        alarm: t.alarm,
    });
    snapshot.gauges.insert(
        "O-2".into(),
        GaugeView {
            blind: Some(Blind::NoData),
            ..GaugeView::default()
        },
    );
    snapshot
        .sources
        .insert("skid".into(), SourceView::default());
    let event = checked(&health(&snapshot, true));
    assert_eq!(event["online"], true);
    assert_eq!(event["data"]["alarms"]["unacknowledged"], 1);
    assert_eq!(event["data"]["blind"][0], "O-2");
}

#[test]
fn the_schemas_refuse_what_is_wrong() {
    let mut event: Value = serde_json::from_str(&alarm(&leak(), &names(), false)).unwrap();
    event["data"]["state"] = "B".into();
    let text = event.to_string();
    assert!(std::panic::catch_unwind(|| checked(&text)).is_err());
    let mut event: Value = serde_json::from_str(&alarm(&leak(), &names(), false)).unwrap();
    event["recorded_time"] = "2031-05-03T00:30:00.000Z".into();
    let text = event.to_string();
    assert!(std::panic::catch_unwind(|| checked(&text)).is_err());
}
