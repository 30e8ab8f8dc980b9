//! What tests of ports share: a receiver that keeps everything, a clock, a runtime.

// Each test program uses a part of this.
#![allow(dead_code)]

use std::sync::{Arc, Mutex, MutexGuard};
use std::time::{Duration, Instant};
use tarecup_core::signal::Signal;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, Clock, Deliver, InstrumentId, PortState, Reject, What};
use tarecup_drivers::port::serial::{Extras, PortTask, spawn_with};
use tarecup_drivers::port::{CharFrame, Flow, PortSettings};
use tarecup_drivers::profile::{Profile, ProfileText};
use tokio::runtime::{Builder, Runtime};

/// Generous: the machine may be busy.
pub const LONG: Duration = Duration::from_secs(20);
pub const LINE: &[u8] = b"+   23.4571 g  S\r\n";

/// Takes what ports deliver.
#[derive(Default)]
pub struct Sink(Mutex<Took>);

#[derive(Clone, Default)]
pub struct Took {
    pub lines: Vec<(InstrumentId, Vec<u8>, What)>,
    /// Lines of floods are counted only.
    pub counted: u64,
    pub states: Vec<(InstrumentId, PortState, Instant)>,
}

impl Sink {
    pub fn took(&self) -> MutexGuard<'_, Took> {
        self.0.lock().expect("sink")
    }

    /// Waits until what was taken is as wanted; how long that took.
    pub fn until(&self, what: &str, wanted: impl Fn(&Took) -> bool) -> Duration {
        let began = Instant::now();
        while !wanted(&self.took()) {
            assert!(began.elapsed() < LONG, "never came: {what}; states {:?}", self.took().states);
            std::thread::sleep(Duration::from_millis(2));
        }
        began.elapsed()
    }

    pub fn until_state(&self, id: InstrumentId, state: &PortState) -> Duration {
        self.until(&format!("{state:?}"), |t| t.states.iter().rfind(|s| s.0 == id).is_some_and(|s| s.1 == *state))
    }

    pub fn last_state(&self, id: InstrumentId) -> Option<PortState> {
        self.took().states.iter().rfind(|s| s.0 == id).map(|s| s.1.clone())
    }

    pub fn masses(&self, id: InstrumentId) -> usize {
        self.took().masses(id)
    }
}

impl Took {
    pub fn masses(&self, id: InstrumentId) -> usize {
        let mass = |l: &&(InstrumentId, Vec<u8>, What)| l.0 == id && matches!(l.2, What::Signal(Signal::Mass(_)));
        self.lines.iter().filter(mass).count()
    }

    pub fn rejects(&self, id: InstrumentId, reason: Reject) -> usize {
        self.lines.iter().filter(|l| l.0 == id && l.2 == What::Reject(reason)).count()
    }
}

impl Deliver for Sink {
    fn heard(&self, batch: Batch) -> Result<(), Batch> {
        let mut took = self.took();
        let mut from = 0;
        for frame in &batch.frames {
            let end = frame.end as usize;
            // A flood would fill the test's memory.
            if took.lines.len() < 20_000 || !matches!(frame.what, What::Reject(_)) {
                took.lines.push((batch.instrument, batch.bytes[from..end].to_vec(), frame.what.clone()));
            }
            took.counted += 1;
            from = end;
        }
        Ok(())
    }
    fn overrun(&self, _: InstrumentId, lines: u64, _: Stamp) {
        self.took().counted += lines;
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

pub fn profile(toml: &str) -> Arc<Profile> {
    let text: ProfileText = toml::from_str(toml).expect("a profile");
    Arc::new(Profile::compile(text).expect("a profile"))
}

pub fn signed_steady() -> Arc<Profile> {
    profile(include_str!("../config/profiles/signed-steady.toml"))
}

pub fn print_line() -> Arc<Profile> {
    profile(include_str!("../config/profiles/print-line.toml"))
}

/// A service with one thread, so that whatever blocks it blocks every port.
pub struct Service {
    rt: Runtime,
    pub sink: Arc<Sink>,
    clock: Arc<Machine>,
}

impl Service {
    pub fn new() -> Self {
        let rt = Builder::new_multi_thread().worker_threads(1).enable_all().build().expect("a runtime");
        Self { rt, sink: Arc::default(), clock: Arc::new(Machine(Instant::now())) }
    }

    pub fn port(&self, id: InstrumentId, path: &str, profile: &Arc<Profile>) -> PortTask {
        self.port_with(id, path, profile, Extras::default())
    }

    pub fn port_with(&self, id: InstrumentId, path: &str, profile: &Arc<Profile>, extras: Extras) -> PortTask {
        let settings = PortSettings { path: path.into(), baud: 9600, frame: CharFrame::default(), flow: Flow::None };
        spawn_with(self.rt.handle(), id, settings, Arc::clone(profile), self.clock.clone(), self.sink.clone(), extras)
    }

    pub fn stop(self, ports: Vec<PortTask>) {
        for port in ports {
            self.rt.block_on(port.join());
        }
    }
}
