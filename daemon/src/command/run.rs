//! `tarecup run`: the service.

use super::{FAILED, LogForm, StateArg, WRONG_INPUT, files, start_log};
use crate::clock::MachineClock;
use crate::keys::{self, Key};
use crate::screen::ScreenFault;
use crate::service::{Beside, Plan, Service, StartError};
use crate::{signals, watch};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::Duration;
use tarecup_config::station::LogFormat;
use tarecup_drivers::port::place::Machine;

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
    /// Record what ports say and what is asked, to play it again with `tarecup replay`. A new folder; at most 1 GB.
    #[arg(long, value_name = "DIR")]
    record: Option<PathBuf>,
    /// Record what was not understood, as material for a profile. A new folder; at most 16 MB.
    #[arg(long, value_name = "DIR")]
    record_unread: Option<PathBuf>,
    /// Look for ports below this folder in place of the root: for tests.
    #[arg(long, value_name = "DIR", hide = true)]
    machine: Option<PathBuf>,
}

/// The key that heads are signed with; made at the first start.
fn signing_key(named: Option<&Path>) -> Result<Key, String> {
    let place = named.map(Path::to_path_buf).or_else(keys::usual_place);
    let place = place.ok_or("there is no place for the signing key: name a file with signing_key_file in [record]")?;
    let new = !place.exists();
    let key = Key::load_or_make(&place)?;
    let fingerprint = key.public().fingerprint();
    if new {
        tracing::warn!(file = %place.display(), %fingerprint, "made a key that heads are signed with: write its fingerprint down where this machine cannot change it");
    } else {
        tracing::info!(%fingerprint, "heads are signed");
    }
    Ok(key)
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
    let key = match signing_key(station.signing_key_file.as_deref()) {
        Ok(key) => key,
        Err(says) => {
            eprintln!("{says}");
            return FAILED;
        }
    };
    let plan = Plan {
        station,
        state_dir,
        clock: Arc::new(MachineClock::new()),
        time_passes: true,
        any_broker_port: false,
        key: Some(key),
        any_screen_port: false,
        hand: None,
        tap: None,
        told: None,
        beside: Beside {
            record: args.record,
            record_unread: args.record_unread,
            machine: args.machine.map(|root| Machine::below(&root)).unwrap_or_default(),
        },
    };
    let service = match Service::start(plan) {
        Ok(service) => service,
        Err(e) => {
            eprintln!("{e}");
            let wrong_settings = matches!(
                e,
                StartError::Profile { .. }
                    | StartError::Mqtt(_)
                    | StartError::Record(_)
                    | StartError::Screen(ScreenFault::Settings(_))
            );
            return if wrong_settings { WRONG_INPUT } else { FAILED };
        }
    };
    tracing::info!(state = %service.state_dir().display(), broker = %service.broker_name(), screen = service.screen_url().unwrap_or("none"), "recording");
    watch::ready();
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
            Err(std::sync::mpsc::RecvTimeoutError::Timeout) => watch::look_after(service.inbox()),
            Err(std::sync::mpsc::RecvTimeoutError::Disconnected) => break,
        }
    }
    tracing::info!("stopping in order");
    watch::stopping();
    if service.stop() { 0 } else { FAILED }
}
