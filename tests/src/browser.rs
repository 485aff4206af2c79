//! A real Chromium without a window, driven over its debugging pipe.

use std::cell::Cell;
use std::fs::{self, File, OpenOptions};
use std::io::{BufRead as _, BufReader, Write as _};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::mpsc;
use std::time::{Duration, Instant};

use serde_json::{Value, json};
use tempfile::TempDir;

use crate::PATIENCE;

/// A browser with one page.
pub struct Browser {
    process: Child,
    to: File,
    from: mpsc::Receiver<Value>,
    next: Cell<u64>,
    session: String,
    _folder: TempDir,
}

/// A screen.
#[derive(Debug, Clone, Copy)]
pub struct Screen {
    /// Width \[CSS pixels\].
    pub width: u32,
    /// Height \[CSS pixels\].
    pub height: u32,
    /// Whether it is touched, as a phone is.
    pub touch: bool,
    /// Whether the device asks for dark pages.
    pub dark: bool,
}

/// A desk.
pub const DESK: Screen = Screen {
    width: 1366,
    height: 900,
    touch: false,
    dark: false,
};

/// A phone in the hand, at night.
pub const PHONE: Screen = Screen {
    width: 390,
    height: 844,
    touch: true,
    dark: true,
};

impl Browser {
    /// Starts a browser with an empty page.
    ///
    /// # Panics
    /// There is no Chromium, or it does not start.
    #[must_use]
    pub fn start(screen: Screen) -> Self {
        let folder = tempfile::tempdir().expect("a temporary folder");
        let (into, out) = (folder.path().join("in"), folder.path().join("out"));
        for pipe in [&into, &out] {
            let made = Command::new("mkfifo").arg(pipe).status();
            assert!(made.expect("mkfifo runs").success());
        }
        // The debugging pipe is descriptors 3 and 4.
        let script = "exec chromium --headless=new --no-sandbox --disable-gpu --disable-dev-shm-usage --no-first-run \
            --disable-background-networking --disable-component-update --disable-sync --hide-scrollbars \
            --user-data-dir=\"$1\" --remote-debugging-pipe about:blank 3<\"$2\" 4>\"$3\" >\"$4\" 2>&1";
        let process = Command::new("sh")
            .args(["-c", script, "sh"])
            .args([
                &folder.path().join("profile"),
                &into,
                &out,
                &folder.path().join("log"),
            ])
            .stdin(Stdio::null())
            .spawn()
            .expect("a shell starts");
        let to = OpenOptions::new()
            .write(true)
            .open(&into)
            .expect("the way in");
        let back = BufReader::new(File::open(&out).expect("the way out"));
        let (send, from) = mpsc::channel();
        std::thread::spawn(move || {
            for message in back.split(0) {
                let Ok(message) = message else { break };
                let Ok(value) = serde_json::from_slice(&message) else {
                    break;
                };
                if send.send(value).is_err() {
                    break;
                }
            }
        });
        let mut browser = Self {
            process,
            to,
            from,
            next: Cell::new(0),
            session: String::new(),
            _folder: folder,
        };
        let target = browser.call("Target.createTarget", json!({ "url": "about:blank" }));
        let attached = browser.call(
            "Target.attachToTarget",
            json!({ "targetId": target["targetId"], "flatten": true }),
        );
        browser.session = attached["sessionId"]
            .as_str()
            .expect("a session")
            .to_owned();
        browser.call(
            "Emulation.setDeviceMetricsOverride",
            json!({ "width": screen.width, "height": screen.height, "screenWidth": screen.width, "screenHeight": screen.height, "deviceScaleFactor": 1, "mobile": screen.touch }),
        );
        if screen.touch {
            browser.call(
                "Emulation.setTouchEmulationEnabled",
                json!({ "enabled": true }),
            );
        }
        let scheme = if screen.dark { "dark" } else { "light" };
        browser.call(
            "Emulation.setEmulatedMedia",
            json!({ "features": [{ "name": "prefers-color-scheme", "value": scheme }] }),
        );
        browser.call(
            "Emulation.setFocusEmulationEnabled",
            json!({ "enabled": true }),
        );
        browser.call("Page.enable", json!({}));
        browser
    }

    /// Goes to an address.
    pub fn open(&mut self, url: &str) {
        self.call("Page.navigate", json!({ "url": url }));
    }

    /// Evaluates an expression in the page; a promise is waited for.
    ///
    /// # Panics
    /// It throws.
    pub fn eval(&mut self, expression: &str) -> Value {
        let result = self.call(
            "Runtime.evaluate",
            json!({ "expression": expression, "awaitPromise": true, "returnByValue": true }),
        );
        assert!(
            result.get("exceptionDetails").is_none(),
            "{expression}: {result:#}"
        );
        result["result"]["value"].clone()
    }

    /// Waits until an expression is true in the page.
    ///
    /// # Panics
    /// It does not become so.
    pub fn until(&mut self, expression: &str) {
        let start = Instant::now();
        let guarded = format!(
            "(() => {{ try {{ return Boolean({expression}) }} catch {{ return false }} }})()"
        );
        while self.eval(&guarded) != Value::Bool(true) {
            if start.elapsed() > PATIENCE {
                let text = self.eval("document.body.innerText");
                panic!(
                    "waited in vain for {expression}; the page says:\n{}",
                    text.as_str().unwrap_or_default()
                );
            }
            std::thread::sleep(Duration::from_millis(100));
        }
    }

