//! A station with instruments on pseudo-terminals, and an operator who works at
//! it: does a step, looks whether it was taken, and does it again when the
//! service went away in between. Knows the program from outside only.

use super::oracle::Stimulus;
use super::{PATIENCE, Running, Sheet, TARECUP, ask, facts_after, status, until, wait_up};
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::path::PathBuf;
use std::process::{Command, Stdio};
use std::sync::Mutex;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::{Duration, Instant};
use tarecup_simulators::pty::Pty;

/// Between two lines of a balance.
const LINE: Duration = Duration::from_millis(4);
/// Between two drops: an instrument in a hurry.
pub const DROP: Duration = Duration::from_millis(30);
/// A person is not quicker than this after the screen is back.
const SETTLED: Duration = Duration::from_millis(260);
/// A run that was not told by then never will be: the pause that ends a run, and much more.
const RUN_LOST: Duration = Duration::from_secs(4);

/// Random numbers that can be repeated (SplitMix64).
pub struct Dice(pub u64);

impl Dice {
    /// Seeded by `TARECUP_SEED`, else by the clock; says so.
    pub fn thrown(what: &str) -> Self {
        let clock = || std::time::SystemTime::now().duration_since(std::time::UNIX_EPOCH).map_or(1, |d| d.as_nanos() as u64);
        let seed = std::env::var("TARECUP_SEED").ok().and_then(|s| s.parse().ok()).unwrap_or_else(clock);
        println!("{what}: TARECUP_SEED={seed}");
        Self(seed)
    }
    pub fn below(&mut self, n: u64) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        (z ^ (z >> 31)) % n
    }
}

/// How a cup counter speaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Cup {
    /// `DROP n`, `STOP n`.
    Numbered,
    /// `tick`, `done`.
    Unnumbered,
}

impl Cup {
    fn drop(self, n: u32) -> String {
        match self {
            Cup::Numbered => format!("DROP {n}\r\n"),
            Cup::Unnumbered => String::from("tick\r\n"),
        }
    }
    fn end(self, n: u32) -> String {
        match self {
            Cup::Numbered => format!("STOP {n}\r\n"),
            Cup::Unnumbered => String::from("done\r\n"),
        }
    }
}

/// Two benches: north counts with numbers and has a scanner, south counts without.
pub struct Station {
    pub state: PathBuf,
    pub config: PathBuf,
    pub dir: tempfile::TempDir,
    ptys: BTreeMap<&'static str, Mutex<Pty>>,
    child: Mutex<Option<Running>>,
    /// How often the service was killed.
    pub kills: AtomicU64,
    /// Lines written to each instrument.
    pub lines: Mutex<BTreeMap<String, u64>>,
    /// All that was done to it, for the oracle.
    pub done: Mutex<Stimulus>,
}

pub const PORTS: usize = 5;

impl Station {
    /// Instruments plugged in, configuration written; the service is not started.
    pub fn new(mqtt: &str) -> Self {
        let dir = tempfile::tempdir().expect("a folder");
        let at = |name: &str| dir.path().join(name);
        let names = ["pan-1", "cup-1", "scan-1", "pan-2", "cup-2"];
        let ptys = names.map(|n| (n, Mutex::new(Pty::open(&at(n)).expect("a pseudo-terminal")))).into();
        let instrument = |name: &str, kind: &str, bench: &str, profile: &str, more: &str| {
            format!(
                "[[instrument]]\nname = \"{name}\"\nkind = \"{kind}\"\nbench = \"{bench}\"\nport = \"{}\"\nprofile = \"{profile}\"\n{more}",
                at(name).display()
            )
        };
        let (fast, quick) = ("steady_readings = 3\n", "debounce_ms = 5\npause_ms = 1000\n");
        // These stations are looked at by other ways than their screen.
        let screen = if mqtt.contains("[screen]") { "" } else { "[screen]\nenabled = false\n" };
        let config = format!(
            "[lab]\nname = \"test\"\nstation = \"wet-room\"\n{screen}{mqtt}\n[[bench]]\nname = \"north\"\n[[bench]]\nname = \"south\"\n{}{}{}{}{}",
            instrument("pan-1", "balance", "north", "signed-steady", fast),
            instrument("cup-1", "counter", "north", "running-total", quick),
            instrument("scan-1", "scanner", "north", "plain-code", ""),
            instrument("pan-2", "balance", "south", "signed-steady", fast),
            instrument("cup-2", "counter", "south", "drop-line", quick),
        );
        let (state, config_path) = (at("state"), at("config.toml"));
        std::fs::write(&config_path, config).expect("written");
        let (child, kills, lines, done) = (Mutex::default(), AtomicU64::new(0), Mutex::default(), Mutex::default());
        Self { state, config: config_path, dir, ptys, child, kills, lines, done }
    }

