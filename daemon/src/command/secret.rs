//! `tarecup secret`: secrets that programs present, each in a file of its own.

use super::{FAILED, WRONG_INPUT};
use std::io::Write;
use std::os::unix::fs::OpenOptionsExt;
use std::path::{Path, PathBuf};

/// Letters and digits that are not mistaken for each other when a person types them.
const LETTERS: &[u8; 32] = b"ABCDEFGHJKLMNPQRSTUVWXYZ23456789";
/// Letters of a secret: five bits each.
const LENGTH: usize = 30;

/// Arguments of `secret`.
#[derive(clap::Args)]
pub struct SecretArgs {
    #[command(subcommand)]
    verb: Verb,
}

#[derive(clap::Subcommand)]
enum Verb {
    /// Make a secret for a bench screen that other machines can reach.
    New {
        /// Where to write it; nothing must be there yet.
        #[arg(value_name = "FILE")]
        file: PathBuf,
    },
}

/// Runs `secret`.
pub fn run(args: &SecretArgs) -> u8 {
    let Verb::New { file } = &args.verb;
    let secret = match drawn() {
        Ok(secret) => secret,
        Err(says) => {
            eprintln!("{says}");
            return FAILED;
        }
    };
    match write(file, &secret) {
        Ok(()) => {
            let path = std::path::absolute(file).unwrap_or_else(|_| file.clone());
            say!("{} holds a new secret, and only its owner may read it.", file.display());
            say!("Put into the configuration:\n\n[screen]\nsecret_file = {:?}\n", path.display().to_string());
            say!("Each browser is asked for it once.");
            0
        }
        Err(e) if e.kind() == std::io::ErrorKind::AlreadyExists => {
            eprintln!(
                "{} is there already; name another file, or take it away to end every admission given by it",
                file.display()
            );
            WRONG_INPUT
        }
        Err(e) => {
            eprintln!("{}: {e}; name a file in a folder that you may write to", file.display());
            FAILED
        }
    }
}

fn drawn() -> Result<String, String> {
    let mut random = [0u8; LENGTH];
    getrandom::fill(&mut random).map_err(|e| format!("the system gives no random numbers: {e}"))?;
    let letter = |(i, b): (usize, &u8)| {
        let gap = if i > 0 && i % 5 == 0 { "-" } else { "" };
        format!("{gap}{}", char::from(LETTERS[usize::from(*b) % LETTERS.len()]))
    };
    Ok(random.iter().enumerate().map(letter).collect())
}

fn write(path: &Path, secret: &str) -> std::io::Result<()> {
    let mut file = std::fs::OpenOptions::new().create_new(true).write(true).mode(0o600).open(path)?;
    writeln!(file, "{secret}")?;
    file.sync_all()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn each_secret_is_new_and_long() {
        let (a, b) = (drawn().expect("a secret"), drawn().expect("a secret"));
        assert!(a != b && a.len() == LENGTH + LENGTH / 5 - 1, "{a}");
    }
}
