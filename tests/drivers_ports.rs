//! Serial ports over real pseudo-terminals, in real time: unplugging and
//! plugging in again, two programs at one port, blocked and flooded ports.
//!
//! The tests run one after the other, as some of them measure time and load.

use rustix::fs::{FlockOperation, Mode, OFlags};
use rustix::io::Errno;
use rustix::pty::OpenptFlags;
use rustix::termios::{ControlModes, InputModes, LocalModes, OptionalActions};
use rustix::time::ClockId;
use std::os::fd::OwnedFd;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, MutexGuard};
use std::time::{Duration, Instant};
use tarecup_core::signal::Signal;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, Clock, Deliver, InstrumentId, PortState, Reject, What};
use tarecup_drivers::port::serial::{PortTask, QUIET, spawn};
use tarecup_drivers::port::{CharFrame, Flow, PortSettings};
use tarecup_drivers::profile::{Profile, ProfileText};
use tokio::runtime::{Builder, Runtime};

static ONE_AT_A_TIME: Mutex<()> = Mutex::new(());

fn alone() -> MutexGuard<'static, ()> {
    ONE_AT_A_TIME.lock().unwrap_or_else(|p| p.into_inner())
}

const LONG: Duration = Duration::from_secs(5);

/// An instrument's end of a pseudo-terminal.
struct Pty {
    master: OwnedFd,
    /// Held, as a simulator does, so that the line stays raw while nobody listens.
    slave: OwnedFd,
    path: PathBuf,
}

impl Pty {
    fn new() -> Self {
        let master = rustix::pty::openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY).expect("a pty");
        rustix::pty::grantpt(&master).expect("granted");
        rustix::pty::unlockpt(&master).expect("unlocked");
        let name = rustix::pty::ptsname(&master, Vec::new()).expect("a name");
        let path = PathBuf::from(name.into_string().expect("a path"));
        let slave = open(&path);
        let mut line = rustix::termios::tcgetattr(&slave).expect("a line");
        line.make_raw();
        rustix::termios::tcsetattr(&slave, OptionalActions::Now, &line).expect("raw");
        let flags = rustix::fs::fcntl_getfl(&master).expect("flags");
        rustix::fs::fcntl_setfl(&master, flags | OFlags::NONBLOCK).expect("flags");
        Self { master, slave, path }
    }

    fn say(&self, text: &str) {
        let (mut rest, began) = (text.as_bytes(), Instant::now());
        while !rest.is_empty() {
            match rustix::io::write(&self.master, rest) {
                Ok(n) => rest = &rest[n..],
                Err(Errno::AGAIN) => std::thread::sleep(Duration::from_millis(1)),
                Err(e) => panic!("not written: {e}"),
            }
            assert!(began.elapsed() < LONG, "nobody reads the port");
        }
    }

    /// What was written to the instrument so far.
    fn asked(&self) -> Vec<u8> {
        let mut all = Vec::new();
        let mut some = [0u8; 4096];
        while let Ok(n) = rustix::io::read(&self.master, &mut some) {
            all.extend_from_slice(&some[..n]);
        }
        all
    }

    /// Plugs the instrument in under this name.
    fn link(&self, link: &Path) {
        let fresh = link.with_extension("new");
        std::os::unix::fs::symlink(&self.path, &fresh).expect("a link");
        std::fs::rename(&fresh, link).expect("renamed");
    }
}

fn open(path: &Path) -> OwnedFd {
    let flags = OFlags::RDWR | OFlags::NOCTTY | OFlags::NONBLOCK | OFlags::CLOEXEC;
    rustix::fs::open(path, flags, Mode::empty()).expect("the other end")
}

/// Takes what ports deliver, and can be full.
#[derive(Default)]
struct Sink {
    took: Mutex<Took>,
}

#[derive(Clone, Default)]
struct Took {
    full: bool,
    lines: Vec<(InstrumentId, Vec<u8>, What, Stamp)>,
    states: Vec<(InstrumentId, PortState, Instant)>,
    overrun: u64,
}

