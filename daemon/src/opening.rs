//! Opens an instrument's port in the way its profile asks for.

use std::sync::Arc;
use tarecup_config::station::Instrument;
use tarecup_drivers::heard::{Clock, Deliver, InstrumentId};
use tarecup_drivers::port::serial::{self, Extras, PortTask};
use tarecup_drivers::port::{modbus, pulse};
use tarecup_drivers::profile::Profile;
use tokio::runtime::Handle;

/// Starts the port: a switch is watched, registers are polled, lines are listened to.
pub fn open(
    runtime: &Handle,
    id: InstrumentId,
    instrument: &Instrument,
    profile: &Arc<Profile>,
    clock: Arc<dyn Clock>,
    out: Arc<dyn Deliver>,
    extras: Extras,
) -> PortTask {
    let (settings, profile) = (instrument.port.clone(), Arc::clone(profile));
    match (instrument.pulse, profile.modbus()) {
        (Some(line), _) => pulse::spawn(runtime, id, (settings, line), profile, clock, out),
        (None, Some(_)) => modbus::spawn(runtime, id, settings, profile, clock, out),
        (None, None) => serial::spawn_with(runtime, id, settings, profile, clock, out, extras),
    }
}
