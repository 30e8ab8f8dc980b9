//! `tarecup drill`: what does this set-up catch?

use super::{FAILED, WRONG_INPUT};
use std::io::{IsTerminal, Write};

/// Arguments of `drill`.
#[derive(clap::Args)]
pub struct DrillArgs {
    /// The same seed drills the same mistakes.
    #[arg(long, value_name = "S", default_value_t = 1)]
    seed: u64,
    /// How many clean specimens, and how many with one mistake each.
    #[arg(long, value_name = "N", default_value_t = 1_000)]
    specimens: u64,
    /// Print one JSON object.
    #[arg(long)]
    json: bool,
}

/// Runs `drill`.
pub fn run(args: &DrillArgs) -> u8 {
    if !(1..=1_000_000).contains(&args.specimens) {
        eprintln!("--specimens: a number from 1 to 1 000 000 is expected, such as 1000");
        return WRONG_INPUT;
    }
    let shows = std::io::stderr().is_terminal();
    let progress = &mut |done: u64, of: u64| {
        if shows && done.is_multiple_of(20) {
            let _ = write!(std::io::stderr(), "\r\x1b[K{done} of {of} sessions");
        }
    };
    let tally = crate::drill::drill(args.seed, args.specimens, progress);
    if shows {
        let _ = write!(std::io::stderr(), "\r\x1b[K");
    }
    match tally {
        Ok(tally) => {
            if args.json {
                say!("{}", tally.json());
            } else {
                say!("{}", tally.table().trim_end());
            }
            0
        }
        Err(e) => {
            eprintln!("the drill stopped: {e}");
            FAILED
        }
    }
}
