//! What lies ahead of the invented site: a forecast against what came, from logs and from a store; reach; and a first site file.

use std::collections::BTreeMap;
use std::fmt::Write as _;
use std::fs;
use std::path::Path;

use borewake_tests::{borewake_in, root};
use serde_json::Value;

const COMMISSIONED: &str = "2031-04-10T00:00:00Z";
/// Where the readings that the program is given end; the first leak begins on 18 April.
const NOW: &str = "2031-04-12";
const UNTIL: &str = "2031-04-18";

/// Rows of the invented log, its header first.
fn rows() -> Vec<Vec<String>> {
    let log = fs::read_to_string(root().join("demo-data/log.csv")).expect("the log");
    log.lines()
        .map(|row| row.split(',').map(str::to_owned).collect())
        .collect()
}

/// The invented site with its log up to now, commissioned, and what the wells did next as a plan.
fn prepare(folder: &Path, rows: &[Vec<String>]) {
    let site = fs::read_to_string(root().join("demo-data/site.toml")).expect("the site file");
    let limit = "\n[[limit]]\ngauge = \"M-1\"\nabove = \"15.41 MPa\"\nresponse = \"none, invented\"\n\
                 priority = \"low\"\nauthor = \"invented, 2031-01-01\"\n";
    fs::write(folder.join("site.toml"), site + limit).expect("the site file");
    let mut log = String::new();
    let mut plan = String::from("time,Q-1 [m3/d],Q-2 [m3/d],Q-3 [m3/d]\n");
    for row in rows {
        let time = row[0].as_str();
        if time == "time" || time < NOW {
            let _ = writeln!(log, "{}", row.join(","));
        } else if time < UNTIL {
            let _ = writeln!(plan, "{}", row[..4].join(","));
        }
    }
    fs::write(folder.join("log.csv"), log).expect("the log");
    fs::write(folder.join("plan.csv"), plan).expect("the plan");
    let told = borewake_in(
        folder,
        &[
            "commission",
            "site.toml",
            "--log",
            "log.csv",
            "--to",
            COMMISSIONED,
        ],
    )
    .done();
    assert!(told.stdout.contains("Reach: of leaks"), "{}", told.stdout);
}

/// Hourly means of every gauge that came after now \[Pa\].
fn came(rows: &[Vec<String>]) -> BTreeMap<(String, usize), f64> {
    let mut sums: BTreeMap<(String, usize), (f64, f64)> = BTreeMap::new();
    for row in rows.iter().skip(1) {
        for gauge in 0..6 {
            if let Ok(kpa) = row[4 + gauge].parse::<f64>() {
                let sum = sums.entry((row[0][..13].to_owned(), gauge)).or_default();
                *sum = (sum.0 + 1e3 * kpa, sum.1 + 1.0);
            }
        }
    }
    sums.into_iter().map(|(k, (sum, n))| (k, sum / n)).collect()
}

fn number(value: &Value) -> f64 {
    value.as_f64().expect("a number")
}