impl Sink {
    fn took(&self) -> MutexGuard<'_, Took> {
        self.took.lock().expect("sink")
    }

    /// Waits until what was taken is as wanted; how long that took.
    fn until(&self, what: &str, wanted: impl Fn(&Took) -> bool) -> Duration {
        let began = Instant::now();
        while !wanted(&self.took()) {
            let took = self.took().clone();
            assert!(began.elapsed() < LONG, "never came: {what}; states {:?}, lines {:?}", took.states, tail(&took.lines));
            std::thread::sleep(Duration::from_millis(2));
        }
        began.elapsed()
    }

    fn until_state(&self, id: InstrumentId, state: &PortState) -> Duration {
        self.until(&format!("{state:?}"), |t| t.states.iter().rfind(|s| s.0 == id).is_some_and(|s| s.1 == *state))
    }

    fn masses(&self, id: InstrumentId) -> Vec<i64> {
        let took = self.took();
        let of = took.lines.iter().filter(|l| l.0 == id);
        of.filter_map(|l| if let What::Signal(Signal::Mass(r)) = &l.2 { Some(r.mass.ug()) } else { None }).collect()
    }
}

fn tail<T>(list: &[T]) -> &[T] {
    &list[list.len().saturating_sub(3)..]
}

impl Deliver for Sink {
    fn heard(&self, batch: Batch) -> Result<(), Batch> {
        let mut took = self.took();
        if took.full {
            return Err(batch);
        }
        let mut from = 0;
        for frame in &batch.frames {
            let end = frame.end as usize;
            took.lines.push((batch.instrument, batch.bytes[from..end].to_vec(), frame.what.clone(), frame.at));
            from = end;
        }
        assert_eq!(from, batch.bytes.len(), "every byte belongs to a frame");
        Ok(())
    }
    fn overrun(&self, _: InstrumentId, lines: u64, _: Stamp) {
        self.took().overrun += lines;
    }
    fn state(&self, instrument: InstrumentId, state: PortState, _: Stamp) {
        self.took().states.push((instrument, state, Instant::now()));
    }
}

struct Machine(Instant);

impl Clock for Machine {
    fn now(&self) -> Stamp {
        let us = self.0.elapsed().as_micros() as i64;
        Stamp { utc_us: us, mono_us: us, ..Stamp::default() }
    }
}

fn profile(toml: &str) -> Arc<Profile> {
    let text: ProfileText = toml::from_str(toml).expect("a profile");
    Arc::new(Profile::compile(text).expect("a profile"))
}

fn signed_steady() -> Arc<Profile> {
    profile(include_str!("../config/profiles/signed-steady.toml"))
}

fn plain_stream() -> Arc<Profile> {
    profile(include_str!("../config/profiles/plain-stream.toml"))
}

fn settings(path: &Path) -> PortSettings {
    PortSettings { path: path.to_string_lossy().into_owned(), baud: 9600, frame: CharFrame::default(), flow: Flow::None }
}

/// A service with one thread, so that whatever blocks it blocks every port.
struct Service {
    rt: Runtime,
    sink: Arc<Sink>,
    clock: Arc<Machine>,
}

impl Service {
    fn new() -> Self {
        let rt = Builder::new_multi_thread().worker_threads(1).enable_all().build().expect("a runtime");
        Self { rt, sink: Arc::default(), clock: Arc::new(Machine(Instant::now())) }
    }

    fn port(&self, id: InstrumentId, path: &Path, profile: &Arc<Profile>) -> PortTask {
        self.port_with(id, settings(path), profile)
    }

    fn port_with(&self, id: InstrumentId, settings: PortSettings, profile: &Arc<Profile>) -> PortTask {
        let (clock, sink) = (Arc::clone(&self.clock), Arc::clone(&self.sink));
        spawn(self.rt.handle(), id, settings, Arc::clone(profile), clock, sink)
    }

