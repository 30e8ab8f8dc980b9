//! `tarecup backup` and `tarecup restore`.

use super::{FAILED, StateArg, WRONG_INPUT, files};
use crate::clock::MachineClock;
use crate::ledger::{self, Progress};
use std::io::{IsTerminal, Write};
use std::path::PathBuf;
use tarecup_drivers::heard::Clock;

/// Arguments of `backup`.
#[derive(clap::Args)]
pub struct BackupArgs {
    /// Folder for the backup, best on another disk.
    folder: PathBuf,
    #[command(flatten)]
    state: StateArg,
    /// Keep this many backups of this ledger in the folder and take away older ones.
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u32).range(1..))]
    keep: Option<u32>,
}

/// Arguments of `restore`.
#[derive(clap::Args)]
pub struct RestoreArgs {
    /// The backup: a file that `backup` made.
    backup: PathBuf,
    #[command(flatten)]
    state: StateArg,
}

/// Runs `backup`. The service may be running.
pub fn backup(args: &BackupArgs) -> u8 {
    let state_dir = match files::state_dir(args.state.state.as_deref(), None) {
        Ok(dir) => dir,
        Err(says) => return wrong(&says),
    };
    let now = MachineClock::new().now().utc_us;
    let made = crate::backup::make(&state_dir, &args.folder, args.keep, now, &mut show);
    done_showing();
    match made {
        Ok(proven) => {
            say!("{} is a proven copy up to fact {} ({})", proven.path.display(), proven.seq, proven.hash);
            0
        }
        Err(e) => {
            eprintln!("no backup was made: {e}");
            FAILED
        }
    }
}

/// Runs `restore`. The service must not be running.
pub fn restore(args: &RestoreArgs) -> u8 {
    let state_dir = match files::state_dir(args.state.state.as_deref(), None) {
        Ok(dir) => dir,
        Err(says) => return wrong(&says),
    };
    let now = MachineClock::new().now().utc_us;
    let restored = ledger::restore(&args.backup, &state_dir, now, &mut show);
    done_showing();
    match restored {
        Ok(done) => {
            say!("restored up to fact {}; from now on epoch {}", done.seq, done.epoch);
            if let Some(before) = done.before {
                say!(
                    "what was there before lies at {}: its facts after {} are in it and nowhere else",
                    before.display(),
                    done.seq
                );
            }
            0
        }
        Err(e) => {
            eprintln!("nothing was restored: {e}");
            FAILED
        }
    }
}

fn wrong(says: &str) -> u8 {
    eprintln!("{says}");
    WRONG_INPUT
}

fn show(p: Progress) {
    if std::io::stderr().is_terminal() {
        let _ = write!(
            std::io::stderr(),
            "\r\x1b[Kproving: fact {} of {}, input {} of {}",
            p.facts,
            p.of_facts,
            p.inputs,
            p.of_inputs
        );
    }
}

fn done_showing() {
    if std::io::stderr().is_terminal() {
        let _ = write!(std::io::stderr(), "\r\x1b[K");
    }
}
