//! The evidence for one alarm as one file: whole, self-contained, and with names that stay names.

use std::fs;

use borewake_tests::Daemon;
use borewake_tests::borewake_in;
use borewake_tests::site::{self, Site};
use borewake_tests::watched::watched;
use rustix::process::Signal;

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_report_stands_alone_and_names_stay_names() {
    let site = Site::new(&[site::LIMIT]);
    let text = fs::read_to_string(site.file()).expect("the site file");
    let sly = text.replace("Bench (invented)", "Bench <script>alert(1)</script> & Co");
    fs::write(site.file(), sly).expect("the site file");
    watched(&site.store(), true).await;
    // The daemon makes alarms of what was judged.
    let daemon = Daemon::start(&site.file()).await;
    assert!(daemon.stop(Signal::TERM).success());
    let written = borewake_in(site.folder(), &["report", "site.toml", "watch"]).done();
    let path = site.folder().join(written.stdout.trim());
    assert_eq!(
        path.file_name().and_then(|n| n.to_str()),
        Some("report-bench-watch-1.html")
    );
    let html = fs::read_to_string(&path).expect("a report");
    for word in [
        "Bench &lt;script&gt;alert(1)&lt;/script&gt; &amp; Co",
        "87.0 %",
        "meter scale",
        "310 m east, 120 m south",
        "not a safety function",
        "Data quality",
        "o.pressure",
        "There is no model now",
        "cannot be told apart",
    ] {
        assert!(html.contains(word), "{word}");
    }
    assert!(
        !html.contains("<script"),
        "no script, of ours or of the site file"
    );
    for outside in ["src=", "href=", "@import", "url(http"] {
        assert!(!html.contains(outside), "{outside}");
    }
    assert_eq!(html.matches("<svg").count(), 3, "the plan and two gauges");
    let unknown = borewake_in(site.folder(), &["report", "site.toml", "watsh"]);
    assert_eq!(unknown.code, Some(2));
    assert!(
        unknown.stderr.contains("there are") && unknown.stderr.contains("watch"),
        "{unknown:?}"
    );
    let never = borewake_in(
        site.folder(),
        &["report", "site.toml", "watch", "--occurrence", "4"],
    );
    assert!(
        never.stderr.contains("there is no occurrence 4"),
        "{never:?}"
    );
}
