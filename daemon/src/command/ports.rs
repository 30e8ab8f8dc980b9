//! `tarecup ports`: which serial ports are there?

/// Arguments of `ports`.
#[derive(clap::Args)]
pub struct PortsArgs {
    /// One JSON object a line.
    #[arg(long)]
    json: bool,
}

/// Runs `ports`.
pub fn run(args: &PortsArgs) -> u8 {
    let ports = tarecup_drivers::port::list::list();
    if args.json {
        for port in &ports {
            say!("{}", serde_json::json!({"stable": port.stable, "device": port.device, "about": port.about}));
        }
        return 0;
    }
    if ports.is_empty() {
        say!("No serial port was found. Is the adapter plugged in, and may this user see it (group dialout)?");
    }
    for port in &ports {
        say!("{}\n    {} {}", port.stable, port.device, port.about);
    }
    0
}