    /// Waits until the port is open and its silence has been noticed.
    fn opened(&self, id: InstrumentId) {
        self.sink.until_state(id, &PortState::Opened);
        std::thread::sleep(QUIET + Duration::from_millis(30));
    }

    fn stop(self, ports: Vec<PortTask>) {
        for port in ports {
            self.rt.block_on(port.join());
        }
    }
}

const LINE: &str = "+   23.4571 g  S\r\n";

#[test]
fn lines_come_through_however_they_are_written() {
    let _alone = alone();
    let (service, pty) = (Service::new(), Pty::new());
    let port = service.port(4, &pty.path, &signed_steady());
    service.opened(4);
    let before = service.clock.now();
    pty.say(LINE);
    pty.say("+   23.45");
    std::thread::sleep(Duration::from_millis(50));
    pty.say("72 g  S\r\n+   23.4573 g  U\r\n");
    service.sink.until("three lines", |t| t.lines.len() == 3);
    assert_eq!(service.sink.masses(4), [23_457_100, 23_457_200, 23_457_300]);
    let took = service.sink.took().clone();
    assert_eq!(took.lines[0].1, LINE.as_bytes());
    assert!(took.lines[0].3.mono_us > before.mono_us);
    // The split line carries the time of its second half.
    assert!(took.lines[1].3.mono_us - took.lines[0].3.mono_us >= 45_000);
    // A line that is not raw would have been echoed.
    assert_eq!(pty.asked(), b"");
    service.stop(vec![port]);
}

#[test]
fn a_line_that_began_before_the_opening_is_no_mass() {
    let _alone = alone();
    let (service, pty) = (Service::new(), Pty::new());
    // What an instrument sends without a pause when the port is opened.
    pty.say("2.34 g\r\n     12.34 g\r\n");
    let port = service.port(1, &pty.path, &plain_stream());
    service.sink.until("two lines", |t| t.lines.len() == 2);
    assert_eq!(service.sink.took().lines[0].2, What::Reject(Reject::FirstPartial));
    assert_eq!(service.sink.masses(1), [12_340_000]);
    service.stop(vec![port]);

    // The control: after silence the first line begins at its beginning.
    let service = Service::new();
    let port = service.port(1, &pty.path, &plain_stream());
    service.opened(1);
    pty.say("2.34 g\r\n");
    service.sink.until("a line", |t| t.lines.len() == 1);
    assert_eq!(service.sink.masses(1), [2_340_000]);
    service.stop(vec![port]);
}

/// Descriptors of this process that lead to `path`, whether it is still there or not.
fn descriptors(path: &Path) -> usize {
    let (there, gone) = (path.to_string_lossy().into_owned(), format!("{} (deleted)", path.display()));
    let files = std::fs::read_dir("/proc/self/fd").expect("descriptors").flatten();
    let targets = files.filter_map(|f| std::fs::read_link(f.path()).ok());
    targets.filter(|to| *to == Path::new(&there) || *to == Path::new(&gone)).count()
}

#[test]
fn unplugged_in_mid_line_and_plugged_in_again_under_its_name() {
    let _alone = alone();
    let folder = tempfile::tempdir().expect("a folder");
    let link = folder.path().join("adapter-A");
    let service = Service::new();
    let first = Pty::new();
    first.link(&link);
    let port = service.port(1, &link, &signed_steady());
    service.opened(1);
    first.say(LINE);
    first.say("+   99.99");
    service.sink.until("a line", |t| t.lines.len() == 1);
    std::thread::sleep(Duration::from_millis(50));

    let path = first.path.clone();
    assert_eq!(descriptors(&path), 2, "control: the test and the port have it open");
    std::fs::remove_file(&link).expect("unlinked");
    drop(first);
    assert!(service.sink.until_state(1, &PortState::Lost) < Duration::from_secs(1));
    service.sink.until("the half line", |t| t.lines.len() == 2);
    let half = service.sink.took().lines[1].clone();
    assert_eq!((half.1.as_slice(), half.2), (b"+   99.99".as_slice(), What::Reject(Reject::CutOff)));
    assert_eq!(descriptors(&path), 0, "the old descriptor is closed");

    // Gone long enough that the pauses between attempts have grown to their longest.
    std::thread::sleep(Duration::from_millis(2_300));
    assert_eq!(service.sink.took().states.iter().filter(|s| s.1 == PortState::Opened).count(), 1, "control: nothing to open");
    // Another pseudo-terminal takes its place, as ttyUSB1 does that of ttyUSB0.
    let spare = Pty::new();
    let second = Pty::new();
    drop(spare);
    second.link(&link);
    let took = service.sink.until_state(1, &PortState::Opened);
    assert!(took < Duration::from_secs(2), "reopened after {took:?}");
    std::thread::sleep(QUIET + Duration::from_millis(30));
    second.say("+   23.4572 g  S\r\n");
    service.sink.until("a line after it", |t| t.lines.len() == 3);
    assert_eq!(service.sink.masses(1), [23_457_100, 23_457_200]);
    service.stop(vec![port]);
}

