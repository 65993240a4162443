//! The driver's process and the requests of the protocol.

use std::io::{BufRead, BufReader};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::mpsc;
use std::thread;
use std::time::Duration;

use serde_json::{Value, json};

/// Longest wait for one answer of the driver.
const ANSWER: Duration = Duration::from_secs(60);

/// Longest wait for the driver's first line.
const START: Duration = Duration::from_secs(30);

/// Key codes of the protocol.
pub const TAB: &str = "\u{E004}";
/// Key code of Enter.
pub const ENTER: &str = "\u{E007}";

/// Ends the driver's process when it goes out of scope.
struct Process(Child);

impl Drop for Process {
    fn drop(&mut self) {
        // The process may have ended by itself; there is nobody to tell.
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
}

/// One browser with one window.
pub struct Browser {
    agent: ureq::Agent,
    session: String,
    // Dropped after the session is ended: first the driver, then the profile it may still write to.
    _process: Process,
    _profile: tempfile::TempDir,
}

impl Drop for Browser {
    fn drop(&mut self) {
        // Ends the browser's processes; the driver is killed in any case.
        let _ = self.agent.delete(&self.session).call();
    }
}

impl Browser {
    /// Starts the driver on a free port and a browser under it.
    pub fn start(chromium: &Path, chromedriver: &Path) -> Self {
        let mut child = Command::new(chromedriver)
            .arg("--port=0")
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .expect("chromedriver starts");
        let output = child.stdout.take().expect("its output is piped");
        let process = Process(child);
        let (send, receive) = mpsc::channel();
        // Reads to the end, so that the driver never waits for a reader.
        thread::spawn(move || {
            for line in BufReader::new(output).lines().map_while(Result::ok) {
                if let Some(port) = port(&line) {
                    let _ = send.send(port);
                }
            }
        });
        let port = receive.recv_timeout(START).expect("chromedriver names its port in time");
        let agent: ureq::Agent = ureq::Agent::config_builder()
            .timeout_global(Some(ANSWER))
            .http_status_as_error(false)
            .proxy(None)
            .build()
            .into();
        let profile = tempfile::tempdir().expect("a temporary folder");
        let root = format!("http://127.0.0.1:{port}/session");
        let answer = post(&agent, &root, &capabilities(chromium, profile.path()));
        let id = answer["sessionId"].as_str().expect("a session has an id");
        let browser = Browser {
            agent,
            session: format!("{root}/{id}"),
            _process: process,
            _profile: profile,
        };
        // The browser's own first page is no part of any test.
        browser.post("url", &json!({ "url": "about:blank" }));
        browser.log("performance");
        browser.log("browser");
        browser
    }

    fn post(&self, path: &str, body: &Value) -> Value {
        post(&self.agent, &format!("{}/{path}", self.session), body)
    }

    /// Opens a file.
    pub fn go(&self, page: &Path) {
        self.go_to(page, "");
    }

    /// Opens a file at the element with an id.
    pub fn go_to(&self, page: &Path, id: &str) {
        let page = page.canonicalize().expect("the page exists");
        let hash = if id.is_empty() { String::new() } else { format!("#{id}") };
        self.post("url", &json!({ "url": format!("file://{}{hash}", page.display()) }));
    }

    /// Runs the body of a function in the page and returns its result.
    pub fn run(&self, script: &str) -> Value {
        self.post("execute/sync", &json!({ "script": script, "args": [] }))
    }

    /// Runs the body of a function that returns a list of complaints, and fails when there are any.
    pub fn complain(&self, what: &str, script: &str) {
        let found = self.run(script);
        let found = found.as_array().unwrap_or_else(|| panic!("{what}: no list but {found}"));
        assert!(found.is_empty(), "{what}: {found:#?}");
    }

    /// Sends a command of the DevTools protocol.
    pub fn devtools(&self, command: &str, parameters: &Value) -> Value {
        self.post("goog/cdp/execute", &json!({ "cmd": command, "params": parameters }))
    }

    /// Sets the size of the page's window, in CSS pixels.
    pub fn resize(&self, width: u32, height: u32) {
        let size = json!({ "width": width, "height": height, "deviceScaleFactor": 1, "mobile": width < 500 });
        self.devtools("Emulation.setDeviceMetricsOverride", &size);
        self.settle();
    }