    pub fn command(&self) -> Command {
        let mut command = Command::new(TARECUP);
        // The signing key is made there, not among the files of whoever runs the tests.
        command.env("XDG_CONFIG_HOME", self.dir.path().join("own"));
        command.args(["run", "--config"]).arg(&self.config).arg("--state").arg(&self.state).stdin(Stdio::null());
        command
    }

    pub fn signal(&self, signal: rustix::process::Signal) {
        self.child.lock().expect("child").as_ref().expect("it runs").signal(signal);
    }

    pub fn start(&self) {
        self.start_with(&[]);
    }

    /// Starts in another environment.
    pub fn start_in(&self, environment: &[(&str, &std::ffi::OsStr)]) {
        let log = std::fs::OpenOptions::new().create(true).append(true).open(self.dir.path().join("log")).expect("a log");
        let mut command = self.command();
        command.envs(environment.iter().copied());
        *self.child.lock().expect("child") = Some(Running::start(command.stdout(Stdio::null()).stderr(log)));
    }
    /// Starts with more arguments.
    pub fn start_with(&self, more: &[&str]) {
        let log = std::fs::OpenOptions::new().create(true).append(true).open(self.dir.path().join("log")).expect("a log");
        let mut command = self.command();
        *self.child.lock().expect("child") = Some(Running::start(command.args(more).stdout(Stdio::null()).stderr(log)));
    }

    /// Starts under `strace`, which writes what it saw to a file. The service is the child; whoever watches it stands beside.
    pub fn start_traced(&self, arguments: &[&str], seen: &std::path::Path) {
        let log = std::fs::OpenOptions::new().create(true).append(true).open(self.dir.path().join("log")).expect("a log");
        let own = self.command();
        let mut command = Command::new("strace");
        command.args(["-D", "-f", "-qq", "-o"]).arg(seen).args(arguments).arg(own.get_program()).args(own.get_args());
        command.envs(own.get_envs().filter_map(|(k, v)| v.map(|v| (k, v)))).stdin(Stdio::null());
        *self.child.lock().expect("child") = Some(Running::start(command.stdout(Stdio::null()).stderr(log)));
    }

    /// Whether the service has ended by itself.
    pub fn has_died(&self) -> bool {
        let mut child = self.child.lock().expect("child");
        child.as_mut().is_some_and(|c| c.0.try_wait().expect("waited").is_some())
    }

    pub fn kill9(&self) {
        self.kills.fetch_add(1, Ordering::SeqCst);
        *self.child.lock().expect("child") = None;
    }

    /// Stops in order; the exit code.
    pub fn term(&self) -> Option<i32> {
        let mut running = self.child.lock().expect("child").take().expect("running");
        running.signal(rustix::process::Signal::TERM);
        running.wait(PATIENCE).code()
    }

    pub fn log(&self) -> String {
        std::fs::read_to_string(self.dir.path().join("log")).unwrap_or_default()
    }

    pub fn say(&self, instrument: &str, text: &str) {
        let lines = text.matches('\n').count() as u64;
        *self.lines.lock().expect("lines").entry(instrument.into()).or_default() += lines;
        let mut pty = self.ptys[instrument].lock().expect("pty");
        let mut done = self.done.lock().expect("done");
        done.lines.entry(instrument.into()).or_default().extend(text.lines().map(|l| l.trim().to_owned()));
        drop(done);
        pty.write_or_lose(text.as_bytes()).expect("written");
    }