#[test]
fn a_link_that_points_elsewhere_after_the_unplugging_is_followed() {
    let _alone = alone();
    let folder = tempfile::tempdir().expect("a folder");
    let link = folder.path().join("adapter-A");
    let (service, first, second) = (Service::new(), Pty::new(), Pty::new());
    first.link(&link);
    let port = service.port(1, &link, &signed_steady());
    service.opened(1);
    second.link(&link);
    drop(first);
    service.sink.until("a second opening", |t| t.states.iter().filter(|s| s.1 == PortState::Opened).count() == 2);
    std::thread::sleep(QUIET + Duration::from_millis(30));
    second.say(LINE);
    service.sink.until("a line", |t| t.lines.len() == 1);
    assert_eq!(service.sink.masses(1), [23_457_100]);
    service.stop(vec![port]);
}

fn processor_time() -> Duration {
    let time = rustix::time::clock_gettime(ClockId::ProcessCPUTime);
    Duration::new(time.tv_sec as u64, time.tv_nsec as u32)
}

/// Share of one processor this process uses for a while.
fn load(during: Duration) -> f64 {
    let (began, used) = (Instant::now(), processor_time());
    std::thread::sleep(during);
    (processor_time() - used).as_secs_f64() / began.elapsed().as_secs_f64()
}

#[test]
fn a_port_that_is_gone_costs_next_to_nothing() {
    let _alone = alone();
    let (service, pty) = (Service::new(), Pty::new());
    let path = pty.path.clone();
    let port = service.port(1, &path, &signed_steady());
    let absent = service.port(2, Path::new("/nowhere/at-all"), &signed_steady());
    service.opened(1);
    service.sink.until_state(2, &PortState::Waiting);
    drop(pty);
    service.sink.until_state(1, &PortState::Lost);
    let gone = load(Duration::from_secs(2));
    assert!(gone < 0.05, "{:.1} % of a processor while two ports are gone", gone * 100.0);
    // The control: a loop that reads a port which is gone uses a whole processor.
    let busy = std::thread::spawn(|| {
        let until = Instant::now() + Duration::from_millis(500);
        let (null, mut some) = (std::fs::File::open("/dev/null").expect("opened"), [0u8; 16]);
        while Instant::now() < until {
            assert_eq!(rustix::io::read(&null, &mut some).expect("read"), 0);
        }
    });
    assert!(load(Duration::from_millis(400)) > 0.2);
    busy.join().expect("ended");
    service.stop(vec![port, absent]);
}

/// How often the calling thread went to sleep so far.
fn sleeps() -> u64 {
    let status = std::fs::read_to_string("/proc/thread-self/status").expect("status");
    let line = status.lines().find(|l| l.starts_with("voluntary_ctxt_switches")).expect("a count");
    line.split_ascii_whitespace().nth(1).and_then(|n| n.parse().ok()).expect("a number")
}

