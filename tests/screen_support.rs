//! What the tests of the screen share: a service in this process with
//! instruments on pseudo-terminals, and a client that can send anything.

// Each test program uses a part of this.
#![allow(dead_code)]

use serde_json::{Value, json};
use std::io::{BufRead, BufReader, Read, Write};
use std::net::{SocketAddr, TcpListener, TcpStream};
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex};
use std::time::{Duration, Instant};
use tarecup::clock::MachineClock;
use tarecup::screen::operators;
use tarecup::service::{Plan, Service, Told};
use tarecup_core::names::Operator;
use tarecup_simulators::pty::Pty;

/// Generous: the machine may be busy with other things.
pub const PATIENCE: Duration = Duration::from_secs(20);

/// A port of loopback that was free a moment ago.
pub fn free_port() -> u16 {
    TcpListener::bind("127.0.0.1:0").expect("a free port").local_addr().expect("an address").port()
}

/// A running station with two benches; each has a balance and a cup counter.
pub struct Station {
    pub service: Option<Service>,
    pub address: SocketAddr,
    pub folder: tempfile::TempDir,
    pub pan: Mutex<Pty>,
    pub cup: Mutex<Pty>,
    config: String,
}

impl Station {
    /// With more lines for `[screen]`.
    pub fn start(screen: &str) -> Self {
        Self::told(screen, None)
    }

    /// Facts are told as they are stored.
    pub fn told(screen: &str, told: Option<Told>) -> Self {
        let folder = tempfile::tempdir().expect("a folder");
        let port = free_port();
        let open = |name: &str| Pty::open(&folder.path().join(name)).expect("a pseudo-terminal");
        let (pan, cup) = (open("pan-1"), open("cup-1"));
        let instrument = |name: &str, kind: &str, profile: &str| {
            let port = folder.path().join(name);
            format!(
                "[[instrument]]\nname = \"{name}\"\nkind = \"{kind}\"\nbench = \"north\"\nport = {port:?}\nprofile = \"{profile}\"\n"
            )
        };
        let config = format!(
            "[lab]\nstation = \"tried\"\n[screen]\nlisten = \"127.0.0.1:{port}\"\n{screen}\n[broker]\nlisten = \"127.0.0.1:{}\"\n\
             [[bench]]\nname = \"north\"\n[[bench]]\nname = \"south\"\n{}{}",
            free_port(),
            instrument("pan-1", "balance", "signed-steady"),
            instrument("cup-1", "counter", "running-total"),
        );
        let mut station = Self {
            service: None,
            address: SocketAddr::from(([127, 0, 0, 1], port)),
            folder,
            pan: Mutex::new(pan),
            cup: Mutex::new(cup),
            config,
        };
        station.serve(told);
        station
    }

    /// Starts the service; after [`Station::stop`] it goes on with what it stored.
    pub fn serve(&mut self, told: Option<Told>) {
        let plan = Plan {
            station: tarecup_config::station::parse("tried.toml", &self.config).unwrap_or_else(|f| panic!("{f}")),
            state_dir: self.state(),
            clock: Arc::new(MachineClock::new()),
            time_passes: true,
            any_broker_port: true,
            any_screen_port: false,
            hand: None,
            key: None,
            beside: Default::default(),
            tap: None,
            told,
        };
        self.service = Some(Service::start(plan).unwrap_or_else(|e| panic!("{e}")));
        until("the ports are open", || self.service().ports_open() == 2);
        // The first line after a port was opened counts once it was quiet for a while.
        std::thread::sleep(Duration::from_millis(250));
    }

    pub fn service(&self) -> &Service {
        self.service.as_ref().expect("it runs")
    }

    pub fn state(&self) -> PathBuf {
        self.folder.path().join("state")
    }

    pub fn stop(&mut self) {
        if let Some(service) = self.service.take() {
            service.stop();
        }
    }

    /// Gives an operator a PIN.
    pub fn operator(&self, initials: &str, pin: &str) {
        operators::add(&self.state(), &Operator::new(initials).expect("initials"), pin).expect("a PIN");
    }

