//! A switch on a modem-control line, as a thread: open, look, lose, reopen.
//!
//! The system could wake a thread at an edge, but only by a call that no safe
//! interface offers; so the line is looked at every 2 ms, which costs about one
//! percent of one processor core and only while the port is open.

use super::PortSettings;
use super::hold::Hold;
use super::open::{self, OpenFault};
use super::serial::PortTask;
use super::teller::Teller;
use crate::heard::{Batch, Clock, Deliver, Frame, InstrumentId, PortState};
use crate::profile::Profile;
use crate::pulse::{Contact, LOOK_US, LineSource, ModemLine};
use std::io;
use std::sync::Arc;
use std::time::{Duration, Instant};
use tokio::runtime::Handle;
use tokio::sync::{oneshot, watch};
use tokio_serial::{SerialPort, SerialStream};

/// First and longest pause before another attempt to open.
const BACK_OFF: [Duration; 2] = [Duration::from_millis(50), Duration::from_secs(1)];
/// How long the end waits for a full receiver.
const FAREWELL: Duration = Duration::from_millis(500);
/// Time between two looks.
const LOOK: Duration = Duration::from_micros(LOOK_US as u64);
/// Pause before a full receiver is tried again, in looks.
const RETRY_LOOKS: u32 = 8;

/// Which line, and how long its switch bounces.
#[derive(Clone, Copy, Debug, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
pub struct PulseSettings {
    /// The line.
    pub line: ModemLine,
    /// The switch is at rest after so long without a change, milliseconds.
    pub bounce_ms: u32,
}

/// Starts watching a line of the port. `rt` is needed for opening only; the
/// watching has a thread of its own.
pub fn spawn(
    rt: &Handle,
    id: InstrumentId,
    (settings, pulse): (PortSettings, PulseSettings),
    profile: Arc<Profile>,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
) -> PortTask {
    let (stop, stopped) = watch::channel(false);
    let (over, ended) = oneshot::channel::<()>();
    let teller = Teller::new(id, &settings.path, Arc::clone(&clock), Arc::clone(&out));
    let watcher = Watcher { id, settings, pulse, profile, hold: Hold::new(id), clock, out, stopped, teller };
    let handle = rt.clone();
    let thread = std::thread::Builder::new().name("pulse".into()).spawn(move || {
        let _inside = handle.enter();
        watcher.run();
        drop(over);
    });
    if let Err(e) = thread {
        tracing::error!(%e, "the system gives no thread to watch a line");
    }
    PortTask::new(stop, rt.spawn(async move { drop(ended.await) }))
}

struct Watcher {
    id: InstrumentId,
    settings: PortSettings,
    pulse: PulseSettings,
    profile: Arc<Profile>,
    hold: Hold,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
    stopped: watch::Receiver<bool>,
    teller: Teller,
}

/// The lines of an open port.
struct Lines(SerialStream);

impl LineSource for Lines {
    fn closed(&mut self, line: ModemLine) -> io::Result<bool> {
        let read = match line {
            ModemLine::Cts => self.0.read_clear_to_send(),
            ModemLine::Dsr => self.0.read_data_set_ready(),
            ModemLine::Dcd => self.0.read_carrier_detect(),
            ModemLine::Ri => self.0.read_ring_indicator(),
        };
        read.map_err(io::Error::from)
    }
}

impl Watcher {
    fn run(mut self) {
        let mut pause = BACK_OFF[0];
        while !self.is_stopped() {
            match open::open(&self.settings) {
                Ok(port) => {
                    let began = Instant::now();
                    self.watch(Lines(port));
                    if began.elapsed() >= BACK_OFF[1] {
                        pause = BACK_OFF[0];
                    }
                }
                Err(fault) => self.say_fault(fault),
            }
            self.wait(pause);
            pause = (pause * 2).min(BACK_OFF[1]);
        }
        let until = Instant::now() + FAREWELL;
        while !self.hold.is_empty() && Instant::now() < until {
            self.hold.retry(&*self.out, self.clock.now());
            std::thread::sleep(LOOK);
        }
        self.hold.give_up(&*self.out, self.clock.now());
    }

