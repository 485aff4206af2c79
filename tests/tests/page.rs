//! What people do on the page, in a real browser, at a desk and with a phone. Pictures are kept in `target/page`.

use borewake_tests::browser::{Browser, DESK, PHONE, Screen};
use borewake_tests::site::{self, Site};
use borewake_tests::watched::{http, token, watched};
use borewake_tests::{Daemon, borewake, free_port, root};
use serde_json::{Value, json};

struct Rig {
    site: Site,
    port: u16,
    _daemon: Daemon,
}

async fn rig(leak: bool) -> Rig {
    let port = free_port();
    let site = Site::new(&[site::LIMIT, &http(port)]);
    watched(&site.store(), leak).await;
    let daemon = Daemon::start(&site.file()).await;
    Rig {
        site,
        port,
        _daemon: daemon,
    }
}

impl Rig {
    fn browser(&self, screen: Screen) -> Browser {
        let mut browser = Browser::start(screen);
        browser.open(&format!("http://127.0.0.1:{}/", self.port));
        browser.until("document.querySelector('#said .line')");
        // Chromium lets clicks fall that come before the first picture.
        browser.until("performance.getEntriesByName('first-contentful-paint').length");
        browser.eval("new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(() => done(1))))");
        browser
    }
}

fn keep(browser: &mut Browser, name: &str) {
    browser.picture(&root().join("target/page").join(format!("{name}.png")));
}