    /// Asks from the service's own console, as the local socket does.
    pub fn ask(&self, ask: Value) -> Value {
        serde_json::from_str(&self.service().ask(&ask.to_string())).expect("JSON")
    }

    pub fn get(&self, path: &str) -> Answer {
        self.send("GET", path, &[], b"")
    }

    /// A JSON body, as our own page sends it.
    pub fn post(&self, path: &str, body: &Value) -> Answer {
        let origin = format!("http://{}", self.address);
        let headers = [("Content-Type", "application/json"), ("Origin", &origin), ("Sec-Fetch-Site", "same-origin")];
        self.send("POST", path, &headers, body.to_string().as_bytes())
    }

    pub fn send(&self, method: &str, path: &str, headers: &[(&str, &str)], body: &[u8]) -> Answer {
        let mut head = format!("{method} {path} HTTP/1.1\r\nConnection: close\r\nContent-Length: {}\r\n", body.len());
        if !headers.iter().any(|(name, _)| name.eq_ignore_ascii_case("host")) {
            head += &format!("Host: {}\r\n", self.address);
        }
        for (name, value) in headers {
            head += &format!("{name}: {value}\r\n");
        }
        let mut bytes = head.into_bytes();
        bytes.extend_from_slice(b"\r\n");
        bytes.extend_from_slice(body);
        self.raw(&bytes)
    }

    /// Sends these bytes and reads the answer to its end.
    pub fn raw(&self, bytes: &[u8]) -> Answer {
        let mut stream = self.connect();
        // A server that has refused may close before everything is written.
        let _ = stream.write_all(bytes);
        let mut all = Vec::new();
        let _ = stream.read_to_end(&mut all);
        Answer::read(&all)
    }

    pub fn connect(&self) -> TcpStream {
        let stream = TcpStream::connect(self.address).expect("connected");
        stream.set_read_timeout(Some(PATIENCE)).expect("set");
        stream.set_write_timeout(Some(PATIENCE)).expect("set");
        stream
    }

    /// Listens to the events of a page.
    pub fn events(&self, query: &str, last: Option<&str>) -> Events {
        let mut stream = self.connect();
        let last = last.map(|l| format!("Last-Event-ID: {l}\r\n")).unwrap_or_default();
        write!(stream, "GET /events?{query} HTTP/1.1\r\nHost: {}\r\nAccept: text/event-stream\r\n{last}\r\n", self.address)
            .expect("sent");
        Events { lines: BufReader::new(stream), head: false }
    }

    /// A mass is put on the pan and lifted, as the profile `signed-steady` has it.
    pub fn weigh(&self, grams: f64) {
        let mut pan = self.pan.lock().expect("the pan");
        for load in [0.0, grams, 0.0] {
            for _ in 0..10 {
                pan.write(format!("+{load:10.2} g  S\r\n").as_bytes()).expect("written");
            }
        }
    }

    /// The pan shows this for a while.
    pub fn shows(&self, grams: f64) {
        let mut pan = self.pan.lock().expect("the pan");
        for _ in 0..8 {
            pan.write(format!("+{grams:10.2} g  S\r\n").as_bytes()).expect("written");
            std::thread::sleep(Duration::from_millis(50));
        }
    }

    /// The cup drops so often.
    pub fn count(&self, drops: u32) {
        let mut cup = self.cup.lock().expect("the cup");
        for n in 1..=drops {
            cup.write(format!("DROP {n}\r\n").as_bytes()).expect("written");
        }
        cup.write(format!("STOP {drops}\r\n").as_bytes()).expect("written");
    }
}

impl Drop for Station {
    fn drop(&mut self) {
        self.stop();
    }
}

/// Waits for something; the message says what.
pub fn until(what: &str, mut done: impl FnMut() -> bool) {
    let start = Instant::now();
    while !done() {
        assert!(start.elapsed() < PATIENCE, "waited in vain: {what}");
        std::thread::sleep(Duration::from_millis(5));
    }
}

/// An answer.
#[derive(Debug, Default)]
pub struct Answer {
    pub status: u16,
    pub head: String,
    pub body: String,
}

