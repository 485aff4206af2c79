//! What is written, character by character, for a small invented store.

use std::path::Path;

use borewake_model::finding::{
    Cause, Expectation, Finding, Place, Size, SizeUnit, Subject, Weighed,
};

use super::tables::{Legend, Span};
use super::{What, instant, write};
use crate::config::Conversion;
use crate::record::{
    Acknowledgement, Alarm, AlarmId, AlarmKind, Blind, ChannelKind, ClockEpoch, ClockState,
    Condition, Delivery, DeviceStatus, EntryKind, Latch, Names, Priority, Quality, Reading, Stamp,
    Step, Suppression, Transition, TransitionKind,
};
use crate::store::{Applied, Reader, Store, StoreOptions};

const HOUR: i64 = 3_600 * Stamp::SECOND;

/// 2031-03-01T00:00:00Z is a whole number of hours after the epoch.
fn midnight() -> Stamp {
    instant("2031-03-01").unwrap()
}

fn legend() -> Legend {
    let kilopascal = Conversion {
        scale: 1000.0,
        offset: 0.0,
    };
    Legend {
        names: Names {
            gauges: vec!["O-1".to_owned(), "O-2".to_owned()],
            layers: vec!["lower sand".to_owned()],
            ..Names::default()
        },
        channels: [("o1.pressure".into(), (ChannelKind::Pressure, kilopascal))].into(),
        block: HOUR,
    }
}

fn reading(channel: &str, after: i64, value: Option<f64>) -> Reading {
    Reading {
        channel: channel.into(),
        sampled: midnight().plus(after),
        received: midnight().plus(after + 40_000),
        epoch: ClockEpoch(0),
        value,
        raw: value.map(|v| v / 1000.0),
        quality: value.map_or(Quality::Missing, |_| Quality::Good),
        device: DeviceStatus::Normal,
        clock: ClockState::Foreign,
    }
}

fn finding(block: i64) -> Finding {
    let weighed = |cause, probability| Weighed {
        cause,
        probability,
        subject: Some(Subject::Place),
        log_evidence: 12.0,
    };
    Finding {
        block,
        causes: vec![
            weighed(Cause::Leak, 0.9375),
            weighed(Cause::Interference, 0.0625),
        ],
        named: true,
        onset: midnight().seconds(),
        onset_sd: 1800.0,
        size: Some(Size {
            value: 1.25e-6,
            sd: 2e-7,
            unit: SizeUnit::CubicMetrePerSecond,
        }),
        place: Some(Place {
            x: 120.0,
            y: -40.5,
            layer: 0,
            radius_90: 85.0,
        }),
        gauges: vec![(1, -900.0, 40.0)],
        log_mixture: 11.5,
        log_threshold: 9.25,
    }
}

async fn filled(folder: &Path) -> Store {
    let store = Store::open(folder, StoreOptions::scratch())
        .await
        .unwrap()
        .store;
    let delivery = Delivery {
        source: "skid".into(),
        readings: vec![
            reading("o1.pressure", 0, Some(2_500_125.0)),
            reading("o1.pressure", Stamp::SECOND, None),
            reading("i1.flow", 500_000, Some(0.0125)),
            reading("o1.pressure", HOUR, Some(2_500_000.0)),
        ],
        rejected: Vec::new(),
        ack: None,
    };
    store.commit(vec![delivery], midnight()).await.unwrap();
    let block = midnight().0 / HOUR;
    let step = Step {
        block,
        expectations: vec![
            Some(Expectation {
                mean: 2_500_000.0,
                sd: 40.0,
            }),
            None,
        ],
        departures: vec![Some(125.0), None],
        blind: vec![None, Some(Blind::NoData)],
        log_mixture: 11.5,
        log_threshold: 9.25,
        finding: Some(finding(block)),
    };
    let judged = EntryKind::Judged {
        step: Box::new(step),
        rerun: None,
    };
    let seq = store.append(judged, midnight()).await.unwrap();
    let transition = Transition {
        alarm: Alarm {
            id: AlarmId("watch".to_owned()),
            kind: AlarmKind::Watch,
            occurrence: 1,
            sequence: 1,
            condition: Condition::Present,
            acknowledgement: Acknowledgement::Unacknowledged,
            latch: Latch::None,
            suppression: Suppression::None,
            priority: Priority::High,
            since: midnight(),
            summary: "leak, 0.1 m3/d".to_owned(),
            response: "call the duty engineer".to_owned(),
            finding: Some(finding(block)),
        },
        kind: TransitionKind::Raised,
        at: midnight().plus(HOUR),
        recorded: midnight().plus(2 * HOUR),
        by: None,
        note: String::new(),
    };
    let applied = Applied {
        position: seq,
        transitions: vec![transition],
        ..Applied::default()
    };
    store.apply(applied).await.unwrap();
    store
}