    /// Pulls the instrument's plug.
    pub fn unplug(&self, instrument: &str) {
        self.ptys[instrument].lock().expect("pty").unplug();
    }

    /// Plugs it in again, under the same name.
    pub fn replug(&self, instrument: &str) {
        self.ptys[instrument].lock().expect("pty").replug().expect("a pseudo-terminal");
    }

    /// What the status says of one instrument.
    pub fn instrument(&self, name: &str) -> Value {
        let status = status(&self.state).unwrap_or_default();
        let all = status["instruments"].as_array().cloned().unwrap_or_default();
        all.into_iter().find(|i| i["instrument"] == name).unwrap_or_default()
    }

    pub fn pid(&self) -> u32 {
        self.child.lock().expect("child").as_ref().expect("running").pid()
    }

    /// The container goes onto the pan and stays.
    pub fn load(&self, pan: &str, grams: &str) {
        for line in std::iter::repeat_n("0.00", 3).chain(std::iter::repeat_n(grams, 6)) {
            self.say(pan, &format!("+{line:>10} g  S\r\n"));
            std::thread::sleep(LINE);
        }
    }

    pub fn unload(&self, pan: &str) {
        (0..3).for_each(|_| self.say(pan, "+      0.00 g  S\r\n"));
    }

    /// The cup runs, whether or not anybody listens.
    pub fn drops(&self, name: &str, cup: Cup, drops: u32, each: Duration) {
        for n in 1..=drops {
            self.say(name, &cup.drop(n));
            std::thread::sleep(each);
        }
        self.say(name, &cup.end(drops));
    }

    fn generation(&self) -> u64 {
        self.kills.load(Ordering::SeqCst)
    }
}

/// Who works at one bench of the station.
pub struct Operator<'a> {
    station: &'a Station,
    bench: &'static str,
    pan: &'static str,
    cup_name: &'static str,
    cup: Cup,
    /// Looks whether a weighing or count was taken and repeats it; a lazy one just goes on.
    careful: bool,
    asks: u64,
    name: String,
    /// Kills that this operator has noticed.
    noticed: u64,
    /// Every fact told so far, by number from 1.
    pub facts: Vec<Value>,
    /// Steps done again.
    pub repeated: u64,
    /// Runs that came marked as interrupted, and were counted again.
    pub interrupted: u64,
    /// Runs whose number was wrong without a word.
    pub silently_wrong: Vec<String>,
}

impl<'a> Operator<'a> {
    pub fn at(station: &'a Station, cup: Cup, careful: bool) -> Self {
        let (bench, pan, cup_name) = match cup {
            Cup::Numbered => ("north", "pan-1", "cup-1"),
            Cup::Unnumbered => ("south", "pan-2", "cup-2"),
        };
        static MADE: AtomicU64 = AtomicU64::new(0);
        let name = format!("op{}", MADE.fetch_add(1, Ordering::SeqCst));
        let (facts, silently_wrong) = (Vec::new(), Vec::new());
        Self {
            station,
            bench,
            pan,
            cup_name,
            cup,
            careful,
            asks: 0,
            name,
            noticed: 0,
            facts,
            repeated: 0,
            interrupted: 0,
            silently_wrong,
        }
    }

    /// Waits for the service when it went away. The first line after the opening
    /// of a port may be half a line and is not used, unless it was quiet before.
    fn up(&mut self) {
        let generation = self.station.generation();
        if self.noticed != generation || self.facts.is_empty() {
            wait_up(&self.station.state, PORTS);
            std::thread::sleep(SETTLED);
            self.noticed = generation;
        }
    }

    /// Takes the facts that are new; what was told before must not change.
    pub fn look(&mut self) -> bool {
        let Ok(new) = facts_after(&self.station.state, self.facts.len() as u64) else { return false };
        for fact in new {
            assert_eq!(fact["seq"], json!(self.facts.len() + 1), "facts come without a gap");
            self.facts.push(fact);
        }
        true
    }