    /// Nobody can stop it any more counts as stopped.
    fn is_stopped(&self) -> bool {
        *self.stopped.borrow() || self.stopped.has_changed().is_err()
    }

    fn wait(&mut self, pause: Duration) {
        let until = Instant::now() + pause;
        while Instant::now() < until && !self.is_stopped() {
            std::thread::sleep(Duration::from_millis(10).min(pause));
            self.hold.retry(&*self.out, self.clock.now());
        }
    }

    fn say_fault(&mut self, fault: OpenFault) {
        if self.teller.fault(fault) {
            self.teller.busy(open::busy(&self.settings.path));
        }
    }

    /// Looks at the line until it is gone or the thread is stopped.
    fn watch(&mut self, mut source: impl LineSource) {
        let line = self.pulse.line;
        if let Err(e) = source.closed(line) {
            let (path, word) = (&self.settings.path, line.word());
            let says = format!(
                "{path}: its line {word} cannot be read ({e}); use a serial port that has this line, or name another one in pulse"
            );
            return self.teller.say(PortState::Refused(says));
        }
        self.teller.say(PortState::Opened);
        let (mut contact, began, mut looks) = (Contact::new(self.pulse.bounce_ms), Instant::now(), 0u32);
        while !self.is_stopped() {
            let Ok(closed) = source.closed(line) else { return self.teller.say(PortState::Lost) };
            let at = i64::try_from(began.elapsed().as_micros()).unwrap_or(i64::MAX);
            for said in contact.look(closed, at).into_iter().flatten() {
                self.deliver(said.line(line).into_bytes());
            }
            looks = looks.wrapping_add(1);
            if looks % RETRY_LOOKS == 0 && !self.hold.is_empty() {
                self.hold.retry(&*self.out, self.clock.now());
            }
            std::thread::sleep(LOOK);
        }
    }

