//! A real browser that is driven from outside, by W3C WebDriver: Debian's chromium by its chromedriver.
//! What is typed and touched goes the way of a person's hand; scripts only look.

// Each test program uses a part of this.
#![allow(dead_code)]

use fantoccini::actions::{InputSource, KeyAction, KeyActions, PointerAction, TouchActions};
use fantoccini::{Client, ClientBuilder};
use hyper_util::client::legacy::connect::HttpConnector;
use serde_json::{Value, json};
use std::io::{BufRead, BufReader, Read, Write};
use std::net::TcpStream;
use std::process::{Child, Command, Stdio};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError, Weak};
use std::time::{Duration, Instant};
use tokio::runtime::Runtime;

/// Keys without a letter, as WebDriver writes them.
pub const ENTER: char = '\u{E007}';
pub const TAB: char = '\u{E004}';
pub const ESCAPE: char = '\u{E00C}';

/// How long a page may take to show something. The machine may be busy.
const PATIENCE: Duration = Duration::from_secs(15);

/// Sizes that the screen is made for: a panel, a monitor, a telephone.
pub const SIZES: [(u32, u32); 3] = [(1024, 600), (1920, 1080), (360, 740)];

/// A browser with one window.
pub struct Browser {
    runtime: Runtime,
    client: Client,
    port: u16,
    session: String,
    driver: Child,
}

/// The browser of this test program: it is handed from test to test, and ends with the last one.
static HANDED_ON: Mutex<Weak<Mutex<Browser>>> = Mutex::new(Weak::new());

/// The browser that all tests of a program share, one after the other.
pub struct Shared(Arc<Mutex<Browser>>);

impl Shared {
    /// Waits for nobody: [`Shared::take`] does.
    pub fn get() -> Self {
        let mut handed_on = HANDED_ON.lock().unwrap_or_else(PoisonError::into_inner);
        Self(handed_on.upgrade().unwrap_or_else(|| {
            let new = Arc::new(Mutex::new(Browser::open()));
            *handed_on = Arc::downgrade(&new);
            new
        }))
    }

    /// A test that failed has left a page behind and nothing else.
    pub fn take(&self) -> MutexGuard<'_, Browser> {
        let browser = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        browser.size(1024, 600);
        browser
    }
}

impl Browser {
    pub fn open() -> Self {
        let mut driver = Command::new("chromedriver")
            .arg("--port=0")
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .expect("chromedriver starts: tests/setup installs it");
        let mut lines = BufReader::new(driver.stdout.take().expect("piped")).lines();
        let port = loop {
            let line = lines.next().expect("it says its port").expect("text");
            if let Some((_, rest)) = line.split_once("started successfully on port ") {
                break rest.trim_end_matches('.').parse().expect("a port");
            }
        };
        std::thread::spawn(move || lines.for_each(drop));
        let runtime = tokio::runtime::Builder::new_multi_thread().worker_threads(1).enable_all().build().expect("a runtime");
        let wanted = json!({"goog:chromeOptions": {"args": [
            "--headless=new", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage", "--no-first-run", "--mute-audio",
            "--lang=en-GB", "--hide-scrollbars", "--disable-background-networking", "--disable-component-update"
        ]}});
        let client = runtime.block_on(async {
            let mut builder = ClientBuilder::new(HttpConnector::new());
            builder.capabilities(wanted.as_object().expect("an object").clone());
            builder.connect(&format!("http://127.0.0.1:{port}")).await.expect("chromium starts: tests/setup installs it")
        });
        let session = runtime.block_on(client.session_id()).expect("a session").expect("its name");
        Self { runtime, client, port, session, driver }
    }

    /// A command of the browser's own inspector, which WebDriver has no word for.
    fn inspector(&self, command: &str, members: Value) {
        let body = json!({"cmd": command, "params": members}).to_string();
        let mut stream = TcpStream::connect(("127.0.0.1", self.port)).expect("chromedriver");
        let path = format!("/session/{}/goog/cdp/execute", self.session);
        let head = format!("POST {path} HTTP/1.1\r\nHost: 127.0.0.1:{}\r\nConnection: close\r\n", self.port);
        write!(stream, "{head}Content-Type: application/json\r\nContent-Length: {}\r\n\r\n{body}", body.len()).expect("sent");
        let mut answer = String::new();
        stream.read_to_string(&mut answer).expect("read");
        assert!(answer.starts_with("HTTP/1.1 200"), "{command}: {answer}");
    }

    /// The page gets this size, in CSS pixels.
    pub fn size(&self, width: u32, height: u32) {
        let members = json!({"width": width, "height": height, "deviceScaleFactor": 1, "mobile": false});
        self.inspector("Emulation.setDeviceMetricsOverride", members);
    }

    /// What the person's system prefers.
    pub fn dark(&self, dark: bool) {
        let value = if dark { "dark" } else { "light" };
        self.inspector("Emulation.setEmulatedMedia", json!({"features": [{"name": "prefers-color-scheme", "value": value}]}));
    }

