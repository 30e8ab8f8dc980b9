//! The thread that drives all ports, and what is opened on it.

use super::offers::{self, Adapters};
use super::{Profiles, StartError};
use crate::clock::BootClock;
use crate::desk::inbox::Inbox;
use crate::opening;
use crate::recording::{self, Kept, Recorder};
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;
use tarecup_config::station::Station;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Clock, Deliver, InstrumentId};
use tarecup_drivers::port::place::Machine;
use tarecup_drivers::port::serial::{Extras, Learned, Overhear, PortTask};
use tokio::runtime::Handle;

/// After lines came, the ports are looked at again after this time: lines of
/// many ports are then read together, which costs a fraction of the wake-ups.
/// The first line after a pause does not wait.
const PACE: Duration = Duration::from_micros(3_000);

/// The thread that drives all ports.
pub(super) struct PortsThread {
    pub(super) handle: Handle,
    stop: tokio::sync::oneshot::Sender<Vec<PortTask>>,
    pub(super) thread: std::thread::JoinHandle<()>,
}

impl PortsThread {
    /// With `paced`, lines that come fast are gathered; a virtual day is not paced.
    pub(super) fn start(inbox: &Arc<Inbox>, paced: bool) -> Result<Self, StartError> {
        let inbox = Arc::clone(inbox);
        let before_waiting = move || {
            if inbox.lines_are_in() && paced {
                std::thread::sleep(PACE);
            }
        };
        let mut builder = tokio::runtime::Builder::new_current_thread();
        let runtime =
            builder.max_blocking_threads(16).on_thread_park(before_waiting).enable_all().build().map_err(StartError::System)?;
        let handle = runtime.handle().clone();
        let (stop, stopped) = tokio::sync::oneshot::channel::<Vec<PortTask>>();
        let work = move || {
            runtime.block_on(async {
                for port in stopped.await.unwrap_or_default() {
                    port.join().await;
                }
            });
            runtime.shutdown_timeout(Duration::from_millis(500));
        };
        let thread = std::thread::Builder::new().name("ports".into()).spawn(work).map_err(StartError::System)?;
        Ok(Self { handle, stop, thread })
    }

    /// Closes all ports; what was read is delivered.
    pub(super) fn stop(self, ports: Vec<PortTask>) {
        let _ = self.stop.send(ports);
        let _ = self.thread.join();
    }
}

/// What goes on beside the ports.
#[derive(Clone, Debug, Default)]
pub struct Beside {
    /// Folder of a recording of everything.
    pub record: Option<PathBuf>,
    /// Folder of a recording of what was not understood.
    pub record_unread: Option<PathBuf>,
    /// Where ports are looked for.
    pub machine: Machine,
}

/// Recordings, offers, and what is known of adapters.
pub(super) struct Aids {
    recorders: Vec<Arc<Recorder>>,
    machine: Machine,
    adapters: Vec<Option<String>>,
    learned: Option<Learned>,
}

impl Aids {
    pub(super) fn start(
        beside: Beside,
        station: &Station,
        settings: &str,
        state_dir: &Path,
        clock: &Arc<dyn BootClock>,
        inbox: &Arc<Inbox>,
        time_passes: bool,
    ) -> Result<Self, StartError> {
        let names: Vec<String> = station.instruments.iter().map(|i| i.name.as_str().to_owned()).collect();
        let mut recorders = Vec::new();
        for (folder, kept) in [(beside.record, Kept::Everything), (beside.record_unread, Kept::Unread)] {
            let Some(folder) = folder else { continue };
            let stamps: Arc<dyn Clock> = Arc::new(Stamps(Arc::clone(clock)));
            let recorder = Recorder::start(&folder, kept, names.clone(), settings, stamps, Arc::clone(inbox));
            recorders.push(recorder.map_err(StartError::Record)?);
        }
        if let Some(recorder) = recorders.first().cloned() {
            inbox.overhear(Box::new(move |client, body| recorder.asked(client, body)));
        }
        let adapters = Adapters::load(state_dir, names.clone());
        let known = names.iter().map(|n| adapters.of(n)).collect();
        let ports = station.instruments.iter().map(|i| i.port.path.clone()).collect();
        // A virtual day has simulated instruments only.
        let learned = time_passes.then(|| offers::start(beside.machine.clone(), ports, adapters, inbox)).transpose();
        let learned = learned.map_err(StartError::System)?;
        Ok(Self { recorders, machine: beside.machine, adapters: known, learned })
    }

    fn extras(&self, id: usize) -> Extras {
        let all = self.recorders.first().cloned();
        Extras {
            overhear: all.map(|r| r as Arc<dyn Overhear>),
            machine: self.machine.clone(),
            known_by: self.adapters.get(id).cloned().flatten(),
            learned: self.learned.clone(),
            unguarded: false,
        }
    }

    fn ear(&self, inbox: &Arc<Inbox>) -> Arc<dyn Deliver> {
        let inner: Arc<dyn Deliver> = inbox.clone();
        if self.recorders.is_empty() {
            return inner;
        }
        Arc::new(recording::Beside { inner, recorders: self.recorders.clone() })
    }

    /// Ends the recordings; what was heard is written.
    pub(super) fn stop(self) {
        self.recorders.iter().for_each(|r| r.stop());
    }
}

/// The ports, for a person's word that an instrument is the one meant.
#[derive(Clone, Default)]
pub(super) struct Doors(Arc<Mutex<BTreeMap<InstrumentId, Confirm>>>);

type Confirm = Box<dyn Fn() + Send + Sync>;

impl Doors {
    pub(super) fn confirm(&self, ids: &[InstrumentId]) {
        if !ids.is_empty() {
            let doors = self.0.lock().unwrap_or_else(PoisonError::into_inner);
            ids.iter().filter_map(|id| doors.get(id)).for_each(|confirm| confirm());
        }
    }
    fn add(&self, id: InstrumentId, confirm: Confirm) {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).insert(id, confirm);
    }
}

pub(super) fn open_ports(
    station: &Station,
    profiles: &Profiles,
    runtime: &Handle,
    clock: &Arc<dyn BootClock>,
    inbox: &Arc<Inbox>,
    aids: &Aids,
    doors: &Doors,
) -> Vec<PortTask> {
    let clock: Arc<dyn Clock> = Arc::new(Stamps(Arc::clone(clock)));
    let out = aids.ear(inbox);
    let mut ports = Vec::new();
    for (id, instrument) in station.instruments.iter().enumerate() {
        if let Some(profile) = profiles.get(instrument.profile.as_str()) {
            let (clock, out, extras) = (Arc::clone(&clock), Arc::clone(&out), aids.extras(id));
            let port = opening::open(runtime, id as InstrumentId, instrument, profile, clock, out, extras);
            doors.add(id as InstrumentId, Box::new(port.confirmer()));
            ports.push(port);
        }
    }
    ports
}

pub(super) struct Stamps(Arc<dyn BootClock>);

impl Clock for Stamps {
    fn now(&self) -> Stamp {
        self.0.now()
    }
}
