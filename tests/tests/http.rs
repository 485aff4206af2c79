//! The daemon's data over HTTP: who may ask, what is answered, and what bad input costs.

use std::io::BufRead as _;
use std::net::{TcpListener, TcpStream};
use std::time::{Duration, Instant};

use borewake_tests::http::{Ask, head};
use borewake_tests::readings::{heard, now_plus};
use borewake_tests::site::{self, Site};
use borewake_tests::watched::{http, token, watched};
use borewake_tests::{Broker, Daemon, Publisher, borewake, free_port, until};
use serde_json::json;

async fn daemon(leak: bool) -> (Site, Daemon, u16) {
    let port = free_port();
    let site = Site::new(&[site::LIMIT, &http(port)]);
    watched(&site.store(), leak).await;
    let daemon = Daemon::start(&site.file()).await;
    listening(port).await;
    (site, daemon, port)
}

async fn listening(port: u16) {
    until("the page's port", async || {
        TcpStream::connect(("127.0.0.1", port)).ok()
    })
    .await;
    // What was judged before the start is read in beside the answers.
    until("what the watch said", async || {
        let answer = Ask::get(port, "/api/v1/departures?bins=10").send();
        (answer.status == 200).then_some(())
    })
    .await;
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn reads_from_this_machine_are_open_and_every_path_is_described() {
    let (_site, _daemon, port) = daemon(true).await;
    let described = Ask::get(port, "/api/v1/openapi.json").send().json();
    let paths = described["paths"].as_object().expect("paths");
    for (path, methods) in paths {
        if methods.get("get").is_none() || path == "/api/v1/events" {
            continue;
        }
        let path = path
            .replace("{id}", "watch")
            .replace("/gauges/{name}", "/gauges/O")
            .replace("{name}", "o.pressure");
        let answer = Ask::get(port, &path).send();
        assert_eq!(answer.status, 200, "{path}: {answer:?}");
        assert!(
            answer
                .header("content-security-policy")
                .is_some_and(|p| p.contains("default-src 'none'"))
        );
    }
    let page = Ask::get(port, "/").send();
    assert_eq!(page.status, 200);
    let tag = page.header("etag").expect("a tag").to_owned();
    assert_eq!(
        Ask::get(port, "/")
            .header("if-none-match", &tag)
            .send()
            .status,
        304
    );
    for (path, status) in [
        ("/api/v1/nothing", 404),
        ("/../etc/passwd", 404),
        ("/api/v1/gauges/X/series", 404),
        ("/api/v1/alarms/none", 404),
        ("/api/v1/departures?bins=0", 400),
        ("/api/v1/departures?bins=99999", 400),
        ("/api/v1/departures?from=yesterday", 400),
        (
            "/api/v1/departures?from=2031-01-02T00:00:00Z&to=2031-01-01T00:00:00Z",
            400,
        ),
        ("/api/v1/history?limit=-1", 400),
        ("/api/v1/departures?colour=red", 400),
    ] {
        let answer = Ask::get(port, path).send();
        assert_eq!(answer.status, status, "{path}: {answer:?}");
    }
    let leak = Ask::get(port, "/api/v1/alarms").send().json();
    let watch = &leak["alarms"]
        .as_array()
        .and_then(|a| a.iter().find(|a| a["alarm"] == "watch"))
        .cloned()
        .unwrap_or_default();
    assert_eq!(watch["finding"]["causes"][0]["cause"], "leak", "{leak:#}");
    assert!(
        watch["notice"]
            .as_str()
            .is_some_and(|n| n.contains("not a safety function"))
    );
    let series = Ask::get(port, "/api/v1/gauges/O/series?bins=50")
        .send()
        .json();
    let bins = series["at"].as_array().map_or(0, Vec::len);
    assert!((40..=51).contains(&bins), "{bins}");
    for key in ["reading", "low", "high", "expected", "sd"] {
        assert_eq!(series[key].as_array().map_or(0, Vec::len), bins, "{key}");
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn strangers_hosts_and_tokens_are_refused_clearly() {
    let (site, _daemon, port) = daemon(true).await;
    let file = site.file();
    let path = "/api/v1/alarms/watch/acknowledge";
    let body = r#"{"occurrence": 1, "note": "seen"}"#;
    let told = |ask: Ask<'_>| {
        let answer = ask.send();
        let detail = answer.json()["detail"]
            .as_str()
            .unwrap_or_default()
            .to_owned();
        assert_eq!(
            answer.header("content-type"),
            Some("application/problem+json"),
            "{answer:?}"
        );
        (answer.status, detail)
    };
    // A name that somebody points here, a page of another host, a form sent across.
    assert_eq!(
        told(Ask::get(port, "/api/v1/alarms").header("host", "evil.example")).0,
        421
    );
    assert_eq!(
        told(Ask::get(port, "/").header("host", "evil.example:8070")).0,
        421
    );
    assert_eq!(
        told(Ask::get(port, "/api/v1/alarms").header("origin", "http://evil.example")).0,
        403
    );
    assert_eq!(
        told(Ask::get(port, "/api/v1/alarms").header("sec-fetch-site", "cross-site")).0,
        403
    );
    let own = format!("http://127.0.0.1:{port}");
    assert_eq!(
        Ask::get(port, "/api/v1/alarms")
            .header("origin", &own)
            .send()
            .status,
        200
    );
    assert_eq!(
        Ask::get(port, "/api/v1/alarms")
            .header("host", "localhost")
            .send()
            .status,
        200
    );
    // Through a proxy it is a read from elsewhere.
    let (status, detail) =
        told(Ask::get(port, "/api/v1/alarms").header("x-forwarded-for", "192.0.2.7"));
    assert_eq!(status, 401);
    assert!(detail.contains("borewake token SITE make"), "{detail}");
    assert_eq!(
        Ask::get(port, "/alive")
            .header("x-forwarded-for", "192.0.2.7")
            .send()
            .status,
        200
    );
    // No token, a wrong one, one that may only look, one that is revoked.
    assert_eq!(told(Ask::post(port, path, body)).0, 401);
    assert_eq!(
        told(Ask::post(port, path, body).token("borewake_0000")).0,
        401
    );
    let look = token(&file, "wall", "read");
    let (status, detail) = told(Ask::post(port, path, body).token(&look));
    assert_eq!(status, 403);
    assert!(
        detail.contains("wall") && detail.contains("operate"),
        "{detail}"
    );
    assert_eq!(
        Ask::get(port, "/api/v1/alarms")
            .header("x-forwarded-for", "192.0.2.7")
            .token(&look)
            .send()
            .status,
        200
    );
    let gone = token(&file, "gone", "operate");
    let _ = borewake(&[
        "token".as_ref(),
        file.as_os_str(),
        "revoke".as_ref(),
        "gone".as_ref(),
    ])
    .done();
    assert_eq!(told(Ask::post(port, path, body).token(&gone)).0, 401);
    // Too large, no JSON, an unknown key, an unknown act, the wrong occurrence.
    let operate = token(&file, "jm", "operate");
    let big = format!(r#"{{"occurrence": 1, "note": "{}"}}"#, "x".repeat(20_000));
    assert_eq!(told(Ask::post(port, path, &big).token(&operate)).0, 413);
    assert_eq!(told(Ask::post(port, path, "seen").token(&operate)).0, 400);
    assert_eq!(
        told(Ask::post(port, path, r#"{"occurrence": 1, "by": "root"}"#).token(&operate)).0,
        400
    );
    assert_eq!(
        told(Ask::post(port, "/api/v1/alarms/watch/delete", body).token(&operate)).0,
        404
    );
    assert_eq!(
        told(Ask::post(port, "/api/v1/alarms/watch/adopt", body).token(&operate)).0,
        403
    );
    let (status, detail) = told(Ask::post(port, path, r#"{"occurrence": 7}"#).token(&operate));
    assert_eq!(status, 409);
    assert!(detail.contains("there is no occurrence 7"), "{detail}");
    // And the right one, under the token's name.
    let done = Ask::post(port, path, body).token(&operate).send();
    assert_eq!(done.status, 200, "{done:?}");
    let one = Ask::get(port, "/api/v1/alarms/watch").send().json();
    assert_eq!(one["alarm"]["state"], "acknowledged", "{one:#}");
    assert_eq!(one["history"][0]["by"], "jm");
    // Guessing is slowed down.
    let guess = || Ask::get(port, "/metrics").token("guess").send().status;
    assert!((0..40).any(|_| guess() == 429));
    assert_eq!(Ask::get(port, "/alive").send().status, 200);
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn two_hundred_who_listen_hear_an_alarm_and_gaps_are_filled() {
    let broker = Broker::start();
    let port = free_port();
    let site = Site::new(&[&site::mqtt_source(&broker.url()), site::LIMIT, &http(port)]);
    let _daemon = Daemon::start(&site.file()).await;
    listening(port).await;
    let mut gauge = Publisher::new(broker.port(), "gauge-o");
    heard(&mut gauge, &site.store()).await;
    let before = Ask::get(port, "/api/v1/alarms").send().json()["last_event"]
        .as_i64()
        .expect("a number");
    let mut listeners: Vec<_> = (0..200)
        .map(|_| {
            let mut listener = Ask::get(port, "/api/v1/events").open();
            assert_eq!(head(&mut listener).0, 200);
            listener
        })
        .collect();
    gauge
        .publish(
            "pads/o/p",
            &format!("{{\"p\": 6200, \"t\": \"{}\"}}", now_plus(-5)),
        )
        .await;
    let start = Instant::now();
    for listener in &mut listeners {
        let mut event = String::new();
        while !event.contains("\n\n") {
            let mut line = String::new();
            assert!(
                listener.read_line(&mut line).expect("an event") > 0,
                "cut off: {event}"
            );
            if line.contains("limit-O-above") {
                break;
            }
            event += &line;
        }
    }
    // No limit of time here: it is measured, and said.
    eprintln!(
        "200 listeners had the alarm {:?} after it was sent to the broker",
        start.elapsed()
    );
    drop(listeners);
    // Whoever was away hears it now.
    let path = format!("/api/v1/events?after={before}");
    let mut late = Ask::get(port, &path).open();
    assert_eq!(head(&mut late).0, 200);
    let mut text = String::new();
    while !text.contains("limit-O-above") {
        assert!(late.read_line(&mut text).expect("an event") > 0, "{text}");
    }
    assert!(text.contains("id: ") || text.contains("id:"), "{text}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn metrics_keep_to_the_form() {
    let (_site, _daemon, port) = daemon(false).await;
    let answer = Ask::get(port, "/metrics").send();
    assert!(
        answer
            .header("content-type")
            .is_some_and(|t| t.starts_with("application/openmetrics-text; version=1.0.0"))
    );
    assert!(answer.body.ends_with("# EOF\n"));
    // Rows follow their family's heads; counters end in _total; units end names.
    let mut family = (String::new(), String::new());
    for line in answer.body.lines().filter(|l| *l != "# EOF") {
        let words: Vec<&str> = line.split(' ').collect();
        match words.as_slice() {
            ["#", "TYPE", name, kind] => family = ((*name).to_owned(), (*kind).to_owned()),
            ["#", "UNIT", name, unit] => {
                assert!(*name == family.0 && name.ends_with(unit), "{line}")
            }
            ["#", "HELP", name, ..] => assert_eq!(*name, family.0, "{line}"),
            _ => {
                let name = line.split(['{', ' ']).next().unwrap_or_default();
                let suffix = match family.1.as_str() {
                    "counter" => "_total",
                    "info" => "_info",
                    _ => "",
                };
                assert_eq!(name, format!("{}{suffix}", family.0), "{line}");
                let value = line.rsplit(' ').next().unwrap_or_default();
                assert!(value.parse::<f64>().is_ok_and(f64::is_finite), "{line}");
            }
        }
    }
    assert!(answer.body.contains("borewake_gauge_blind{gauge=\"O\"}"));
    assert!(
        answer.body.contains("borewake_watch_blind 1\n"),
        "there is no ground file"
    );
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_port_that_is_taken_leaves_the_daemon_recording() {
    let taken = TcpListener::bind("127.0.0.1:0").expect("a port");
    let port = taken.local_addr().expect("an address").port();
    let site = Site::new(&[&http(port)]);
    let daemon = Daemon::start(&site.file()).await;
    until("the reason in the log", async || {
        daemon.log().contains("cannot be listened on").then_some(())
    })
    .await;
    assert!(daemon.log().contains("[http]"), "{}", daemon.log());
    drop(taken);
    // It comes by itself once the port is free.
    until("the page", async || {
        let open = TcpStream::connect(("127.0.0.1", port)).is_ok();
        tokio::time::sleep(Duration::from_millis(200)).await;
        open.then_some(())
    })
    .await;
    assert_eq!(Ask::get(port, "/alive").send().body, "alive\n");
    let ready = Ask::get(port, "/ready").send();
    assert_eq!(
        (ready.status, ready.json()["ready"].clone()),
        (200, json!(true))
    );
}