/// Wake-ups of a service whose one thread this is, in two seconds with one silent port.
fn wake_ups(profile: &Arc<Profile>) -> u64 {
    let pty = Pty::new();
    let rt = Builder::new_current_thread().enable_all().build().expect("a runtime");
    let sink = Arc::new(Sink::default());
    let port = spawn(rt.handle(), 1, settings(&pty.path), Arc::clone(profile), Arc::new(Machine(Instant::now())), sink.clone());
    rt.block_on(async {
        tokio::time::sleep(Duration::from_millis(500)).await;
        assert_eq!(sink.took().states.last().map(|s| s.1.clone()), Some(PortState::Opened));
        let before = sleeps();
        tokio::time::sleep(Duration::from_secs(2)).await;
        let woken = sleeps() - before;
        port.join().await;
        woken
    })
}

#[test]
fn an_idle_port_does_not_wake_the_service() {
    let _alone = alone();
    let idle = wake_ups(&signed_steady());
    // The sleep itself wakes it once; long timers are rearmed a few times on the way.
    assert!(idle <= 6, "{idle} wake-ups");
    let asking = profile(&ASKED.replace("EVERY", "20"));
    let asked = wake_ups(&asking);
    assert!(asked >= 50, "control: {asked} wake-ups");
}

const ASKED: &str = r#"
kind = "balance"
frame = { ends = ["\r\n"] }
ask = { send = "KINDLY TELL ME HOW MUCH MASS THERE IS ON YOUR PAN AT THIS VERY MOMENT\r\n", every_ms = EVERY }
[[line]]
pattern = '(?<mass>[+-] *\d+\.\d+) (?<unit>g)  (?<steady>S)'
"#;

#[test]
fn the_request_is_sent_and_nothing_else() {
    let _alone = alone();
    let service = Service::new();
    let (asked, unasked) = (Pty::new(), Pty::new());
    let asking = profile(&ASKED.replace("EVERY", "100"));
    let request = asking.ask().expect("asks").send.clone();
    let ports = vec![service.port(1, &asked.path, &asking), service.port(2, &unasked.path, &signed_steady())];
    service.opened(1);
    service.opened(2);
    unasked.say(LINE);
    unasked.say("noise \x00 noise \r\n");
    let mut got = Vec::new();
    for _ in 0..10 {
        std::thread::sleep(Duration::from_millis(100));
        got.extend(asked.asked());
        asked.say(LINE);
    }
    assert_eq!(unasked.asked(), b"");
    let count = got.len() / request.len();
    assert_eq!(got, request.repeat(count), "{}", String::from_utf8_lossy(&got));
    assert!((8..=13).contains(&count), "{count} requests in a second");
    service.sink.until("the answers", |t| t.lines.iter().filter(|l| l.0 == 1).count() == 10);
    // The silence before the first request makes its answer whole.
    assert_eq!(service.sink.masses(1).len(), 10);
    service.stop(ports);
}

#[test]
fn a_port_that_takes_no_bytes_stalls_no_other() {
    let _alone = alone();
    let service = Service::new();
    let (deaf, good) = (Pty::new(), Pty::new());
    let asking = profile(&ASKED.replace("EVERY", "20").replace("AT THIS VERY MOMENT", &"AGAIN AND ".repeat(40)));
    let ports = vec![service.port(1, &deaf.path, &asking), service.port(2, &good.path, &signed_steady())];
    service.opened(2);
    let mut worst = Duration::ZERO;
    for n in 1..=150 {
        good.say(LINE);
        worst = worst.max(service.sink.until("a line", |t| t.lines.iter().filter(|l| l.0 == 2).count() == n));
        std::thread::sleep(Duration::from_millis(15));
    }
    assert!(worst < Duration::from_millis(250), "a line took {worst:?}");
    // The control: the deaf port was really full, for requests of 450 bytes each 20 ms would be far more by now.
    let unread = deaf.asked().len();
    assert!((4_000..40_000).contains(&unread), "{unread} bytes waited");
    service.stop(ports);
}

