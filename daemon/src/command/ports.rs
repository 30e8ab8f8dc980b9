//! `tarecup ports`: which serial ports are there, and who uses them?

use crate::service::told_of;
use std::path::PathBuf;
use tarecup_drivers::port::list::{Found, list_on};
use tarecup_drivers::port::place::Machine;

/// Arguments of `ports`.
#[derive(clap::Args)]
pub struct PortsArgs {
    /// One JSON object a line.
    #[arg(long)]
    json: bool,
    /// Look for ports below this folder in place of the root: for tests.
    #[arg(long, value_name = "DIR", hide = true)]
    machine: Option<PathBuf>,
}

/// Runs `ports`. No port is opened.
pub fn run(args: &PortsArgs) -> u8 {
    let ports = list_on(&args.machine.as_deref().map(Machine::below).unwrap_or_default());
    if args.json {
        for port in &ports {
            let mut told = told_of(port);
            // The name this member had first.
            told["stable"] = port.stable.as_str().into();
            say!("{told}");
        }
        return 0;
    }
    if ports.is_empty() {
        say!("No serial port was found. Is the adapter plugged in, and may this user see it (group dialout)?");
    }
    ports.iter().for_each(tell);
    0
}

fn tell(port: &Found) {
    say!("{}\n    {} {}", port.stable, port.device, port.about);
    if port.twin {
        let at = port.socket.as_deref().unwrap_or("unknown");
        say!("    without a serial number of its own: known by its socket ({at}); leave it in there");
    }
    if let Some(holder) = port.holder() {
        say!("    in use by {holder}");
    }
}
