//! `tarecup run`: the service.

use super::{FAILED, LogForm, StateArg, WRONG_INPUT, files, start_log};
use crate::clock::MachineClock;
use crate::screen::ScreenFault;
use crate::service::{Plan, Service, StartError};
use crate::signals;
use std::path::PathBuf;
use std::sync::Arc;
use std::time::Duration;
use tarecup_config::station::LogFormat;

/// How often the parts of the service are looked after.
const LOOK_AFTER: Duration = Duration::from_secs(2);

/// Arguments of `run`.
#[derive(clap::Args)]
pub struct RunArgs {
    /// Config file. Default: the first of the usual places that exists; else defaults.
    #[arg(long, value_name = "FILE")]
    config: Option<PathBuf>,
    #[command(flatten)]
    state: StateArg,
}

/// Runs `run`.
pub fn run(args: RunArgs, log: Option<LogForm>) -> u8 {
    let station = match files::station(args.config.as_deref()) {
        Ok(station) => station,
        Err(faults) => {
            eprintln!("{faults}");
            return WRONG_INPUT;
        }
    };
    let form = log.or((station.log.format == LogFormat::Json).then_some(LogForm::Json));
    start_log(form, station.log.level.word());
    let state_dir = match files::state_dir(args.state.state.as_deref(), station.state_dir.as_deref()) {
        Ok(dir) => dir,
        Err(says) => {
            eprintln!("{says}");
            return WRONG_INPUT;
        }
    };
    let signals = signals::listen();
    let plan = Plan {
        station,
        state_dir,
        clock: Arc::new(MachineClock::new()),
        time_passes: true,
        any_broker_port: false,
        any_screen_port: false,
        hand: None,
        tap: None,
        told: None,
    };
    let service = match Service::start(plan) {
        Ok(service) => service,
        Err(e) => {
            eprintln!("{e}");
            return if matches!(e, StartError::Profile { .. } | StartError::Mqtt(_) | StartError::Screen(ScreenFault::Settings(_)))
            {
                WRONG_INPUT
            } else {
                FAILED
            };
        }
    };
    tracing::info!(state = %service.state_dir().display(), broker = %service.broker_name(), screen = service.screen_url().unwrap_or("none"), "recording");
    let Ok((_, stop)) = signals else {
        eprintln!("the system gives no signals; stopping");
        return FAILED;
    };
    loop {
        match stop.recv_timeout(LOOK_AFTER) {
            Ok(()) => break,
            Err(_) if service.part_ended() => {
                tracing::error!("a part of the service has ended by itself; leaving so that the service manager starts it again");
                service.stop();
                return FAILED;
            }
            Err(std::sync::mpsc::RecvTimeoutError::Timeout) => (),
            Err(std::sync::mpsc::RecvTimeoutError::Disconnected) => break,
        }
    }
    tracing::info!("stopping in order");
    if service.stop() { 0 } else { FAILED }
}
