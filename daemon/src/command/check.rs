//! `tarecup check`: is the config file right?

use super::{WRONG_INPUT, files};
use std::path::PathBuf;

/// Arguments of `check`.
#[derive(clap::Args)]
pub struct CheckArgs {
    /// Config file. Default: the first of the usual places that exists.
    #[arg(long, value_name = "FILE")]
    config: Option<PathBuf>,
    /// Print the JSON schema of the config file for editors, and do nothing else.
    #[arg(long)]
    schema: bool,
}

/// Runs `check`.
pub fn run(args: &CheckArgs) -> u8 {
    if args.schema {
        say!("{:#}", tarecup_config::schema::config_schema());
        return 0;
    }
    let path = files::config_path(args.config.as_deref());
    let station = match files::station(args.config.as_deref()) {
        Ok(station) => station,
        Err(faults) => {
            eprintln!("{faults}");
            return WRONG_INPUT;
        }
    };
    if let (true, Err(e)) = (station.screen.enabled, crate::screen::check(&station.screen)) {
        eprintln!("{e}");
        return WRONG_INPUT;
    }
    match path {
        Some(path) => say!("{} is right.", path.display()),
        None => say!("There is no config file; the defaults are in force. Name one with --config FILE."),
    }
    say!(
        "station {} of {}: {} bench(es), {} instrument(s)",
        station.lab.station,
        station.lab.name,
        station.benches.len(),
        station.instruments.len()
    );
    for i in &station.instruments {
        let benches: Vec<&str> = i.benches.iter().map(|b| b.as_str()).collect();
        say!(
            "  {:<12} {:<8} {:<18} {} at {}",
            i.name.as_str(),
            i.kind.word(),
            i.profile.as_str(),
            i.port.path,
            benches.join(", ")
        );
    }
    0
}
