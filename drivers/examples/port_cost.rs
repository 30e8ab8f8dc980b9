//! What reading ports costs, in processor time per 1000 lines, over pseudo-terminals:
//! `cargo run --release -p tarecup-drivers --example port_cost`.

use rustix::fs::{Mode, OFlags};
use rustix::pty::OpenptFlags;
use rustix::termios::OptionalActions;
use rustix::time::ClockId;
use std::error::Error;
use std::os::fd::OwnedFd;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::{Duration, Instant};
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, Clock, Deliver, InstrumentId, PortState};
use tarecup_drivers::port::serial::{QUIET, spawn};
use tarecup_drivers::port::{CharFrame, Flow, PortSettings};
use tarecup_drivers::profile::{Profile, ProfileText};

const PORTS: usize = 32;
const LINES_A_SECOND: u32 = 50;
const SECONDS: u32 = 20;
const LINE: &[u8] = b"+   23.4571 g  S\r\n";

#[derive(Default)]
struct Count {
    lines: AtomicU64,
    batches: AtomicU64,
    opened: AtomicU64,
}

impl Deliver for Count {
    fn heard(&self, batch: Batch) -> Result<(), Batch> {
        self.lines.fetch_add(batch.frames.len() as u64, Ordering::Relaxed);
        self.batches.fetch_add(1, Ordering::Relaxed);
        Ok(())
    }
    fn overrun(&self, instrument: InstrumentId, lines: u64, _: Stamp) {
        eprintln!("port {instrument}: {lines} lines lost");
    }
    fn state(&self, _: InstrumentId, state: PortState, _: Stamp) {
        if state == PortState::Opened {
            self.opened.fetch_add(1, Ordering::Relaxed);
        }
    }
}

struct Fixed;

impl Clock for Fixed {
    fn now(&self) -> Stamp {
        Stamp::default()
    }
}

fn main() -> Result<(), Box<dyn Error>> {
    let text: ProfileText = toml::from_str(include_str!("../../config/profiles/signed-steady.toml"))?;
    let profile = Arc::new(Profile::compile(text)?);
    let ptys = (0..PORTS).map(|_| pty()).collect::<Result<Vec<_>, _>>()?;
    let rt = tokio::runtime::Builder::new_multi_thread().worker_threads(1).enable_all().build()?;
    let count = Arc::new(Count::default());
    let mut ports = Vec::new();
    for (id, (_, _, path)) in ptys.iter().enumerate() {
        let settings = PortSettings { path: path.clone(), baud: 9600, frame: CharFrame::default(), flow: Flow::None };
        ports.push(spawn(rt.handle(), id as InstrumentId, settings, Arc::clone(&profile), Arc::new(Fixed), count.clone()));
    }
    while count.opened.load(Ordering::Relaxed) < PORTS as u64 {
        std::thread::sleep(Duration::from_millis(5));
    }
    std::thread::sleep(QUIET * 2);
    let (used, woken) = play(&ptys)?;
    let lines = count.lines.load(Ordering::Relaxed);
    println!(
        "{PORTS} ports, {LINES_A_SECOND} lines a second each, {SECONDS} s: {lines} lines in {} batches, {:.2} ms of processor per 1000 lines, {woken} sleeps",
        count.batches.load(Ordering::Relaxed),
        used.as_secs_f64() * 1e6 / lines.max(1) as f64,
    );
    rt.block_on(async {
        for port in ports {
            port.join().await;
        }
    });
    Ok(())
}

/// Writes the lines in a steady rhythm, spread over the ports. Gives the processor time of
/// all other threads of this process meanwhile, and how often they went to sleep.
fn play(ptys: &[(OwnedFd, OwnedFd, String)]) -> Result<(Duration, u64), Box<dyn Error>> {
    let step = Duration::from_secs(1) / (LINES_A_SECOND * PORTS as u32);
    let others = || time(ClockId::ProcessCPUTime).saturating_sub(time(ClockId::ThreadCPUTime));
    let (before, slept, began) = (others(), sleeps(), Instant::now());
    for n in 0..SECONDS * LINES_A_SECOND * PORTS as u32 {
        std::thread::sleep((began + step * n).saturating_duration_since(Instant::now()));
        rustix::io::write(&ptys[n as usize % PORTS].0, LINE)?;
    }
    std::thread::sleep(Duration::from_millis(100));
    Ok((others().saturating_sub(before), sleeps() - slept))
}

fn time(clock: ClockId) -> Duration {
    let time = rustix::time::clock_gettime(clock);
    Duration::new(time.tv_sec as u64, time.tv_nsec as u32)
}

/// How often threads of this process other than the calling one went to sleep.
fn sleeps() -> u64 {
    let own = std::fs::read_link("/proc/thread-self").ok().and_then(|p| p.file_name().map(|n| n.to_owned()));
    let tasks = std::fs::read_dir("/proc/self/task").into_iter().flatten().flatten().filter(|t| Some(t.file_name()) != own);
    let count =
        |status: String| status.lines().find_map(|l| l.strip_prefix("voluntary_ctxt_switches:")?.trim().parse::<u64>().ok());
    tasks.filter_map(|t| count(std::fs::read_to_string(t.path().join("status")).ok()?)).sum()
}

/// Both ends and the name; the far end is held open, as it is raw only while somebody has it.
fn pty() -> Result<(OwnedFd, OwnedFd, String), Box<dyn Error>> {
    let master = rustix::pty::openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY)?;
    rustix::pty::grantpt(&master)?;
    rustix::pty::unlockpt(&master)?;
    let path = rustix::pty::ptsname(&master, Vec::new())?.into_string()?;
    let slave = rustix::fs::open(path.as_str(), OFlags::RDWR | OFlags::NOCTTY | OFlags::CLOEXEC, Mode::empty())?;
    let mut line = rustix::termios::tcgetattr(&slave)?;
    line.make_raw();
    rustix::termios::tcsetattr(&slave, OptionalActions::Now, &line)?;
    Ok((master, slave, path))
}