    /// Waits until the page has been laid out again twice.
    pub fn settle(&self) {
        self.run(
            "return new Promise((done) => {
                requestAnimationFrame(() => requestAnimationFrame(() => setTimeout(() => done(true))));
            });",
        );
    }

    /// Shows the page as on `screen` or `print`, in the `light` or `dark` scheme.
    pub fn show_as(&self, media: &str, scheme: &str) {
        let features = [json!({ "name": "prefers-color-scheme", "value": scheme })];
        self.devtools(
            "Emulation.setEmulatedMedia",
            &json!({ "media": media, "features": features }),
        );
        self.settle();
    }

    /// Forbids the scripts of pages that are opened from now on.
    pub fn without_scripts(&self) {
        self.devtools("Emulation.setScriptExecutionDisabled", &json!({ "value": true }));
    }

    fn element(&self, selector: &str) -> String {
        let found = self.post("element", &json!({ "using": "css selector", "value": selector }));
        let id = found.as_object().and_then(|found| found.values().next()).and_then(Value::as_str);
        format!("element/{}", id.unwrap_or_else(|| panic!("no element {selector}: {found}")))
    }

    /// Clicks the first element that a selector fits, as a person would.
    pub fn click(&self, selector: &str) {
        self.post(&format!("{}/click", self.element(selector)), &json!({}));
    }

    /// Types into the first element that a selector fits.
    pub fn fill(&self, selector: &str, text: &str) {
        self.post(&format!("{}/value", self.element(selector)), &json!({ "text": text }));
    }

    /// Presses keys one after the other.
    pub fn press(&self, keys: &[&str]) {
        let strokes: Vec<Value> = keys
            .iter()
            .flat_map(|key| {
                [
                    json!({ "type": "keyDown", "value": key }),
                    json!({ "type": "keyUp", "value": key }),
                ]
            })
            .collect();
        let keyboard = json!({ "type": "key", "id": "keyboard", "actions": strokes });
        self.post("actions", &json!({ "actions": [keyboard] }));
    }

    /// Returns what was logged since the last call: `browser` for the console, `performance` for events
    /// of the DevTools protocol.
    pub fn log(&self, kind: &str) -> Vec<Value> {
        match self.post("se/log", &json!({ "type": kind })) {
            Value::Array(entries) => entries,
            other => panic!("the log is no list: {other}"),
        }
    }
}

fn port(line: &str) -> Option<u16> {
    let rest = line.split("started successfully on port ").nth(1)?;
    rest.trim_end_matches(|c: char| !c.is_ascii_digit()).parse().ok()
}

fn capabilities(chromium: &Path, profile: &Path) -> Value {
    let profile = format!("--user-data-dir={}", profile.display());
    let arguments = [
        "--headless=new",
        "--no-sandbox",
        "--disable-gpu",
        "--disable-quic",
        "--no-first-run",
        "--disable-background-networking",
        "--disable-component-update",
        "--disable-sync",
        &profile,
    ];
    json!({ "capabilities": { "alwaysMatch": {
        "browserName": "chrome",
        "goog:chromeOptions": { "binary": chromium, "args": arguments },
        "goog:loggingPrefs": { "browser": "ALL", "performance": "ALL" },
        "timeouts": { "script": 30_000, "pageLoad": 30_000, "implicit": 0 },
    }}})
}

/// Posts a request and returns the value of the answer; panics when the driver reports an error.
fn post(agent: &ureq::Agent, url: &str, body: &Value) -> Value {
    let mut answer = agent
        .post(url)
        .header("content-type", "application/json; charset=utf-8")
        .send(body.to_string())
        .unwrap_or_else(|error| panic!("{url}: {error}"));
    let text = answer
        .body_mut()
        .with_config()
        .limit(256 * 1024 * 1024)
        .read_to_string()
        .unwrap_or_else(|error| panic!("{url}: {error}"));
    let mut answer: Value =
        serde_json::from_str(&text).unwrap_or_else(|error| panic!("{url}: {error}: {text}"));
    let value = answer["value"].take();
    assert!(value.get("error").is_none(), "{url}: {value:#}");
    value
}