impl Answer {
    fn read(all: &[u8]) -> Self {
        let end = all.windows(4).position(|w| w == b"\r\n\r\n").unwrap_or(all.len());
        let head = String::from_utf8_lossy(&all[..end]).into_owned();
        let status = head.split(' ').nth(1).and_then(|s| s.parse().ok()).unwrap_or(0);
        let body = String::from_utf8_lossy(all.get(end + 4..).unwrap_or_default()).into_owned();
        Self { status, head, body }
    }

    pub fn header(&self, name: &str) -> Option<&str> {
        let mut lines = self.head.lines().skip(1).filter_map(|l| l.split_once(": "));
        lines.find(|(n, _)| n.eq_ignore_ascii_case(name)).map(|(_, v)| v)
    }

    pub fn json(&self) -> Value {
        serde_json::from_str(&self.body).unwrap_or_else(|e| panic!("{e}: {} {}", self.head, self.body))
    }

    /// `name=value` of the cookie that was set.
    pub fn cookie(&self) -> String {
        self.header("set-cookie").expect("a cookie").split(';').next().expect("a pair").to_string()
    }
}

/// Events as they come.
pub struct Events {
    lines: BufReader<TcpStream>,
    head: bool,
}

/// One event.
#[derive(Clone, Debug, Default)]
pub struct Event {
    pub name: String,
    pub data: Value,
    pub id: String,
}

impl Events {
    /// The next event; `None` when the connection ended.
    pub fn next(&mut self) -> Option<Event> {
        let mut event = Event::default();
        loop {
            let mut line = String::new();
            if self.lines.read_line(&mut line).ok()? == 0 {
                return None;
            }
            let line = line.trim_end();
            if !self.head {
                self.head = line.is_empty();
                continue;
            }
            if let Some(name) = line.strip_prefix("event: ") {
                event.name = name.into();
            } else if let Some(id) = line.strip_prefix("id: ") {
                event.id = id.into();
            } else if let Some(data) = line.strip_prefix("data: ") {
                event.data = serde_json::from_str(data).expect("data is JSON");
            } else if line.is_empty() && !event.name.is_empty() {
                return Some(event);
            }
        }
    }

    /// The next event that is wanted.
    pub fn wait(&mut self, what: &str, mut wanted: impl FnMut(&Event) -> bool) -> Event {
        let start = Instant::now();
        while start.elapsed() < PATIENCE {
            let event = self.next().unwrap_or_else(|| panic!("the events ended before: {what}"));
            if wanted(&event) {
                return event;
            }
        }
        panic!("waited in vain: {what}");
    }
}

/// A specimen in work at bench `north`.
pub fn begin(station: &Station, specimen: &str) {
    for ask in [
        json!({"ask": "open_specimen", "specimen": specimen, "description": "tried clay"}),
        json!({"ask": "sign_in", "bench": "north", "operator": "AB"}),
        json!({"ask": "intend", "bench": "north", "specimen": specimen, "intention": "liquid"}),
    ] {
        let answer = station.ask(ask);
        assert_eq!(answer["ok"], true, "{answer}");
    }
}

/// A container is read and weighed; gives the number of the weighing.
pub fn weighed(station: &Station, container: &str, grams: f64) -> u64 {
    let before = station.ask(json!({"ask": "latest", "bench": "north"}))["latest"]["seq"].as_u64().unwrap_or(0);
    let answer = station.ask(json!({"ask": "code", "bench": "north", "text": container}));
    assert_eq!(answer["ok"], true, "{answer}");
    station.weigh(grams);
    let mut seq = 0;
    until("the mass is taken", || {
        seq = station.ask(json!({"ask": "latest", "bench": "north"}))["latest"]["seq"].as_u64().unwrap_or(0);
        seq > before
    });
    seq
}

/// Every file of a folder, as text.
pub fn all_text(folder: &Path) -> String {
    let mut text = String::new();
    for entry in std::fs::read_dir(folder).expect("a folder").flatten() {
        if entry.path().is_file() {
            text += &String::from_utf8_lossy(&std::fs::read(entry.path()).unwrap_or_default());
        }
    }
    text
}
