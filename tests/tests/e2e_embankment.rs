//! An invented embankment, from its site file over commissioning to an alarm, its report, and a re-run that agrees.

use std::fmt::Write as _;
use std::fs;
use std::path::Path;

use borewake::record::Stamp;
use borewake_tests::embankment::{DAY, NOISE, PIEZOMETERS, START, Story, record};
use borewake_tests::{Daemon, borewake, borewake_in};
use rustix::process::Signal;
use serde_json::Value;

/// Days of the record, and of commissioning.
const DAYS: f64 = 950.0;
const LEARNED: f64 = 730.0;

/// The site file, with its store in a folder.
fn site(folder: &str) -> String {
    let mut text = format!(
        r#"[site]
id = "heron-bank"
name = "Heron Bank (invented)"
units = "head"
[store]
folder = "{folder}"
[embankment]
pool = "pool.stage"
rain = "rain.gauge"
[http]
listen = "127.0.0.1:0"
[[limit]]
gauge = "P-4"
practice = "piezometer-threshold"
above = "40 m H2O"
priority = "high"
response = "tell the dam engineer"
author = "invented, 2028-01-01"
"#
    );
    let mut channels = String::from(
        "\n[[source]]\nname = \"log\"\nkind = \"log\"\n\
         [[source.channel]]\nid = \"pool.stage\"\nkind = \"stage\"\nunit = \"m\"\n\
         [[source.channel]]\nid = \"rain.gauge\"\nkind = \"rain\"\nunit = \"mm/h\"\nholds = \"before\"\n\
         [[source.channel]]\nid = \"weir.flow\"\nkind = \"rate\"\nunit = \"l/s\"\n",
    );
    for index in 0..PIEZOMETERS.len() {
        let _ = write!(
            text,
            "[[gauge]]\nname = \"P-{index}\"\nat = [\"{index} m\", \"0 m\"]\nelevation = \"4 m\"\nstring = \"piezometer\"\n\
             channel = \"p{index}\"\nreference = \"vented\"\nnoise = \"{NOISE} Pa\"\ndrift = \"0.5 kPa/yr\"\n"
        );
        let _ = write!(
            channels,
            "[[source.channel]]\nid = \"p{index}\"\nkind = \"pressure\"\nunit = \"kPa\"\n"
        );
    }
    text + &channels
}

/// The log as people keep it.
fn log(story: &Story) -> String {
    let mut text = String::from("time,pool.stage,rain.gauge,weir.flow");
    for index in 0..PIEZOMETERS.len() {
        let _ = write!(text, ",p{index}");
    }
    for sample in record(DAYS, 10_800.0, story) {
        let _ = write!(
            text,
            "\n{},{:.3},{:.2},{:.3}",
            Stamp::from_seconds(sample.time),
            sample.pool,
            sample.rain * 3.6e6,
            0.05 * sample.pool
        );
        for pressure in &sample.gauges {
            let _ = write!(text, ",{:.4}", pressure / 1e3);
        }
    }
    text + "\n"
}

fn at(day: f64) -> String {
    Stamp::from_seconds(START + day * DAY).to_string()
}

