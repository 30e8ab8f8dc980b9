//! A cable between two pseudo-terminals, a Modbus server by an independent
//! library at one end, and our port at the other.

// Each test program uses a part of this.
#![allow(dead_code)]

use rustix::fs::{Mode, OFlags};
use rustix::pty::OpenptFlags;
use rustix::termios::OptionalActions;
use std::cell::RefCell;
use std::io::{BufRead, BufReader, Write};
use std::net::TcpListener;
use std::os::fd::OwnedFd;
use std::path::{Path, PathBuf};
use std::process::{Child, ChildStdin, ChildStdout, Command, Stdio};
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex, MutexGuard};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};
use tarecup_core::signal::Signal;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, Clock, Deliver, InstrumentId, PortState, What};
use tarecup_drivers::port::serial::PortTask;
use tarecup_drivers::port::{CharFrame, Flow, PortSettings, modbus};
use tarecup_drivers::profile::{Profile, ProfileText};
use tokio::runtime::{Builder, Runtime};

static ONE_AT_A_TIME: Mutex<()> = Mutex::new(());

/// A program that is being started holds our locks for a moment: one test after the other.
pub fn alone() -> MutexGuard<'static, ()> {
    ONE_AT_A_TIME.lock().unwrap_or_else(|p| p.into_inner())
}

const LONG: Duration = Duration::from_secs(10);

/// A balance: 32 bits of hundredths of a gram, then bits.
pub const MASS: &str = r#"
kind = "balance"
[modbus]
unit = 1
every_ms = 50
timeout_ms = 150
framing = "rtu"
[[modbus.read]]
what = "mass"
register = 40001
width = 32
word_order = "high-first"
scale = "0.01"
unit = "g"
[[modbus.read]]
what = "status"
address = 2
steady_bit = 0
overload_bit = 1
net_bit = 2
error_bit = 3
"#;

/// A counter: 16 bits among the input registers.
pub const TOTAL: &str = r#"
kind = "counter"
[modbus]
unit = 1
every_ms = 50
timeout_ms = 150
[[modbus.read]]
what = "total"
address = 7
table = "input"
"#;

/// A profile with one thing changed.
pub fn with(text: &str, from: &str, to: &str) -> String {
    assert!(text.contains(from), "{from}");
    text.replace(from, to)
}

pub fn profile(text: &str) -> Arc<Profile> {
    let text: ProfileText = toml::from_str(text).expect("a profile");
    Arc::new(Profile::compile(text).expect("a profile"))
}

/// Micrograms, of a mass.
pub fn mass(what: &What) -> Option<i64> {
    if let What::Signal(Signal::Mass(reading)) = what { Some(reading.mass.ug()) } else { None }
}

fn pty() -> (OwnedFd, OwnedFd, PathBuf) {
    let master = rustix::pty::openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY).expect("a pty");
    rustix::pty::grantpt(&master).expect("granted");
    rustix::pty::unlockpt(&master).expect("unlocked");
    let path = PathBuf::from(rustix::pty::ptsname(&master, Vec::new()).expect("a name").into_string().expect("a path"));
    // Held, so that the line stays raw while nobody listens.
    let slave = rustix::fs::open(&path, OFlags::RDWR | OFlags::NOCTTY | OFlags::CLOEXEC, Mode::empty()).expect("the other end");
    let mut line = rustix::termios::tcgetattr(&slave).expect("a line");
    line.make_raw();
    rustix::termios::tcsetattr(&slave, OptionalActions::Now, &line).expect("raw");
    let flags = rustix::fs::fcntl_getfl(&master).expect("flags");
    rustix::fs::fcntl_setfl(&master, flags | OFlags::NONBLOCK).expect("flags");
    (master, slave, path)
}

/// Two pseudo-terminals wired to each other. Dropping it pulls the plug.
pub struct Cable {
    ends: [PathBuf; 2],
    stop: Arc<AtomicBool>,
    pump: Option<JoinHandle<()>>,
}

impl Cable {
    pub fn new() -> Self {
        let (a, b) = (pty(), pty());
        let ends = [a.2.clone(), b.2.clone()];
        let stop = Arc::new(AtomicBool::new(false));
        let stopped = Arc::clone(&stop);
        let pump = std::thread::spawn(move || {
            let mut some = [0u8; 512];
            while !stopped.load(Ordering::Relaxed) {
                let mut idle = true;
                for (from, to) in [(&a.0, &b.0), (&b.0, &a.0)] {
                    if let Ok(n) = rustix::io::read(from, &mut some) {
                        idle = false;
                        let _ = rustix::io::write(to, &some[..n]);
                    }
                }
                if idle {
                    std::thread::sleep(Duration::from_millis(1));
                }
            }
        });
        Self { ends, stop, pump: Some(pump) }
    }

    /// Our end.
    pub fn here(&self) -> PathBuf {
        self.ends[0].clone()
    }

    /// Plugs our end in under this name.
    pub fn link(&self, link: &Path) {
        let fresh = link.with_extension("new");
        std::os::unix::fs::symlink(&self.ends[0], &fresh).expect("a link");
        std::fs::rename(&fresh, link).expect("renamed");
    }
}

impl Drop for Cable {
    fn drop(&mut self) {
        self.stop.store(true, Ordering::Relaxed);
        let _ = self.pump.take().map(JoinHandle::join);
    }
}

/// The independent server. Dropping it kills it.
pub struct Server {
    child: Child,
    talk: RefCell<(ChildStdin, BufReader<ChildStdout>)>,
}