    /// Asks until there is an answer; the id makes it one ask.
    pub fn ask(&mut self, mut wanted: Value) -> Value {
        self.asks += 1;
        wanted["ask_id"] = json!(format!("{}-{}", self.name, self.asks));
        let start = Instant::now();
        loop {
            if let Ok(answer) = ask(&self.station.state, &wanted) {
                let in_trouble = answer["error"]["says"].as_str().is_some_and(|s| s.contains("nothing is being recorded"));
                if !in_trouble {
                    assert_eq!(answer["ok"], true, "{wanted} is done: {answer}\n{}", self.station.log());
                    self.station.done.lock().expect("done").asks.push((wanted, answer.clone()));
                    return answer;
                }
            }
            assert!(start.elapsed() < PATIENCE, "no answer to {wanted}");
            self.repeated += 1;
            std::thread::sleep(Duration::from_millis(20));
        }
    }

    fn bench_now(&self) -> Option<Value> {
        let status = status(&self.station.state)?;
        status["benches"].as_array()?.iter().find(|b| b["bench"] == self.bench).cloned()
    }

    /// Waits for something at the bench; false when the service went away or nothing came.
    fn see(&self, generation: u64, limit: Duration, seen: impl Fn(&Value) -> bool) -> bool {
        let start = Instant::now();
        while start.elapsed() < limit {
            if self.bench_now().is_some_and(|b| seen(&b)) {
                return true;
            }
            if self.station.generation() != generation {
                return false;
            }
            std::thread::sleep(Duration::from_millis(5));
        }
        false
    }

    fn latest(&self) -> u64 {
        let mut seq = None;
        until("the bench can be looked at", PATIENCE, || {
            seq = self.bench_now().map(|b| b["latest"]["seq"].as_u64().unwrap_or(0));
            seq.is_some()
        });
        seq.unwrap_or(0)
    }

    fn weigh(&mut self, container: &str, grams: &str) {
        self.up();
        let before = self.latest();
        let mass: f64 = grams.parse().expect("a number");
        let taken = |b: &Value| {
            let l = &b["latest"];
            l["seq"].as_u64().unwrap_or(0) > before && l["container"] == container && l["mass_g"] == json!(mass)
        };
        let held = |b: &Value| b["in_hand"]["container"] == container;
        for attempt in 0.. {
            if attempt >= 20 {
                self.look();
                let from = self.facts.len().saturating_sub(8);
                panic!("{container} {grams} g is never taken: {:#?}\n{:?}", &self.facts[from..], self.bench_now());
            }
            if attempt > 0 {
                self.repeated += 1;
                self.up();
                if self.bench_now().is_some_and(|b| taken(&b)) {
                    break;
                }
                // Begin anew with an empty pan: a code read while a loose mass lies there would be tied to that one.
                self.station.unload(self.pan);
                std::thread::sleep(Duration::from_millis(30));
            }
            let generation = self.station.generation();
            let second = Duration::from_secs(3);
            match self.cup {
                Cup::Numbered => self.station.say("scan-1", &format!("{container}\r\n")),
                Cup::Unnumbered => drop(self.ask(json!({"ask": "code", "bench": self.bench, "text": container}))),
            }
            let in_hand = self.see(generation, second, held);
            if in_hand || !self.careful {
                self.station.load(self.pan, grams);
                if self.see(generation, second, taken) || !self.careful {
                    break;
                }
            }
        }
        for attempt in 0.. {
            assert!(attempt < 60, "{container} never leaves the hand");
            let generation = self.station.generation();
            self.station.unload(self.pan);
            if self.see(generation, Duration::from_secs(3), |b| b["in_hand"].is_null()) || !self.careful {
                break;
            }
            self.repeated += 1;
            self.up();
        }
    }

    /// The counts at this bench that were told since fact number `after`.
    fn counted(&self, after: usize) -> Vec<Value> {
        let here = |f: &&Value| f["kind"] == "counted" && f["fact"]["bench"] == self.bench;
        self.facts[after..].iter().filter(here).cloned().collect()
    }