#[test]
fn a_port_belongs_to_one_program() {
    let _alone = alone();
    let (service, pty) = (Service::new(), Pty::new());
    let first = service.port(1, &pty.path, &signed_steady());
    service.opened(1);
    let second = service.port(2, &pty.path, &signed_steady());
    let refused = |t: &Took| {
        t.states
            .iter()
            .any(|s| s.0 == 2 && matches!(&s.1, PortState::Refused(w) if w.contains("another instrument of this service")))
    };
    assert!(service.sink.until("the refusal", refused) < Duration::from_secs(1));
    // The first one is undisturbed.
    pty.say(LINE);
    service.sink.until("a line", |t| t.lines.len() == 1);
    assert_eq!(service.sink.took().lines[0].0, 1);
    // The control: with the first gone the second gets the port.
    service.rt.block_on(first.join());
    assert!(service.sink.until_state(2, &PortState::Opened) < Duration::from_secs(2));
    service.stop(vec![second]);
}

#[test]
fn another_program_at_the_port_is_named() {
    let _alone = alone();
    let (service, pty) = (Service::new(), Pty::new());
    let mut holder =
        std::process::Command::new("flock").arg("--no-fork").arg(&pty.path).args(["sleep", "30"]).spawn().expect("the holder");
    let began = Instant::now();
    // Until the other program has its lock, this one would get it.
    while rustix::fs::flock(&pty.slave, FlockOperation::NonBlockingLockExclusive).is_ok() {
        rustix::fs::flock(&pty.slave, FlockOperation::Unlock).expect("unlocked");
        assert!(began.elapsed() < LONG);
        std::thread::sleep(Duration::from_millis(5));
    }
    let port = service.port(1, &pty.path, &signed_steady());
    let id = holder.id();
    let named = |t: &Took| {
        let says = |w: &str| w.contains(&format!("'sleep' (process {id})")) && w.contains("give this instrument another port");
        t.states.iter().any(|s| matches!(&s.1, PortState::Refused(w) if says(w)))
    };
    assert!(service.sink.until("the holder's name", named) < Duration::from_secs(1));
    // The control: once that program has ended the port is opened.
    holder.kill().expect("killed");
    holder.wait().expect("ended");
    assert!(service.sink.until_state(1, &PortState::Opened) < Duration::from_secs(2));
    service.stop(vec![port]);
}

#[test]
fn a_flood_is_taken_whole_and_beyond_the_bound_it_is_counted() {
    let _alone = alone();
    const LINES: usize = 20_000;
    let flood: String = (0..LINES).map(|n| format!("+{:>10} g  U\r\n", format!("{}.{:04}", n / 10_000, n % 10_000))).collect();
    // The control: with room for all nothing is lost or reordered.
    let (service, pty) = (Service::new(), Pty::new());
    let port = service.port(1, &pty.path, &signed_steady());
    service.opened(1);
    pty.say(&flood);
    service.sink.until("all lines", |t| t.lines.len() == LINES);
    let expected: Vec<i64> = (0..LINES as i64).map(|n| n * 100).collect();
    assert_eq!(service.sink.masses(1), expected);
    assert_eq!(service.sink.took().overrun, 0);

    // Without room a bounded number is kept, in order, and the rest is counted.
    service.sink.took().lines.clear();
    service.sink.took().full = true;
    pty.say(&flood);
    std::thread::sleep(Duration::from_millis(300));
    service.sink.took().full = false;
    service.sink.until("the overrun", |t| t.overrun > 0 && t.lines.len() as u64 + t.overrun == LINES as u64);
    let kept = service.sink.masses(1);
    assert!(kept.len() > 1_000, "{} lines kept", kept.len());
    assert_eq!(kept, expected[..kept.len()]);
    // Afterwards all is as before.
    pty.say(LINE);
    service.sink.until("a line", |t| t.lines.last().is_some_and(|l| l.1 == LINE.as_bytes()));
    service.stop(vec![port]);
}

