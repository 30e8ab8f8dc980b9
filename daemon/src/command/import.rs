//! `tarecup import`: a register of containers or the day's specimens from a table with commas.

use super::{FAILED, NOBODY, StateArg, WRONG_INPUT, files};
use crate::import::{self, Fault, Kind, Preview};
use crate::socket::{self, ClientError};
use serde_json::{Value, json};
use std::io::Read;
use std::path::{Path, PathBuf};
use std::time::Duration;
use tarecup_core::names::Operator;

/// Lines that the service looks at in one ask.
const AT_ONCE: usize = 100;

/// Arguments of `import`.
#[derive(clap::Args)]
#[command(
    after_help = "The first line names the columns, parted by commas, with decimal points:\n  container,tare_g,lid_g\n  specimen,method,edition,description,preparation,passing_75um_percent,clay_percent,wanted\nOnly the first column is needed. A file is taken whole or not at all; empty masses from a file are marked as typed for ever."
)]
pub struct ImportArgs {
    #[command(flatten)]
    state: StateArg,
    /// The file.
    #[arg(value_name = "FILE")]
    file: PathBuf,
    /// What it holds.
    #[arg(long, value_enum)]
    kind: KindArg,
    /// Ask the running service for all of it; else it is only looked at.
    #[arg(long, requires = "who")]
    take: bool,
    /// Who takes it.
    #[arg(long, value_name = "INITIALS")]
    who: Option<String>,
}

#[derive(Clone, Copy, clap::ValueEnum)]
enum KindArg {
    /// A register of containers.
    Containers,
    /// Specimens to be opened.
    Specimens,
}

/// Runs `import`.
pub fn run(args: &ImportArgs) -> u8 {
    let kind = match args.kind {
        KindArg::Containers => Kind::Containers,
        KindArg::Specimens => Kind::Specimens,
    };
    let bytes = match read(&args.file) {
        Ok(bytes) => bytes,
        Err(says) => {
            eprintln!("{}: {says}", args.file.display());
            return WRONG_INPUT;
        }
    };
    let preview = import::preview_bytes(&bytes, Some(kind));
    if !preview.fine() {
        tell_faults(&args.file, &preview.faults, preview.more_faults);
        return WRONG_INPUT;
    }
    say!("{}: {} {} to be taken", args.file.display(), preview.items.len(), kind.word());
    match (args.take, args.who.as_deref().map(Operator::new)) {
        (false, _) | (true, None) => {
            say!("Nothing was taken. Add --take --who INITIALS to ask the running service for it.");
            0
        }
        (true, Some(Err(e))) => {
            eprintln!("--who: {e}");
            WRONG_INPUT
        }
        (true, Some(Ok(who))) => take(args, &preview, &who),
    }
}

/// At most so much that a file that is too large is seen to be.
fn read(path: &Path) -> Result<Vec<u8>, String> {
    let file = std::fs::File::open(path).map_err(|e| format!("cannot be read: {e}"))?;
    let mut bytes = Vec::new();
    let most = import::LARGEST as u64 + 4;
    file.take(most).read_to_end(&mut bytes).map_err(|e| format!("cannot be read: {e}"))?;
    Ok(bytes)
}

fn tell_faults(file: &Path, faults: &[Fault], more: usize) {
    for fault in faults {
        let column = fault.column.as_ref().map_or(String::new(), |c| format!(", {c}"));
        eprintln!("{}:{}{column}: {}", file.display(), fault.line, fault.says);
    }
    if more > 0 {
        eprintln!("and {more} more");
    }
    eprintln!("Nothing was taken.");
}

fn take(args: &ImportArgs, preview: &Preview, who: &Operator) -> u8 {
    let dir = match files::state_dir(args.state.state.as_deref(), None) {
        Ok(dir) => dir,
        Err(says) => {
            eprintln!("{says}");
            return WRONG_INPUT;
        }
    };
    let asks = preview.asks(who);
    match refused(&dir, preview, &asks) {
        Ok(faults) if faults.is_empty() => (),
        Ok(faults) => {
            tell_faults(&args.file, &faults, 0);
            return WRONG_INPUT;
        }
        Err(e) => return went_wrong(&e, "Nothing was taken."),
    }
    let (mut taken, mut before) = (0, 0);
    for (ask, item) in asks.iter().zip(&preview.items) {
        match ask_of(&dir, ask) {
            Ok(answer) if answer["ok"] == json!(true) => {
                taken += 1;
                before += usize::from(answer["facts"].as_array().is_some_and(Vec::is_empty));
            }
            Ok(answer) => {
                let says = answer["error"]["says"].as_str().unwrap_or("refused");
                eprintln!("{}:{}: {says}", args.file.display(), item.line);
                eprintln!(
                    "It was changed from elsewhere meanwhile: the {taken} lines before are taken, this one and those after are not."
                );
                return FAILED;
            }
            Err(e) => return went_wrong(&e, &format!("{taken} lines are taken; the same command again takes the rest.")),
        }
    }
    say!("{taken} taken{}.", if before > 0 { format!(", {before} of them known already") } else { String::new() });
    0
}

/// Lines that the laboratory as it stands would refuse.
fn refused(dir: &Path, preview: &Preview, asks: &[Value]) -> Result<Vec<Fault>, ClientError> {
    let mut faults = Vec::new();
    for (n, chunk) in asks.chunks(AT_ONCE).enumerate() {
        let plain: Vec<Value> = chunk.iter().map(without_id).collect();
        let answer = ask_of(dir, &json!({"ask": "would", "asks": plain}))?;
        for one in answer["refused"].as_array().into_iter().flatten() {
            let at = one["n"].as_u64().and_then(|i| usize::try_from(i).ok()).map_or(0, |i| n * AT_ONCE + i);
            let line = preview.items.get(at).map_or(0, |i| i.line);
            faults.push(Fault { line, column: None, says: one["says"].as_str().unwrap_or("refused").to_string() });
        }
        if answer["ok"] != json!(true) {
            let says = answer["error"]["says"].as_str().unwrap_or("refused").to_string();
            faults.push(Fault { line: preview.items.get(n * AT_ONCE).map_or(0, |i| i.line), column: None, says });
        }
    }
    Ok(faults)
}

fn without_id(ask: &Value) -> Value {
    let mut plain = ask.clone();
    if let Some(members) = plain.as_object_mut() {
        members.remove("ask_id");
    }
    plain
}

fn ask_of(dir: &Path, ask: &Value) -> Result<Value, ClientError> {
    let answer = socket::ask_service(dir, &ask.to_string(), Duration::from_secs(30))?;
    Ok(serde_json::from_str(&answer).unwrap_or_default())
}

fn went_wrong(error: &ClientError, says: &str) -> u8 {
    eprintln!("{error}");
    eprintln!("{says}");
    match error {
        ClientError::Nobody { .. } => NOBODY,
        _ => FAILED,
    }
}