#[test]
fn what_came_lies_in_the_band_and_store_and_logs_foretell_the_same() {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let folder = folder.path();
    let rows = rows();
    prepare(folder, &rows);

    let ask = [
        "--json",
        "forecast",
        "site.toml",
        "--plan",
        "plan.csv",
        "--for",
        "6 d",
    ];
    let files = [
        "--svg",
        "ahead.svg",
        "--csv",
        "ahead.csv",
        "--log",
        "log.csv",
    ];
    let from_log = borewake_in(folder, &[&ask[..], &files[..]].concat())
        .done()
        .json();
    let came = came(&rows);
    let (mut inside, mut all) = (0, 0);
    for block in from_log["blocks"].as_array().expect("blocks") {
        let hour = block["from"].as_str().expect("an instant")[..13].to_owned();
        for gauge in 0..6 {
            let read = came[&(hour.clone(), gauge)];
            let off = read - number(&block["mean_pa"][gauge]);
            inside += u32::from(off.abs() <= 1.96 * number(&block["sd_pa"][gauge]));
            all += 1;
        }
    }
    println!("{inside} of {all} hourly means within the 95 % band");
    assert_eq!(all, 6 * 144);
    assert!(f64::from(inside) >= 0.9 * f64::from(all));
    // M-1 passes the limit when the plan raises Q-1: by the readings too.
    let limit = &from_log["limits"][0];
    let reached = came
        .iter()
        .find(|((hour, gauge), mean)| *gauge == 3 && hour.as_str() >= NOW && **mean > 15.41e6)
        .map(|((hour, _), _)| hour.clone());
    match reached.filter(|hour| hour.as_str() < UNTIL) {
        Some(hour) => {
            let early = limit["after_5_percent"].as_str().expect("an instant");
            assert!(early[..10] <= hour[..10], "{limit}, {hour}");
        }
        None => assert!(number(&limit["share"]) < 0.5, "{limit}"),
    }
    let svg = fs::read_to_string(folder.join("ahead.svg")).expect("a picture");
    assert_eq!(
        svg.matches("class=\"expectation\" d=\"M").count(),
        7,
        "a legend and six gauges"
    );
    let sheet = fs::read_to_string(folder.join("ahead.csv")).expect("a sheet");
    assert_eq!(sheet.lines().count(), 1 + 6 * 144);

    // The same readings played into a store.
    let _ = borewake_in(
        folder,
        &["replay", "site.toml", "log.csv", "--store", "played"],
    )
    .done();
    let text = fs::read_to_string(folder.join("site.toml")).expect("the site file");
    let played = text.replace("folder = \"quillet-moor\"", "folder = \"played\"");
    fs::write(folder.join("played.toml"), played).expect("a site file");
    fs::copy(
        folder.join("quillet-moor/ground.bin"),
        folder.join("played/ground.bin"),
    )
    .expect("the ground file");
    let ask = [
        "--json",
        "forecast",
        "played.toml",
        "--plan",
        "plan.csv",
        "--for",
        "6 d",
    ];
    let from_store = borewake_in(folder, &ask).done().json();
    assert_eq!(from_store["blocks"], from_log["blocks"]);
    assert_eq!(from_store["limits"], from_log["limits"]);

    reach(folder);
}

/// Reach of the same site, from the store.
fn reach(folder: &Path) {
    let told = borewake_in(
        folder,
        &[
            "--json",
            "reach",
            "played.toml",
            "--svg",
            "reach.svg",
            "--csv",
            "reach.csv",
            "--gauge-at",
            "-250 m,-350 m",
            "--noise",
            "50 Pa",
        ],
    )
    .done()
    .json();
    let delays: Vec<f64> = told["reach"]["after_s"]
        .as_array()
        .expect("delays")
        .iter()
        .map(number)
        .collect();
    // Blocks of an hour, judged three at a time: an hour is too soon.
    assert_eq!(delays, [6.0, 24.0, 72.0, 240.0, 720.0].map(|h| 3600.0 * h));
    let median = |of: &Value| number(&of["within_outline_m3_s"][2]["median"]);
    // The leak of the demo, found within days, is of 3.7e-4 m3/s.
    let size = median(&told["reach"]);
    println!("median reach after three days {size:.2e} m3/s");
    assert!((1e-6..3.7e-4).contains(&size));
    assert!(median(&told["added"]["with"]) <= 1.001 * median(&told["added"]["without"]));
    let svg = fs::read_to_string(folder.join("reach.svg")).expect("a map");
    assert!(svg.contains("gauge added") && svg.contains("m3/d"));
    let sheet = fs::read_to_string(folder.join("reach.csv")).expect("a sheet");
    let places = told["reach"]["places"].as_array().expect("places").len();
    assert_eq!(sheet.lines().count(), 1 + places);
}

#[test]
fn a_first_site_file_holds_and_run_tells_how_to_begin() {
    let folder = tempfile::tempdir().expect("a temporary folder");
    for kind in ["wells", "dewatering", "embankment"] {
        let file = format!("{kind}.toml");
        let _ = borewake_in(folder.path(), &["new", &file, "--kind", kind]).done();
        let _ = borewake_in(folder.path(), &["check", &file]).done();
        let again = borewake_in(folder.path(), &["new", &file]);
        assert_eq!(again.code, Some(2), "{again:?}");
        assert!(again.stderr.contains("stays as it is"), "{again:?}");
    }
    let run = borewake_in(folder.path(), &["run"]);
    assert_eq!(run.code, Some(2));
    for word in ["borewake new", "check", "commission", "demo"] {
        assert!(run.stderr.contains(word), "{word}: {run:?}");
    }
    // A forecast without a model says what makes one.
    let bare = borewake_in(folder.path(), &["forecast", "wells.toml"]);
    assert_eq!(bare.code, Some(3), "{bare:?}");
    assert!(bare.stderr.contains("borewake commission"), "{bare:?}");
}