    pub fn go(&self, address: &str) {
        self.runtime.block_on(self.client.goto(address)).unwrap_or_else(|e| panic!("{address}: {e}"));
    }

    /// What a script finds in the page. It must not change the page.
    pub fn see(&self, script: &str, given: &[Value]) -> Value {
        self.runtime.block_on(self.client.execute(script, given.to_vec())).unwrap_or_else(|e| panic!("{script}: {e}"))
    }

    /// What a script finds that takes its time: it calls its last argument.
    pub fn see_later(&self, script: &str, given: &[Value]) -> Value {
        self.runtime.block_on(self.client.execute_async(script, given.to_vec())).unwrap_or_else(|e| panic!("{script}: {e}"))
    }

    /// The visible text of the first element that is meant.
    pub fn text(&self, meant: &str) -> String {
        let found = self.see("return document.querySelector(arguments[0])?.innerText ?? ''", &[json!(meant)]);
        found.as_str().unwrap_or_default().to_string()
    }

    /// Waits until the page shows it; what `script` gives then.
    pub fn until(&self, what: &str, script: &str, given: &[Value]) -> Value {
        let start = Instant::now();
        loop {
            let found = self.see(script, given);
            if found != Value::Null && found != json!(false) {
                return found;
            }
            if start.elapsed() > PATIENCE {
                self.picture("failed");
                panic!("never seen: {what}\n{}", self.text("body"));
            }
            std::thread::sleep(Duration::from_millis(20));
        }
    }

    /// Waits until an element shows this text.
    pub fn shows(&self, meant: &str, text: &str) {
        let script = "return (document.querySelector(arguments[0])?.innerText ?? '').includes(arguments[1])";
        self.until(&format!("\"{text}\" in {meant}"), script, &[json!(meant), json!(text)]);
    }

    /// Keys go to whatever has the focus, as those of a scanner and a keyboard do.
    pub fn keys(&self, keys: &str) {
        let mut all = KeyActions::new("keyboard".into());
        for value in keys.chars() {
            all = all.then(KeyAction::Down { value }).then(KeyAction::Up { value });
        }
        self.runtime.block_on(self.client.perform_actions(all)).expect("typed");
    }

    /// A code is read by a scanner that types.
    pub fn scan(&self, code: &str) {
        self.keys(&format!("{code}{ENTER}"));
    }

    /// Goes on by the tabulator until what has the focus shows this text, or is called so.
    pub fn tab_to(&self, text: &str) {
        let script =
            "const e = document.activeElement; return `${e.labels?.[0]?.innerText ?? ''} ${e.innerText ?? ''} ${e.value ?? ''}`";
        for _ in 0..120 {
            self.keys(&TAB.to_string());
            if self.see(script, &[]).as_str().is_some_and(|s| s.contains(text)) {
                return;
            }
        }
        panic!("the tabulator never reaches \"{text}\"");
    }

    /// A finger touches the middle of the first visible element that is meant and shows this text. It fails when something
    /// lies over it, or when it is off.
    pub fn tap(&self, meant: &str, text: &str) {
        let script = "const [meant, text] = arguments;
            const e = [...document.querySelectorAll(meant)].find((e) => e.checkVisibility() && (e.innerText || '').includes(text));
            if (!e || e.disabled) return null;
            e.scrollIntoView({ block: 'center', behavior: 'instant' });
            const r = e.getBoundingClientRect(), x = r.x + r.width / 2, y = r.y + r.height / 2;
            const hit = document.elementFromPoint(x, y);
            return e.contains(hit) ? { x, y } : { covered: hit ? hit.outerHTML.slice(0, 200) : 'outside' }";
        let start = Instant::now();
        let place = loop {
            let place = self.see(script, &[json!(meant), json!(text)]);
            if place["x"].is_number() {
                break place;
            }
            if start.elapsed() > PATIENCE {
                self.picture("failed");
                panic!("cannot be touched: {meant} \"{text}\" {place}");
            }
            std::thread::sleep(Duration::from_millis(20));
        };
        let (x, y) = (place["x"].as_f64().unwrap_or(0.0), place["y"].as_f64().unwrap_or(0.0));
        let finger = TouchActions::new("finger".into())
            .then(PointerAction::MoveTo { duration: None, x, y })
            .then(PointerAction::Down { button: 0 })
            .then(PointerAction::Up { button: 0 });
        self.runtime.block_on(self.client.perform_actions(finger)).expect("touched");
    }

    /// A picture of the page, kept as an artefact.
    pub fn picture(&self, name: &str) {
        let folder = concat!(env!("CARGO_MANIFEST_DIR"), "/../tests/.work/screens");
        std::fs::create_dir_all(folder).expect("a folder");
        let bytes = self.runtime.block_on(self.client.screenshot()).expect("a picture");
        std::fs::write(format!("{folder}/{name}.png"), bytes).expect("written");
    }
}

impl Drop for Browser {
    fn drop(&mut self) {
        // Closing the session ends chromium; without it, it would outlive its driver.
        let _ = self.runtime.block_on(self.client.clone().close());
        let _ = self.driver.kill();
        let _ = self.driver.wait();
    }
}