    /// One frame, decoded as a stored one would be.
    fn deliver(&mut self, bytes: Vec<u8>) {
        let Ok(end) = u32::try_from(bytes.len()) else { return };
        let frames = vec![Frame { end, at: self.clock.now(), what: self.profile.decode(&bytes) }];
        self.hold.deliver(Batch { instrument: self.id, bytes, frames, read_at: Some(Instant::now()) }, &*self.out);
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heard::What;
    use crate::port::{CharFrame, Flow};
    use crate::profile::ProfileText;
    use std::sync::Mutex;
    use tarecup_core::signal::Signal;
    use tarecup_core::stamp::Stamp;

    type Told = (String, What);

    #[derive(Default)]
    struct Sink(Mutex<(Vec<Told>, Vec<PortState>)>);

    impl Deliver for Sink {
        fn heard(&self, batch: Batch) -> Result<(), Batch> {
            let text = String::from_utf8(batch.bytes).expect("readable");
            self.0.lock().expect("sink").0.push((text, batch.frames[0].what.clone()));
            Ok(())
        }
        fn overrun(&self, _: InstrumentId, _: u64, _: Stamp) {}
        fn state(&self, _: InstrumentId, state: PortState, _: Stamp) {
            self.0.lock().expect("sink").1.push(state);
        }
    }

    struct Still;
    impl Clock for Still {
        fn now(&self) -> Stamp {
            Stamp::default()
        }
    }

    fn profile() -> Arc<Profile> {
        let text: ProfileText = toml::from_str(include_str!("../../../config/profiles/contact-closure.toml")).expect("a profile");
        Arc::new(Profile::compile(text).expect("a profile"))
    }

    fn watcher(path: &str, sink: &Arc<Sink>) -> (watch::Sender<bool>, Watcher) {
        let (stop, stopped) = watch::channel(false);
        let settings = PortSettings { path: path.into(), baud: 9600, frame: CharFrame::default(), flow: Flow::None };
        let pulse = PulseSettings { line: ModemLine::Cts, bounce_ms: 20 };
        let (clock, out): (Arc<dyn Clock>, Arc<dyn Deliver>) = (Arc::new(Still), sink.clone());
        let teller = Teller::new(1, path, Arc::clone(&clock), Arc::clone(&out));
        let watcher = Watcher { id: 1, settings, pulse, profile: profile(), hold: Hold::new(1), clock, out, stopped, teller };
        (stop, watcher)
    }

    /// A cam that turns four times a second and bounces, then the adapter is pulled.
    struct Cam(Instant);

    impl LineSource for Cam {
        fn closed(&mut self, line: ModemLine) -> io::Result<bool> {
            assert_eq!(line, ModemLine::Cts);
            let ms = self.0.elapsed().as_millis();
            let (turn, phase) = (ms / 250, ms % 250);
            match turn {
                // Open at first; then closed for 80 ms a turn, bouncing at its beginning.
                0 => Ok(false),
                1..=8 => Ok(phase < 80 && !(4..8).contains(&phase)),
                _ => Err(io::ErrorKind::BrokenPipe.into()),
            }
        }
    }

    #[test]
    fn turns_of_a_cam_are_drops_and_a_pulled_adapter_is_a_lost_port() {
        let sink = Arc::<Sink>::default();
        let (_stop, mut watcher) = watcher("/dev/made-up", &sink);
        let cpu = || rustix::time::clock_gettime(rustix::time::ClockId::ThreadCPUTime);
        let (began, before) = (Instant::now(), cpu());
        watcher.watch(Cam(began));
        let used = cpu() - before;
        let share = 100.0 * (used.tv_sec as f64 + used.tv_nsec as f64 / 1e9) / began.elapsed().as_secs_f64();
        println!("watching took {share:.2} % of a core");
        assert!(share < 10.0, "{share} %: it is looked at, not waited for in a loop");
        let took = sink.0.lock().expect("sink");
        let drops = took.0.iter().filter(|(_, what)| *what == What::Signal(Signal::Drop)).count();
        assert_eq!(drops, 8, "{:?}", took.0);
        assert!(took.0.iter().all(|(_, what)| !matches!(what, What::Reject(_))), "{:?}", took.0);
        assert!(took.0.iter().any(|(text, _)| text == "CTS closed\n"));
        assert_eq!(took.1, [PortState::Opened, PortState::Lost]);
    }

    #[test]
    fn a_port_without_modem_lines_is_refused_in_words() {
        let master = rustix::pty::openpt(rustix::pty::OpenptFlags::RDWR | rustix::pty::OpenptFlags::NOCTTY).expect("a pty");
        rustix::pty::grantpt(&master).expect("granted");
        rustix::pty::unlockpt(&master).expect("unlocked");
        let path = rustix::pty::ptsname(&master, Vec::new()).expect("a name").into_string().expect("a path");
        let rt = tokio::runtime::Builder::new_multi_thread().worker_threads(1).enable_all().build().expect("a runtime");
        let sink = Arc::<Sink>::default();
        let settings = PortSettings { path: path.clone(), baud: 9600, frame: CharFrame::default(), flow: Flow::None };
        let pulse = PulseSettings { line: ModemLine::Ri, bounce_ms: 20 };
        let task = spawn(rt.handle(), 1, (settings, pulse), profile(), Arc::new(Still), sink.clone());
        let began = Instant::now();
        while sink.0.lock().expect("sink").1.is_empty() && began.elapsed() < Duration::from_secs(5) {
            std::thread::sleep(Duration::from_millis(5));
        }
        rt.block_on(task.join());
        let states = &sink.0.lock().expect("sink").1;
        let [PortState::Refused(says)] = &states[..] else { panic!("{states:?}") };
        assert!(says.starts_with(&path) && says.contains("its line RI cannot be read"), "{says}");
    }

    #[test]
    fn what_the_profile_makes_of_each_line() {
        use crate::pulse::Said;
        let profile = profile();
        for (said, what) in [
            (Said::Closed, What::Signal(Signal::Drop)),
            (Said::Opened(12), What::Nothing),
            (Said::Chatters, What::Signal(Signal::NotReady)),
            (Said::Unwatched(45), What::Signal(Signal::NotReady)),
        ] {
            for (_, line) in ModemLine::WORDS {
                assert_eq!(profile.decode(said.line(line).as_bytes()), what, "{said:?}");
            }
        }
    }
}
