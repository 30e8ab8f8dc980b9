//! `tarecup operator`: who may correct and review on the screen.

use super::{FAILED, WRONG_INPUT, files};
use crate::screen::operators;
use std::io::{BufRead, IsTerminal, Write};
use std::path::{Path, PathBuf};
use tarecup_core::names::Operator;

/// Arguments of `operator`.
#[derive(clap::Args)]
pub struct OperatorArgs {
    #[command(subcommand)]
    verb: Verb,
    /// State directory of the service. Default: the service manager's, else the user's data folder.
    #[arg(long, value_name = "DIR", global = true)]
    state: Option<PathBuf>,
}

#[derive(clap::Subcommand)]
enum Verb {
    /// Give an operator a PIN, or another one. It is read from the terminal, or from standard input.
    Add {
        /// Initials.
        initials: Operator,
    },
    /// Who has a PIN, and who is locked.
    List,
    /// Take an operator's PIN away. What they recorded stays.
    Remove {
        /// Initials.
        initials: Operator,
    },
    /// Take tries again after too many wrong ones.
    Unlock {
        /// Initials.
        initials: Operator,
    },
}

/// Runs `operator`.
pub fn run(args: &OperatorArgs) -> u8 {
    let dir = match files::state_dir(args.state.as_deref(), None) {
        Ok(dir) if dir.is_dir() => dir,
        Ok(dir) => {
            eprintln!("{} is not there; start the service once, or name its state directory with --state DIR", dir.display());
            return WRONG_INPUT;
        }
        Err(says) => {
            eprintln!("{says}");
            return WRONG_INPUT;
        }
    };
    match done(&args.verb, &dir) {
        Ok(()) => 0,
        Err(says) => {
            eprintln!("{says}");
            FAILED
        }
    }
}

fn done(verb: &Verb, dir: &Path) -> Result<(), String> {
    match verb {
        Verb::Add { initials } => {
            operators::add(dir, initials, &pin(initials)?)?;
            say!("{initials} has a PIN");
        }
        Verb::Remove { initials } => {
            operators::remove(dir, initials)?;
            say!("{initials} has no PIN any more");
        }
        Verb::Unlock { initials } => {
            operators::unlock(dir, initials)?;
            say!("PINs of {initials} are taken again");
        }
        Verb::List => {
            for entry in operators::load(dir)?.operators {
                match entry.locked(crate::screen::app::utc_us()) {
                    Some(until) => say!("{:<8} locked until {until}", entry.initials.as_str()),
                    None => say!("{}", entry.initials),
                }
            }
        }
    }
    Ok(())
}

/// A PIN is never an argument: those can be read by everybody on the machine.
fn pin(initials: &Operator) -> Result<String, String> {
    let terminal = std::io::stdin().is_terminal();
    let first = line(terminal.then(|| format!("PIN of {initials}: ")))?;
    if terminal && line(Some(String::from("once more: ")))? != first {
        return Err(String::from("these were two different PINs; nothing was changed"));
    }
    Ok(first)
}

fn line(prompt: Option<String>) -> Result<String, String> {
    let silent = prompt.as_ref().map(|prompt| {
        eprint!("{prompt}");
        let _ = std::io::stderr().flush();
        Silent::new()
    });
    let mut text = String::new();
    let read = std::io::stdin().lock().read_line(&mut text);
    if silent.is_some() {
        eprintln!();
    }
    drop(silent);
    read.map_err(|e| format!("no PIN could be read: {e}"))?;
    Ok(text.trim_end_matches(['\n', '\r']).to_string())
}

/// A terminal that does not show what is typed, until this is dropped.
struct Silent(Option<rustix::termios::Termios>);

impl Silent {
    fn new() -> Self {
        use rustix::termios::{LocalModes, OptionalActions, tcgetattr, tcsetattr};
        let stdin = std::io::stdin();
        let Ok(before) = tcgetattr(&stdin) else { return Self(None) };
        let mut quiet = before.clone();
        quiet.local_modes -= LocalModes::ECHO;
        Self(tcsetattr(&stdin, OptionalActions::Now, &quiet).is_ok().then_some(before))
    }
}

impl Drop for Silent {
    fn drop(&mut self) {
        if let Some(before) = &self.0 {
            let _ = rustix::termios::tcsetattr(std::io::stdin(), rustix::termios::OptionalActions::Now, before);
        }
    }
}
