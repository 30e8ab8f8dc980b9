//! What the end-to-end tests share: the program as a child process, sheets as
//! a laboratory has them, the judge, and the local socket.

// Each test program uses a part of this.
#![allow(dead_code)]

#[path = "e2e_operator.rs"]
pub mod operator;
#[path = "oracle.rs"]
pub mod oracle;

#[path = "e2e_listeners.rs"]
pub mod subscriber;

use serde::Serialize;
use serde_json::{Value, json};
use std::io::{BufRead, BufReader, Read, Write};
use std::net::TcpListener;
use std::os::unix::net::UnixStream;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, ExitStatus, Stdio};
use std::time::{Duration, Instant};

/// The program under test.
pub const TARECUP: &str = env!("CARGO_BIN_EXE_tarecup");
/// Generous: the machine may be busy with other things.
pub const PATIENCE: Duration = Duration::from_secs(30);

/// A file of the tests' folder.
pub fn tests_dir() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("../tests")
}

/// A port of loopback that was free a moment ago.
pub fn free_port() -> u16 {
    TcpListener::bind("127.0.0.1:0").expect("a free port").local_addr().expect("an address").port()
}

/// Waits for something; the message says what.
pub fn until(what: &str, limit: Duration, mut done: impl FnMut() -> bool) {
    let start = Instant::now();
    while !done() {
        assert!(start.elapsed() < limit, "waited {limit:?} in vain: {what}");
        std::thread::sleep(Duration::from_millis(5));
    }
}

/// A child process that never outlives its test.
pub struct Running(pub Child);

impl Running {
    pub fn start(command: &mut Command) -> Self {
        let name = format!("{:?}", command.get_program());
        Self(command.spawn().unwrap_or_else(|e| panic!("{name} starts: {e}")))
    }
    pub fn pid(&self) -> u32 {
        self.0.id()
    }
    pub fn signal(&self, signal: rustix::process::Signal) {
        let pid = rustix::process::Pid::from_child(&self.0);
        rustix::process::kill_process(pid, signal).expect("a signal to our own child");
    }
    pub fn kill9(&mut self) {
        let _ = self.0.kill();
        let _ = self.0.wait();
    }
    pub fn wait(&mut self, limit: Duration) -> ExitStatus {
        let start = Instant::now();
        loop {
            if let Some(status) = self.0.try_wait().expect("waited") {
                return status;
            }
            assert!(start.elapsed() < limit, "the process did not end within {limit:?}");
            std::thread::sleep(Duration::from_millis(5));
        }
    }
}

impl Drop for Running {
    fn drop(&mut self) {
        self.kill9();
    }
}

/// What a program printed and how it ended.
pub struct Ended {
    pub code: i32,
    pub out: String,
    pub err: String,
    pub took: Duration,
}

/// Runs the program to its end.
pub fn tarecup(arguments: &[&str]) -> Ended {
    let began = Instant::now();
    let mut child =
        Running::start(Command::new(TARECUP).args(arguments).stdin(Stdio::null()).stdout(Stdio::piped()).stderr(Stdio::piped()));
    let drain = |mut from: Box<dyn Read + Send>| {
        std::thread::spawn(move || {
            let mut text = String::new();
            let _ = from.read_to_string(&mut text);
            text
        })
    };
    let out = drain(Box::new(child.0.stdout.take().expect("piped")));
    let err = drain(Box::new(child.0.stderr.take().expect("piped")));
    let status = child.wait(PATIENCE * 2);
    let took = began.elapsed();
    let code = status.code().unwrap_or(-1);
    Ended { code, out: out.join().expect("read"), err: err.join().expect("read"), took }
}

/// Runs a demonstration to its end without pace, and reads its lines.
pub fn demo(scenario: &Path, state: Option<&Path>) -> (Ended, Vec<Value>) {
    let mqtt = format!("127.0.0.1:{}", free_port());
    let scenario = scenario.display().to_string();
    let mut arguments = vec!["demo", "--scenario", &scenario, "--once", "--json", "--mqtt", &mqtt];
    let state = state.map(|s| s.display().to_string());
    if let Some(state) = &state {
        arguments.extend(["--state", state]);
    }
    let ended = tarecup(&arguments);
    let lines = messages(&ended.out);
    (ended, lines)
}

/// Every line as JSON.
pub fn messages(out: &str) -> Vec<Value> {
    let read = |line: &str| serde_json::from_str(line).unwrap_or_else(|e| panic!("not JSON ({e}): {line}"));
    out.lines().map(read).collect()
}

