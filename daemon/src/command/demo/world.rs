//! The program as the simulated operator meets it.

use crate::clock::VirtualClock;
use crate::service::Service;
use crate::signals::StopFlag;
use std::collections::BTreeMap;
use std::sync::Arc;
use std::time::{Duration, Instant};
use tarecup_simulators::day::Day;
use tarecup_simulators::operator::{StepInfo, World};

/// A line that is not heard within this time never will be.
const PATIENCE: Duration = Duration::from_secs(20);

/// The running service, in virtual time.
pub struct DemoWorld<'a> {
    service: &'a Service,
    ids: BTreeMap<String, (u16, u64)>,
    clock: Arc<VirtualClock>,
    stop: StopFlag,
}

impl<'a> DemoWorld<'a> {
    /// Instruments are numbered in the order of the config that [`super::day::config`] writes.
    pub fn new(service: &'a Service, day: &Day, clock: Arc<VirtualClock>, stop: StopFlag) -> Self {
        // A code is whole at its CR; the LF behind it stays with the next frame.
        let names = day.benches.iter().flat_map(|b| [(&b.balance.name, 0), (&b.cup.name, 0), (&b.scanner, 1)]);
        let ids = names.zip(0u16..).map(|((name, trailing), id)| (name.clone(), (id, trailing))).collect();
        Self { service, ids, clock, stop }
    }
}

/// Waits until every port is open and has been quiet long enough for its first line to count as whole.
pub fn wait_for_ports(service: &Service, ports: usize) -> Result<(), String> {
    let until = Instant::now() + PATIENCE;
    while service.ports_open() < ports {
        if Instant::now() > until {
            return Err(String::from("the simulated ports were not opened; look at the log (TARECUP_LOG=debug)"));
        }
        std::thread::sleep(Duration::from_millis(5));
    }
    std::thread::sleep(tarecup_drivers::port::serial::QUIET + Duration::from_millis(20));
    Ok(())
}

impl World for DemoWorld<'_> {
    fn set_time(&mut self, utc_us: i64) {
        self.clock.set(utc_us);
        let (tx, rx) = std::sync::mpsc::channel();
        self.service.inbox().tick(Box::new(move |_| {
            let _ = tx.send(());
        }));
        let _ = rx.recv_timeout(PATIENCE);
    }

    fn heard(&mut self, instrument: &str, bytes: u64) -> Result<(), String> {
        let (id, trailing) = self.ids.get(instrument).ok_or_else(|| format!("there is no instrument {instrument}"))?;
        let bytes = bytes.saturating_sub(*trailing);
        let until = Instant::now() + PATIENCE;
        while Instant::now() < until {
            if self.stop.asked() {
                return Err(String::from("the demo was stopped"));
            }
            if self.service.heard().wait(*id, bytes, Duration::from_millis(500)) {
                return Ok(());
            }
        }
        Err(format!("{bytes} bytes were written to {instrument}, but not all of them were heard"))
    }

    fn ask(&mut self, json: &str) -> String {
        self.service.ask(json)
    }

    fn progress(&mut self, _step: &StepInfo) {}
}