#[test]
fn a_port_that_appears_later_is_opened_and_a_stopped_one_is_free() {
    let _alone = alone();
    let folder = tempfile::tempdir().expect("a folder");
    let link = folder.path().join("later");
    let service = Service::new();
    let port = service.port(1, &link, &signed_steady());
    service.sink.until_state(1, &PortState::Waiting);
    let pty = Pty::new();
    pty.link(&link);
    assert!(service.sink.until_state(1, &PortState::Opened) < Duration::from_secs(2));
    let lock = || rustix::fs::flock(&pty.slave, FlockOperation::NonBlockingLockExclusive);
    assert!(lock().is_err(), "control: the port is locked while it is open");
    let began = Instant::now();
    service.rt.block_on(port.join());
    assert!(began.elapsed() < Duration::from_secs(1));
    assert!(lock().is_ok());
}

#[test]
fn the_line_is_set_as_configured() {
    let _alone = alone();
    let (service, pty) = (Service::new(), Pty::new());
    let mut line = rustix::termios::tcgetattr(&pty.slave).expect("a line");
    line.local_modes |= LocalModes::ECHO | LocalModes::ICANON;
    rustix::termios::tcsetattr(&pty.slave, OptionalActions::Now, &line).expect("set");
    // A speed that is in no table, with parity that pseudo-terminals ignore.
    let settings =
        PortSettings { baud: 12_345, frame: "7E1".parse().expect("a frame"), flow: Flow::Software, ..settings(&pty.path) };
    let port = service.port_with(1, settings, &signed_steady());
    service.sink.until_state(1, &PortState::Opened);
    let line = rustix::termios::tcgetattr(&pty.slave).expect("a line");
    assert_eq!(line.output_speed(), 12_345);
    assert!(!line.local_modes.intersects(LocalModes::ECHO | LocalModes::ICANON | LocalModes::ISIG));
    assert!(line.input_modes.contains(InputModes::IXON | InputModes::INPCK));
    assert!(!line.input_modes.intersects(InputModes::ICRNL | InputModes::INLCR | InputModes::IGNCR));
    service.stop(vec![port]);
}

#[test]
fn a_line_without_parity_still_marks_bad_bytes_and_stays_up_when_closed() {
    let _alone = alone();
    let (service, pty) = (Service::new(), Pty::new());
    let mut line = rustix::termios::tcgetattr(&pty.slave).expect("a line");
    line.control_modes |= ControlModes::HUPCL;
    line.control_modes -= ControlModes::CSTOPB | ControlModes::CRTSCTS;
    line.input_modes |= InputModes::IGNPAR | InputModes::PARMRK;
    rustix::termios::tcsetattr(&pty.slave, OptionalActions::Now, &line).expect("set");
    let settings =
        PortSettings { baud: 1_200, frame: "8N2".parse().expect("a frame"), flow: Flow::Hardware, ..settings(&pty.path) };
    let port = service.port_with(1, settings, &signed_steady());
    service.sink.until_state(1, &PortState::Opened);
    let line = rustix::termios::tcgetattr(&pty.slave).expect("a line");
    assert_eq!((line.output_speed(), line.input_speed()), (1_200, 1_200));
    assert!(line.input_modes.contains(InputModes::INPCK));
    assert!(!line.input_modes.intersects(InputModes::IGNPAR | InputModes::PARMRK | InputModes::IXON));
    assert!(line.control_modes.contains(ControlModes::CSTOPB | ControlModes::CRTSCTS | ControlModes::CLOCAL));
    assert!(!line.control_modes.contains(ControlModes::HUPCL));
    service.stop(vec![port]);
}

#[test]
fn what_is_no_serial_port_is_refused_in_words() {
    let _alone = alone();
    let service = Service::new();
    let mut ports = Vec::new();
    for (id, path, word) in [(1, "/dev", "folder"), (2, "/dev/null", "not a serial port")] {
        ports.push(service.port(id, Path::new(path), &signed_steady()));
        service.sink.until("the refusal", |t| {
            t.states.iter().any(|s| s.0 == id && matches!(&s.1, PortState::Refused(w) if w.starts_with(path) && w.contains(word)))
        });
    }
    service.stop(ports);
}