    fn count(&mut self, drops: u32) {
        self.up();
        until("the facts can be read", PATIENCE, || self.look());
        let mut after = self.facts.len();
        for attempt in 0.. {
            assert!(attempt < 60, "{drops} drops are never counted\n{}", self.station.log());
            self.repeated += u64::from(attempt > 0);
            self.station.drops(self.cup_name, self.cup, drops, DROP);
            let ended = Instant::now();
            let mut told = Vec::new();
            while told.is_empty() && (ended.elapsed() < RUN_LOST || status(&self.station.state).is_none()) {
                assert!(ended.elapsed() < PATIENCE * 2, "the service does not come back\n{}", self.station.log());
                self.look();
                told = self.counted(after);
                let gone = !self.careful && ended.elapsed() > Duration::from_millis(1_500);
                if gone {
                    return;
                }
                std::thread::sleep(Duration::from_millis(5));
            }
            if told.iter().any(|f| self.is_right(f, drops)) {
                return;
            }
            for fact in told {
                self.judge_count(&fact, drops);
            }
            after = self.facts.len();
        }
    }

    fn is_right(&self, fact: &Value, drops: u32) -> bool {
        let run = &fact["fact"]["run"];
        fact["fact"]["drops"] == drops && run["interrupted"].is_null()
    }

    /// A count that is not what fell: it must say so. The operator saw it and sets it aside.
    fn judge_count(&mut self, fact: &Value, drops: u32) {
        let run = &fact["fact"]["run"];
        let says = !run["interrupted"].is_null() || run["gaps"] != 0 || run["doubles"] != 0;
        self.interrupted += u64::from(!run["interrupted"].is_null());
        if !says {
            self.silently_wrong.push(format!("{drops} fell, told as {fact}"));
        }
        let why = "the service was away while it was counted";
        self.ask(json!({"ask": "set_aside", "what": fact["seq"], "who": "AB", "why": why}));
    }

    /// The whole of a specimen, from its opening to its dry masses.
    pub fn play(&mut self, sheet: &Sheet) {
        let bench = self.bench;
        let intend = |what: &str| json!({"ask": "intend", "bench": bench, "specimen": sheet.id, "intention": what});
        self.ask(json!({"ask": "sign_in", "bench": bench, "operator": "AB"}));
        self.ask(json!({"ask": "open_specimen", "specimen": sheet.id, "method": sheet.method}));
        let slices: Vec<_> = sheet.liquid.iter().map(|l| &l.slice).chain(&sheet.plastic).collect();
        for s in &slices {
            self.weigh(&s.container, &s.tare);
        }
        self.ask(intend("liquid"));
        for l in &sheet.liquid {
            l.drops.iter().for_each(|&d| self.count(d));
            self.weigh(&l.slice.container, &l.slice.wet);
        }
        self.ask(intend("plastic"));
        for s in &sheet.plastic {
            self.weigh(&s.container, &s.wet);
        }
        self.ask(json!({"ask": "intend_nothing", "bench": bench}));
        if self.careful {
            // What holds no soil cannot go into the oven: a lazy operator's asks would be refused.
            let containers: Vec<&str> = slices.iter().map(|s| s.container.as_str()).collect();
            self.ask(json!({"ask": "into_oven", "containers": containers}));
            self.ask(json!({"ask": "out_of_oven", "containers": containers}));
        }
        for s in &slices {
            self.weigh(&s.container, &s.dry[0]);
        }
        until("the facts can be read", PATIENCE, || self.look());
    }
}

/// The last limits of a specimen among facts.
pub fn limits_of(facts: &[Value], specimen: &str) -> Value {
    let of = |f: &&Value| f["kind"] == "limits_computed" && f["fact"]["specimen"] == specimen;
    facts.iter().rev().find(of).map_or(Value::Null, |f| f["fact"]["limits"].clone())
}

/// What must not depend on what happened to the service: limits, masses, drops.
pub fn essence(limits: &Value) -> Value {
    let row = |t: &Value| {
        let keys = ["kind", "no", "drops", "tare_g", "wet_g", "dry_g", "water_percent", "used"];
        Value::from(keys.map(|k| t[k].clone()).to_vec())
    };
    let rows: Vec<Value> = limits["trials"].as_array().into_iter().flatten().map(row).collect();
    json!([limits["liquid_limit"], limits["plastic_limit"], limits["plasticity_index"], rows])
}