/// Part of a topic below the station, with everything before it taken off.
pub fn tail(topic: &str) -> &str {
    topic.splitn(4, '/').nth(3).unwrap_or(topic)
}

/// The last payload at each topic that ends with `suffix`, by specimen.
pub fn last_limits(messages: &[Value], specimen: &str) -> Value {
    let wanted = format!("specimen/{specimen}/limits");
    let found = messages.iter().rev().find(|m| m["topic"].as_str().is_some_and(|t| tail(t) == wanted));
    found.unwrap_or_else(|| panic!("no limits of {specimen} were published"))["payload"].clone()
}

// ---- sheets ----------------------------------------------------------------

/// A container with soil, masses as texts.
#[derive(Clone, Debug, Default, Serialize)]
pub struct Slice {
    pub container: String,
    pub tare: String,
    pub wet: String,
    pub dry: Vec<String>,
    pub set_aside: bool,
}

/// A liquid determination.
#[derive(Clone, Debug, Default, Serialize)]
pub struct Liquid {
    pub drops: Vec<u32>,
    pub slice: Slice,
}

/// One specimen.
#[derive(Clone, Debug, Default, Serialize)]
pub struct Sheet {
    pub id: String,
    pub method: String,
    pub liquid: Vec<Liquid>,
    pub plastic: Vec<Slice>,
    pub natural: Vec<Slice>,
    pub not_obtainable: Option<String>,
}

pub fn slice(container: &str, tare: &str, wet: &str, dry: &[&str]) -> Slice {
    let dry = dry.iter().map(|d| (*d).to_string()).collect();
    Slice { container: container.into(), tare: tare.into(), wet: wet.into(), dry, set_aside: false }
}

pub fn liquid(drops: &[u32], container: &str, tare: &str, wet: &str, dry: &[&str]) -> Liquid {
    Liquid { drops: drops.to_vec(), slice: slice(container, tare, wet, dry) }
}

pub fn sheet(id: &str, method: &str, liquid: Vec<Liquid>, plastic: Vec<Slice>) -> Sheet {
    Sheet { id: id.into(), method: method.into(), liquid, plastic, ..Sheet::default() }
}

/// Masses that give a water content exactly: 10 g of dry soil, 0.1 g of water for each percent.
pub fn from_water(container: &str, percent_tenths: u32) -> Slice {
    let water_centigrams = percent_tenths; // 1 % of 10.00 g is 0.10 g
    let wet = format!("{}.{:02}", 30 + water_centigrams / 100, water_centigrams % 100);
    slice(container, "20.00", &wet, &["30.00"])
}

fn row(s: &Slice) -> String {
    let dry = match s.dry.as_slice() {
        [one] => one.clone(),
        many => format!("[{}]", many.join(", ")),
    };
    let mut text = format!("container = \"{}\"\ntare_g = {}\nwet_g = {}\ndry_g = {dry}\n", s.container, s.tare, s.wet);
    if s.set_aside {
        text += "set_aside = \"the soil slid\"\n";
    }
    text
}

/// The scenario file of some sheets.
pub fn scenario(sheets: &[Sheet]) -> String {
    let mut text = String::from("title = \"sheets\"\n");
    for s in sheets {
        text += &format!("[[specimen]]\nid = \"{}\"\nmethod = \"{}\"\n", s.id, s.method);
        if let Some(limit) = &s.not_obtainable {
            text += &format!("not_obtainable = \"{limit}\"\nbecause = \"the thread crumbles\"\n");
        }
        for l in &s.liquid {
            let drops: Vec<String> = l.drops.iter().map(u32::to_string).collect();
            text += &format!("[[specimen.liquid]]\ndrops = [{}]\n{}", drops.join(", "), row(&l.slice));
        }
        for (name, rows) in [("plastic", &s.plastic), ("natural", &s.natural)] {
            for r in rows {
                text += &format!("[[specimen.{name}]]\n{}", row(r));
            }
        }
    }
    text
}

/// What numpy and scipy make of the sheets.
pub fn judged(sheets: &[Sheet]) -> Vec<Value> {
    let python = tests_dir().join(".venv/bin/python");
    assert!(python.exists(), "the judge needs Python with numpy and scipy: run tests/setup-python first");
    let mut child = Command::new(&python)
        .arg(tests_dir().join("judge.py"))
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("Python starts; else run tests/setup-python again");
    let text = serde_json::to_string(sheets).expect("JSON");
    child.stdin.take().expect("piped").write_all(text.as_bytes()).expect("written");
    let out = child.wait_with_output().expect("ended");
    let says = String::from_utf8_lossy(&out.stderr);
    assert!(out.status.success(), "judge.py failed; run tests/setup-python again. It said:\n{says}");
    serde_json::from_slice(&out.stdout).expect("judge.py prints JSON")
}