fn alarms(path: &Path) -> Vec<Value> {
    let text = fs::read_to_string(path).expect("events");
    text.lines()
        .map(|line| serde_json::from_str::<Value>(line).expect("one JSON document a line"))
        .filter(|e| e["type"] == "borewake.alarm.v1")
        .collect()
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn an_embankment_is_watched_from_its_site_file_to_its_report() {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let here = folder.path();
    fs::write(here.join("site.toml"), site("made")).expect("a site file");
    let story = Story {
        rise: Some((915.0, 0.01)),
        ..Story::default()
    };
    fs::write(here.join("log.csv"), log(&story)).expect("a log");

    let checked = borewake_in(here, &["check", "site.toml"]).done().stdout;
    for word in ["Embankment", "pool.stage", "season", "ageing", "P-5"] {
        assert!(checked.contains(word), "{word}: {checked}");
    }
    // What only a field of wells has is refused before any work.
    for asked in [["--compare", "leaky"], ["--report", "page.html"]] {
        let refused = borewake_in(here, &[&["commission", "site.toml"], &asked[..]].concat());
        assert_eq!(refused.code, Some(2), "{refused:?}");
        assert!(refused.stderr.contains(asked[0]), "{refused:?}");
    }
    let to = at(LEARNED);
    let said = borewake_in(
        here,
        &["commission", "site.toml", "--log", "log.csv", "--to", &to],
    )
    .done()
    .stdout;
    for word in [
        "share of pool",
        "mean lag",
        "season",
        "no place is claimed",
        "emergency action plan",
    ] {
        assert!(said.contains(word), "{word}: {said}");
    }
    let checked = borewake_in(here, &["check", "site.toml", "--json"])
        .done()
        .json();
    let share = checked["model"]["answers"][3]["response"][0]
        .as_f64()
        .expect("a share");
    assert!((share - 0.45).abs() < 0.06, "{share}");

    // The pool keeps its level, and every piezometer has what is to come.
    let ahead = borewake_in(
        here,
        &[
            "forecast",
            "site.toml",
            "--log",
            "log.csv",
            "--svg",
            "ahead.svg",
            "--csv",
            "ahead.csv",
        ],
    )
    .done()
    .stdout;
    for word in ["P-5", "after 6 h", "after 10 d", "keeps its last level"] {
        assert!(ahead.contains(word), "{word}: {ahead}");
    }
    for file in ["ahead.svg", "ahead.csv"] {
        assert!(here.join(file).exists(), "{file}");
    }

    // Played twice it says the same: nothing for half a year, then what began on day 915, at two piezometers.
    let replay = |store: &str, events: &str| {
        let _ = borewake_in(
            here,
            &[
                "replay",
                "site.toml",
                "log.csv",
                "--store",
                store,
                "--events",
                events,
            ],
        )
        .done();
    };
    replay("kept", "first.ndjson");
    replay("again", "second.ndjson");
    let first = fs::read_to_string(here.join("first.ndjson")).expect("events");
    assert!(first == fs::read_to_string(here.join("second.ndjson")).expect("events"));
    let told = alarms(&here.join("first.ndjson"));
    let watch: Vec<&Value> = told
        .iter()
        .filter(|e| !e["data"]["finding"].is_null())
        .collect();
    let alarm = watch.first().expect("an alarm of the watch");
    assert!(
        alarm["time"].as_str().expect("a time") >= at(915.0).as_str(),
        "{alarm}"
    );
    assert!(
        alarm["time"].as_str().expect("a time") < at(930.0).as_str(),
        "{alarm}"
    );
    assert!(
        alarm["data"]["response"]
            .as_str()
            .expect("a response")
            .contains("emergency action plan")
    );
    assert_eq!(alarm["data"]["priority"], "high");
    let last = watch.last().expect("an alarm of the watch");
    let finding = &last["data"]["finding"];
    assert_eq!(finding["cause"], "unexplained", "{finding}");
    let onset = finding["onset"].as_str().expect("an onset");
    assert!(
        onset > at(910.0).as_str() && onset < at(928.0).as_str(),
        "{onset}"
    );
    let gauges = finding["gauges"].to_string();
    assert!(gauges.contains("P-3") && gauges.contains("P-4"), "{gauges}");
    assert!(finding["place"].is_null());

    // What was played is a store like any other: its re-run agrees, the daemon goes on with it, and reports are made of it.
    fs::copy(here.join("made/ground.bin"), here.join("kept/ground.bin")).expect("the ground file");
    fs::write(here.join("kept.toml"), site("kept")).expect("a site file");
    let _ = borewake_in(here, &["verify", "kept.toml"]).done();
    let daemon = Daemon::start(&here.join("kept.toml")).await;
    let listed = borewake(&["alarms".as_ref(), here.join("kept.toml").as_os_str()]).done();
    assert!(listed.stdout.contains("unexplained"), "{}", listed.stdout);
    assert!(daemon.stop(Signal::TERM).success());
    let written = borewake_in(here, &["report", "kept.toml", "watch"]).done();
    let html = fs::read_to_string(here.join(written.stdout.trim())).expect("a report");
    for word in [
        "emergency action plan comes first",
        "unexplained",
        "pool.stage",
        "P-4",
        "share of pool",
    ] {
        assert!(html.contains(word), "{word}");
    }
}

#[test]
fn mistakes_about_an_embankment_are_told_with_their_mend() {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let here = folder.path();
    let wrong = |change: &dyn Fn(String) -> String| {
        fs::write(here.join("site.toml"), change(site("made"))).expect("a site file");
        let output = borewake_in(here, &["check", "site.toml"]);
        assert_ne!(output.code, Some(0));
        format!("{}{}", output.stdout, output.stderr)
    };
    let told = wrong(&|s| s.replace("pool = \"pool.stage\"\n", ""));
    assert!(told.contains("`pool` is missing"), "{told}");
    let told = wrong(&|s| s.replace("rain = \"rain.gauge\"", "rain = \"pool.stage\""));
    assert!(told.contains("a channel of kind rain is due"), "{told}");
    let told = wrong(&|s| s.replace("pool = \"pool.stage\"", "pool = \"p3\""));
    assert!(told.contains("takes this channel"), "{told}");
    let told = wrong(&|s| s.replace("rain = ", "rainn = "));
    assert!(told.contains("did you mean `rain`?"), "{told}");
    let told = wrong(&|s| s + "\n[[layer]]\nname = \"core\"\n");
    assert!(
        told.contains("vertical section with a free surface"),
        "{told}"
    );
}
