//! The thread that drives all ports, and what is opened on it.

use super::{Profiles, StartError};
use crate::clock::BootClock;
use crate::desk::inbox::Inbox;
use crate::opening;
use std::sync::Arc;
use std::time::Duration;
use tarecup_config::station::Station;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Clock, Deliver};
use tarecup_drivers::port::serial::PortTask;
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

pub(super) fn open_ports(
    station: &Station,
    profiles: &Profiles,
    runtime: &Handle,
    clock: &Arc<dyn BootClock>,
    inbox: &Arc<Inbox>,
) -> Vec<PortTask> {
    let clock: Arc<dyn Clock> = Arc::new(Stamps(Arc::clone(clock)));
    let mut ports = Vec::new();
    for (id, instrument) in station.instruments.iter().enumerate() {
        if let Some(profile) = profiles.get(instrument.profile.as_str()) {
            let out: Arc<dyn Deliver> = inbox.clone();
            ports.push(opening::open(runtime, id as u16, instrument, profile, Arc::clone(&clock), out));
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