impl Server {
    pub fn serial(cable: &Cable) -> Self {
        Self::start(&["serial", &cable.ends[1].display().to_string(), "9600"])
    }

    /// On a free port, or on this one; with the path for our side.
    pub fn tcp(how: &str, port: Option<u16>) -> (Self, String) {
        let free = || TcpListener::bind("127.0.0.1:0").expect("a port").local_addr().expect("an address").port();
        let port = port.unwrap_or_else(free);
        (Self::start(&[how, &port.to_string()]), format!("tcp://127.0.0.1:{port}"))
    }

    fn start(args: &[&str]) -> Self {
        let tests = Path::new(env!("CARGO_MANIFEST_DIR")).join("../tests");
        let python = tests.join(".venv/bin/python");
        assert!(python.exists(), "the Modbus server needs Python with pymodbus: run tests/setup-python first");
        let mut child = Command::new(python)
            .arg(tests.join("modbus_server.py"))
            .args(args)
            .stdin(Stdio::piped())
            .stdout(Stdio::piped())
            .spawn()
            .expect("Python starts");
        let talk = (child.stdin.take().expect("input"), BufReader::new(child.stdout.take().expect("output")));
        let server = Self { child, talk: RefCell::new(talk) };
        assert_eq!(server.line(), "ready", "run tests/setup-python again");
        server
    }

    fn line(&self) -> String {
        let mut line = String::new();
        self.talk.borrow_mut().1.read_line(&mut line).expect("a line");
        line.trim_end().to_string()
    }

    /// Tells the server something; its answer.
    pub fn told(&self, words: &str) -> String {
        writeln!(self.talk.borrow_mut().0, "{words}").expect("told");
        self.line()
    }
}

impl Drop for Server {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

/// The bytes of a frame, and what they meant.
pub type Told = (Vec<u8>, What);

#[derive(Default)]
struct Sink(Mutex<(Vec<Told>, Vec<PortState>)>);

impl Deliver for Sink {
    fn heard(&self, batch: Batch) -> Result<(), Batch> {
        let mut from = 0;
        for frame in &batch.frames {
            let end = frame.end as usize;
            self.0.lock().expect("sink").0.push((batch.bytes[from..end].to_vec(), frame.what.clone()));
            from = end;
        }
        assert_eq!(from, batch.bytes.len(), "every byte belongs to a frame");
        Ok(())
    }
    fn overrun(&self, _: InstrumentId, _: u64, _: Stamp) {}
    fn state(&self, _: InstrumentId, state: PortState, _: Stamp) {
        self.0.lock().expect("sink").1.push(state);
    }
}

struct Machine(Instant);

impl Clock for Machine {
    fn now(&self) -> Stamp {
        let us = self.0.elapsed().as_micros() as i64;
        Stamp { utc_us: us, mono_us: us, ..Stamp::default() }
    }
}

/// One port at work.
pub struct Service {
    rt: Runtime,
    sink: Arc<Sink>,
    port: PortTask,
}

impl Service {
    pub fn start(path: &Path, text: &str) -> Self {
        let rt = Builder::new_multi_thread().worker_threads(1).enable_all().build().expect("a runtime");
        let sink = Arc::<Sink>::default();
        let path = path.to_string_lossy().into_owned();
        let settings = PortSettings { path, baud: 9600, frame: CharFrame::default(), flow: Flow::None };
        let clock = Arc::new(Machine(Instant::now()));
        let port = modbus::spawn(rt.handle(), 3, settings, profile(text), clock, sink.clone());
        Self { rt, sink, port }
    }

    /// All frames so far.
    pub fn all(&self) -> Vec<Told> {
        self.sink.0.lock().expect("sink").0.clone()
    }

    /// How many frames came so far.
    pub fn frames(&self) -> usize {
        self.all().len()
    }

    /// The frame before the latest mass.
    pub fn last_but_one(&self) -> Told {
        let all = self.all();
        let last = all.iter().rposition(|(_, what)| mass(what).is_some()).expect("a mass");
        all[last - 1].clone()
    }

    pub fn states(&self) -> Vec<PortState> {
        self.sink.0.lock().expect("sink").1.clone()
    }

    /// Waits for a frame that comes from now on.
    pub fn next(&self, wanted: impl Fn(&What) -> bool) -> Told {
        let (began, before) = (Instant::now(), self.frames());
        loop {
            let all = self.all();
            if let Some(found) = all[before..].iter().find(|(_, what)| wanted(what)) {
                return found.clone();
            }
            let tail = &all[all.len().saturating_sub(3)..];
            assert!(began.elapsed() < LONG, "it never came; the latest are {tail:?}, states {:?}", self.states());
            std::thread::sleep(Duration::from_millis(5));
        }
    }

    pub fn until(&self, state: &PortState) {
        let began = Instant::now();
        while self.states().last() != Some(state) {
            assert!(began.elapsed() < LONG, "never {state:?}: {:?}", self.states());
            std::thread::sleep(Duration::from_millis(5));
        }
    }

    /// Why the port was refused.
    pub fn refused(&self) -> String {
        let began = Instant::now();
        loop {
            if let Some(PortState::Refused(says)) = self.states().last() {
                return says.clone();
            }
            assert!(began.elapsed() < LONG, "never refused: {:?}", self.states());
            std::thread::sleep(Duration::from_millis(5));
        }
    }

    pub fn stop(self) {
        self.rt.block_on(self.port.join());
    }
}