    /// The text of an element as it is shown.
    pub fn text(&mut self, selector: &str) -> String {
        let text = self.eval(&format!(
            "document.querySelector({}).innerText",
            json!(selector)
        ));
        text.as_str().unwrap_or_default().to_owned()
    }

    /// Clicks in the middle of an element, once it is there, as a mouse does.
    pub fn click(&mut self, selector: &str) {
        let element = format!("document.querySelector({})", json!(selector));
        self.until(&format!("{element}.getBoundingClientRect().width > 0"));
        let place = self.eval(&format!(
            "(() => {{ const e = {element}; e.scrollIntoView({{ block: 'center' }}); const b = e.getBoundingClientRect(); return [b.x + b.width / 2, b.y + b.height / 2] }})()"
        ));
        for kind in ["mousePressed", "mouseReleased"] {
            self.call(
                "Input.dispatchMouseEvent",
                json!({ "type": kind, "x": place[0], "y": place[1], "button": "left", "clickCount": 1 }),
            );
        }
    }

    /// Clicks into a field, empties it, and types.
    pub fn fill(&mut self, selector: &str, text: &str) {
        let element = format!("document.querySelector({})", json!(selector));
        let start = Instant::now();
        loop {
            self.click(selector);
            let focused = self.eval(&format!("document.activeElement === {element}"));
            if focused == Value::Bool(true) {
                break;
            }
            // A click that comes before the first picture of a dialog goes past it.
            assert!(
                start.elapsed() < PATIENCE,
                "{selector} takes no focus: {}",
                self.eval("document.activeElement.outerHTML.slice(0, 200)")
            );
            std::thread::sleep(Duration::from_millis(100));
        }
        self.eval(&format!("{element}.value = ''"));
        self.call("Input.insertText", json!({ "text": text }));
        self.until(&format!("{element}.value === {}", json!(text)));
    }

    /// Presses a key, such as `Tab` or `Enter`.
    pub fn press(&mut self, key: &str) {
        let code = match key {
            "Tab" => 9,
            "Enter" => 13,
            "Escape" => 27,
            _ => 0,
        };
        let text = if key == "Enter" { "\r" } else { "" };
        for kind in ["keyDown", "keyUp"] {
            self.call(
                "Input.dispatchKeyEvent",
                json!({ "type": kind, "key": key, "code": key, "windowsVirtualKeyCode": code, "text": text }),
            );
        }
    }

    /// Keeps a picture of the whole page.
    ///
    /// # Panics
    /// It cannot be taken or written.
    pub fn picture(&mut self, path: &Path) {
        let size = self.call("Page.getLayoutMetrics", json!({}));
        let clip = &size["cssContentSize"];
        let taken = self.call(
            "Page.captureScreenshot",
            json!({ "captureBeyondViewport": true, "clip": { "x": 0, "y": 0, "width": clip["width"], "height": clip["height"], "scale": 1 } }),
        );
        if let Some(folder) = path.parent() {
            fs::create_dir_all(folder).expect("a folder for pictures");
        }
        let bytes = base64(taken["data"].as_str().expect("a picture"));
        fs::write(path, bytes).expect("a picture is written");
    }

    /// Everything a screen reader is given: role and name of each node that has a role.
    pub fn spoken(&mut self) -> Vec<(String, String)> {
        let tree = self.call("Accessibility.getFullAXTree", json!({}));
        let nodes = tree["nodes"].as_array().cloned().unwrap_or_default();
        nodes
            .iter()
            .filter(|n| n["ignored"] != Value::Bool(true))
            .map(|n| {
                let text = |key: &str| n[key]["value"].as_str().unwrap_or_default().to_owned();
                (text("role"), text("name"))
            })
            .collect()
    }

    fn call(&mut self, method: &str, parameters: Value) -> Value {
        let id = self.next.get() + 1;
        self.next.set(id);
        let mut message = json!({ "id": id, "method": method, "params": parameters });
        if !self.session.is_empty() {
            message["sessionId"] = json!(self.session);
        }
        let mut bytes = serde_json::to_vec(&message).expect("JSON");
        bytes.push(0);
        self.to.write_all(&bytes).expect("Chromium listens");
        loop {
            let answer = self
                .from
                .recv_timeout(PATIENCE)
                .unwrap_or_else(|e| panic!("{method}: no answer from Chromium: {e}"));
            if answer["id"] == json!(id) {
                assert!(answer.get("error").is_none(), "{method}: {answer:#}");
                return answer["result"].clone();
            }
        }
    }
}

impl Drop for Browser {
    fn drop(&mut self) {
        let _ = self.process.kill();
        let _ = self.process.wait();
    }
}

fn base64(text: &str) -> Vec<u8> {
    let digit = |c: u8| match c {
        b'A'..=b'Z' => Some(c - b'A'),
        b'a'..=b'z' => Some(c - b'a' + 26),
        b'0'..=b'9' => Some(c - b'0' + 52),
        b'+' => Some(62),
        b'/' => Some(63),
        _ => None,
    };
    let (mut bits, mut held, mut bytes) = (0_u32, 0, Vec::new());
    for value in text.bytes().filter_map(digit) {
        bits = (bits << 6) | u32::from(value);
        held += 6;
        if held >= 8 {
            held -= 8;
            bytes.push(u8::try_from((bits >> held) & 0xff).expect("a byte"));
        }
    }
    bytes
}