/// Nothing sticks out sideways, and whatever can be worked has a name that a screen reader can say.
fn sound(browser: &mut Browser) {
    // A phone would shrink the whole page to fit what sticks out.
    let over =
        browser.eval("Math.max(document.scrollingElement.scrollWidth, innerWidth) - screen.width");
    assert!(
        over.as_i64().is_some_and(|o| o <= 0),
        "{over} pixels stick out"
    );
    let nameless: Vec<_> = browser
        .spoken()
        .into_iter()
        .filter(|(role, name)| {
            let worked = [
                "button", "link", "textbox", "combobox", "slider", "checkbox", "image",
            ];
            worked.contains(&role.as_str()) && name.trim().is_empty()
        })
        .collect();
    assert!(nameless.is_empty(), "{nameless:?}");
    let errors = browser.eval("performance.getEntriesByType('resource').filter((r) => !r.name.startsWith(location.origin)).length");
    assert_eq!(errors, json!(0), "the page asks other hosts");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn one_glance_tells_what_is_wrong_and_one_click_why() {
    let rig = rig(true).await;
    for (screen, name) in [(DESK, "desk"), (PHONE, "phone")] {
        let mut browser = rig.browser(screen);
        // The first line, without scrolling.
        let line = browser.text("#said .line");
        assert!(
            line.contains("a leak") && line.contains("18.0 ± 2.1 m³/d"),
            "{line}"
        );
        let bottom = browser.eval(
            "document.querySelector('#said .line').getBoundingClientRect().bottom < innerHeight",
        );
        assert_eq!(bottom, Value::Bool(true));
        browser.until("document.querySelectorAll('.row-g').length === 2");
        browser.until("document.querySelector('.row-g.off')");
        keep(&mut browser, &format!("{name}-glance"));
        sound(&mut browser);

        browser.click("[data-k='said-why']");
        browser.until("document.querySelector('.evidence')");
        let evidence = browser.text(".evidence");
        for word in [
            "87 %",
            "a leak",
            "a meter reading wrong (W)",
            "310 m east, 120 m south",
            "± 2 h",
        ] {
            assert!(evidence.contains(word), "{word}: {evidence}");
        }
        keep(&mut browser, &format!("{name}-why"));
        sound(&mut browser);
    }
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn an_alarm_is_acknowledged_under_the_name_of_a_token() {
    let rig = rig(true).await;
    let look = token(&rig.site.file(), "wall", "read");
    let operate = token(&rig.site.file(), "jm phone", "operate");
    let mut browser = rig.browser(PHONE);
    browser.click("[data-k='said-ack']");
    browser.fill("#token", "not a token");
    browser.press("Enter");
    browser
        .until("document.querySelector('.wrong').textContent.includes('unknown, revoked or over')");
    keep(&mut browser, "phone-wrong-token");
    browser.fill("#token", &look);
    browser.press("Enter");
    // That token may only look: the refusal says so, and nothing has changed.
    browser.fill("#note", "crew is on its <b>way</b>");
    browser.click("dialog button.main");
    browser
        .until("document.querySelector('.wrong').textContent.includes('needs the scope operate')");
    keep(&mut browser, "phone-may-not");
    browser.click("dialog button:not([hidden]):last-of-type");
    browser.fill("#token", &operate);
    browser.press("Enter");
    browser.until("document.querySelector('#key').textContent.includes('jm phone')");
    browser.click("[data-k='said-ack']");
    browser.fill("#note", "crew is on its <b>way</b>");
    browser.click("dialog button.main");
    browser.until(
        "document.querySelector('#alarm-watch .state').textContent.includes('acknowledged')",
    );
    browser
        .until("document.querySelector('#past').textContent.includes('crew is on its <b>way</b>')");
    browser.until("!document.querySelector('#dialog').open");
    keep(&mut browser, "phone-acknowledged");
    let listed = borewake(&[
        "alarms".as_ref(),
        rig.site.file().as_os_str(),
        "--json".as_ref(),
    ])
    .done()
    .json();
    let watch = listed["alarms"]
        .as_array()
        .and_then(|all| all.iter().find(|a| a["id"] == "watch"))
        .cloned()
        .unwrap_or_default();
    assert_eq!(watch["state"], "acknowledged", "{listed:#}");
    let past = browser.text("#past");
    assert!(past.contains("jm phone"), "{past}");
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn a_gauge_is_read_with_the_keyboard_alone() {
    let rig = rig(false).await;
    let mut browser = rig.browser(DESK);
    browser.until("document.querySelectorAll('.row-g').length === 2");
    // From the top of the page to the row of O.
    let mut steps = 0;
    while browser.eval("document.activeElement?.dataset.k ?? ''") != json!("row-O") {
        browser.press("Tab");
        steps += 1;
        assert!(steps < 60, "the row is not reached by Tab");
    }
    browser.press("Enter");
    browser.until("document.querySelector('#open-gauge svg[role=img]')");
    assert_eq!(
        browser.eval("document.activeElement.dataset.k"),
        json!("row-O"),
        "the focus stays"
    );
    let facts = browser.text("#open-gauge");
    assert!(
        facts.contains("expected 14900.000 ± 0.045 kPa") && facts.contains("means of"),
        "{facts}"
    );
    keep(&mut browser, "desk-gauge");
    // A year back: only as many points as pixels.
    browser.click("[data-k='range-3']");
    browser.until("document.querySelector('#open-gauge svg[role=img]')?.getAttribute('aria-label').includes('Reading and expectation of O')");
    browser.until(
        "document.querySelector('[data-k=range-3]').getAttribute('aria-pressed') === 'true'",
    );
    keep(&mut browser, "desk-year");
    // Units and clock by choice.
    browser.eval("(() => { const e = document.querySelector('#units'); e.value = 'field'; e.dispatchEvent(new Event('change')) })()");
    browser.until("document.querySelector('#open-gauge').textContent.includes('psi')");
    sound(&mut browser);
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn calm_is_calm_and_a_daemon_that_is_gone_is_not() {
    let rig = rig(false).await;
    let mut browser = rig.browser(DESK);
    browser.until("document.querySelectorAll('.row-g').length === 2");
    // Without a ground file the watch is blind, and says so.
    let line = browser.text("#said .line");
    assert!(
        line.contains("can be judged") || line.contains("blind"),
        "{line}"
    );
    keep(&mut browser, "desk-blind");
    assert_eq!(
        browser.eval("document.querySelectorAll('.row-g.off').length"),
        json!(0)
    );
    assert_eq!(
        browser.eval("document.querySelector('#lost').hidden"),
        json!(true)
    );
    drop(rig._daemon);
    // Its clock is moved on, so that the test need not wait.
    browser.eval("(() => { const now = Date.now; Date.now = () => now() + 120000 })()");
    browser.until("!document.querySelector('#lost').hidden");
    let lost = browser.text("#lost");
    assert!(
        lost.contains("has not answered since") && lost.contains("old"),
        "{lost}"
    );
    keep(&mut browser, "desk-lost");
}