async fn written(reader: &Reader, what: What, span: Span, json: bool) -> String {
    let mut out = Vec::new();
    let bar = indicatif::ProgressBar::hidden();
    write(what, reader, &legend(), span, &mut out, json, &bar)
        .await
        .unwrap();
    String::from_utf8(out).unwrap()
}

const ALL: Span = Span {
    from: Stamp(i64::MIN),
    to: Stamp(i64::MAX),
};

#[tokio::test]
async fn tables_are_written_as_they_were_beside_a_running_daemon() {
    let dir = tempfile::tempdir().unwrap();
    let store = filled(dir.path()).await;
    let reader = Reader::open(dir.path()).await.unwrap();
    assert_eq!(
        written(&reader, What::Readings, ALL, false).await,
        "time,channel,value,quality,si_value,si_unit,device,clock,clock_run,received\n\
         2031-03-01T00:00:00.000Z,o1.pressure,2500.125,1,2500125,Pa,normal,foreign,0,2031-03-01T00:00:00.040Z\n\
         2031-03-01T00:00:00.500Z,i1.flow,1.25e-5,1,0.0125,,normal,foreign,0,2031-03-01T00:00:00.540Z\n\
         2031-03-01T00:00:01.000Z,o1.pressure,,9,,Pa,normal,foreign,0,2031-03-01T00:00:01.040Z\n\
         2031-03-01T01:00:00.000Z,o1.pressure,2500,1,2500000,Pa,normal,foreign,0,2031-03-01T01:00:00.040Z\n"
    );
    assert_eq!(
        written(&reader, What::Expectations, ALL, false).await,
        "start,end,gauge,reading_Pa,expected_Pa,sd_Pa,departure_Pa,blind,block,revision\n\
         2031-03-01T00:00:00.000Z,2031-03-01T01:00:00.000Z,O-1,2500125,2500000,40,125,,536136,1\n\
         2031-03-01T00:00:00.000Z,2031-03-01T01:00:00.000Z,O-2,,,,,no-data,536136,1\n"
    );
    assert_eq!(
        written(&reader, What::Findings, ALL, false).await,
        "start,end,cause,probability,named,subject,onset,onset_sd_s,size,size_sd,size_unit,x_m,y_m,layer,radius_90_m,log_mixture,log_threshold,causes,block,revision\n\
         2031-03-01T00:00:00.000Z,2031-03-01T01:00:00.000Z,leak,0.9375,yes,,2031-03-01T00:00:00.000Z,1800,1.25e-6,2e-7,m3/s,120,-40.5,lower sand,85,11.5,9.25,leak 0.9375; interference 0.0625,536136,1\n"
    );
    assert_eq!(
        written(&reader, What::Alarms, ALL, false).await,
        "time,recorded,alarm,transition,state,occurrence,sequence,priority,condition,acknowledgement,latch,suppression,since,cause,probability,by,note,summary,response\n\
         2031-03-01T01:00:00.000Z,2031-03-01T02:00:00.000Z,watch,raised,unacknowledged,1,1,high,present,unacknowledged,none,none,2031-03-01T00:00:00.000Z,leak,0.9375,,,\"leak, 0.1 m3/d\",call the duty engineer\n"
    );
    assert_eq!(
        written(&reader, What::Expectations, ALL, true)
            .await
            .lines()
            .next()
            .unwrap(),
        "{\"blind\":null,\"block\":536136,\"departure_Pa\":125.0,\"end\":\"2031-03-01T01:00:00.000Z\",\
         \"expected_Pa\":2500000.0,\"gauge\":\"O-1\",\"reading_Pa\":2500125.0,\"revision\":1,\"sd_Pa\":40.0,\
         \"start\":\"2031-03-01T00:00:00.000Z\"}"
    );
    store.close().await.unwrap();
}

#[tokio::test]
async fn a_span_holds_its_first_instant_and_not_its_last() {
    let dir = tempfile::tempdir().unwrap();
    let store = filled(dir.path()).await;
    let rows = async |what, from: i64, to: i64| {
        let span = Span {
            from: midnight().plus(from),
            to: midnight().plus(to),
        };
        let text = written(store.reader(), what, span, false).await;
        text.lines().count() - 1
    };
    assert_eq!(rows(What::Readings, 0, HOUR).await, 3);
    assert_eq!(rows(What::Readings, 1, HOUR + 1).await, 3);
    assert_eq!(rows(What::Expectations, 0, 1).await, 2);
    assert_eq!(rows(What::Expectations, 1, HOUR).await, 0);
    assert_eq!(rows(What::Alarms, HOUR, HOUR + 1).await, 1);
    assert_eq!(rows(What::Alarms, 0, HOUR).await, 0);
}

#[test]
fn instants_are_dates_or_rfc_3339() {
    assert_eq!(instant("2031-03-01"), instant("2031-03-01T02:00:00+02:00"));
    assert!(instant("yesterday").unwrap_err().contains("2031-03-01T"));
}