/// What differs between a published result and the judge's, by name; 1e-9 is allowed on numbers.
pub fn differences(ours: &Value, theirs: &Value) -> Vec<String> {
    let mut found = Vec::new();
    for part in ["liquid_limit", "plastic_limit", "plasticity_index", "natural_water_percent"] {
        differ(part, &ours[part], &theirs[part], &mut found);
    }
    let waters: Vec<Value> = ours["trials"].as_array().into_iter().flatten().map(|t| t["water_percent"].clone()).collect();
    differ("waters", &Value::from(waters), &theirs["waters"], &mut found);
    found
}

fn differ(name: &str, ours: &Value, theirs: &Value, found: &mut Vec<String>) {
    match (ours, theirs) {
        (Value::Object(_), Value::Object(members)) => {
            for (key, value) in members {
                differ(&format!("{name}.{key}"), &ours[key], value, found);
            }
        }
        (Value::Array(a), Value::Array(b)) if a.len() == b.len() => {
            for (no, (a, b)) in a.iter().zip(b).enumerate() {
                differ(&format!("{name}[{no}]"), a, b, found);
            }
        }
        (Value::Number(a), Value::Number(b)) => {
            let (a, b) = (a.as_f64().unwrap_or(f64::NAN), b.as_f64().unwrap_or(f64::NAN));
            // Not a number is a difference too. Near zero (a residual of exact points) the tolerance is absolute.
            let near = (a - b).abs() <= 1e-9 * b.abs().max(1.0);
            if !near {
                found.push(format!("{name}: {a} against {b}"));
            }
        }
        (a, b) if a == b => (),
        (a, b) => found.push(format!("{name}: {a} against {b}")),
    }
}

/// Asserts that the last published limits of each sheet are the judge's.
pub fn assert_judged(messages: &[Value], sheets: &[Sheet]) {
    for (sheet, theirs) in sheets.iter().zip(judged(sheets)) {
        let ours = last_limits(messages, &sheet.id);
        let found = differences(&ours, &theirs);
        assert!(found.is_empty(), "{}: {found:#?}", sheet.id);
        // Control: a limit moved by one part in ten million is noticed, in every number the judge knows.
        for part in ["liquid_limit", "plastic_limit"] {
            if let Some(value) = ours[part]["value"].as_f64() {
                let mut nudged = ours.clone();
                nudged[part]["value"] = json!(value * (1.0 + 1e-7));
                assert_eq!(differences(&nudged, &theirs).len(), 1, "{}: a nudged {part} is noticed", sheet.id);
            }
        }
    }
}

// ---- the local socket ------------------------------------------------------

/// Asks the service at a state directory; an error when it does not answer.
pub fn ask(state: &Path, ask: &Value) -> std::io::Result<Value> {
    let mut stream = UnixStream::connect(state.join("asks.sock"))?;
    stream.set_read_timeout(Some(Duration::from_secs(10)))?;
    stream.write_all(format!("{ask}\n").as_bytes())?;
    let mut answer = String::new();
    BufReader::new(stream).read_line(&mut answer)?;
    serde_json::from_str(&answer).map_err(|e| std::io::Error::new(std::io::ErrorKind::UnexpectedEof, e))
}

/// Every fact after a number.
pub fn facts_after(state: &Path, mut seq: u64) -> std::io::Result<Vec<Value>> {
    let mut all = Vec::new();
    loop {
        let answer = ask(state, &json!({"ask": "facts_after", "seq": seq, "limit": 1000}))?;
        let facts = answer["facts"].as_array().cloned().unwrap_or_default();
        let Some(last) = facts.last() else { return Ok(all) };
        seq = last["seq"].as_u64().expect("a number");
        all.extend(facts);
    }
}

/// The status, once the service answers.
pub fn status(state: &Path) -> Option<Value> {
    ask(state, &json!({"ask": "status"})).ok().map(|a| a["status"].clone())
}

/// Waits until the service answers and its ports are open and quiet.
pub fn wait_up(state: &Path, ports: usize) {
    let open = |s: &Value| s["instruments"].as_array().into_iter().flatten().filter(|i| i["port_open"] == true).count();
    until("the service answers with its ports open", PATIENCE, || status(state).is_some_and(|s| open(&s) >= ports));
}
