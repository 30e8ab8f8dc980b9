//! What was learned goes to the config file, when a person wants it so.

use super::super::{FAILED, WRONG_INPUT, files};
use super::{Found, LearnArgs};
use std::io::{IsTerminal, Write};
use std::path::Path;
use tarecup_config::learned::{NewInstrument, appended};
use tarecup_config::station::{self, Station};

/// Writes, or asks first, or says how to.
pub(super) fn keep(args: &LearnArgs, found: &Found) -> u8 {
    let asks = !args.json && std::io::stdin().is_terminal() && std::io::stdout().is_terminal();
    if !args.write {
        let yes = asks && args.config.is_some() && super::live::yes("Write it to the config file?");
        if !yes {
            if !args.json {
                say!("To keep it, run this again with --write --config FILE.");
            }
            return 0;
        }
    }
    match write(args, found) {
        Ok(says) => {
            if args.json {
                eprintln!("{says}");
            } else {
                say!("{says}");
            }
            0
        }
        Err((code, says)) => {
            eprintln!("{says}");
            code
        }
    }
}

fn write(args: &LearnArgs, found: &Found) -> Result<String, (u8, String)> {
    let wrong = |says: String| (WRONG_INPUT, says);
    let path = files::config_path(args.config.as_deref());
    let path = path.ok_or_else(|| wrong("there is no config file; name one with --config FILE".into()))?;
    let name = path.display();
    let Some(profile) = &found.learned.profile else { return Err(wrong("there is no profile to write".into())) };
    let existing = path.exists();
    let text = if existing { tarecup_config::text::read_file(&path).map_err(|e| wrong(e.to_string()))? } else { String::new() };
    let parsed = if existing { station::load(&path) } else { station::parse(&name.to_string(), "") };
    let parsed = parsed.map_err(|e| wrong(format!("{e}\nNothing was written: correct the config file first")))?;
    let port = args.port.clone().or_else(|| super::port_of(&args.from).map(|p| p.display().to_string()));
    let chosen = args.name.clone().unwrap_or_else(|| free_name(&parsed, profile.kind.word()));
    let sources: Vec<String> = args.from.iter().map(|p| p.display().to_string()).collect();
    let from = format!("Learned by `tarecup learn` from {} ({} lines read).", sources.join(", "), lines(found));
    let new = NewInstrument {
        name: &chosen,
        bench: args.bench.as_deref(),
        port: port.as_deref(),
        baud: found.line.map(|l| l.0),
        frame: found.line.map(|l| l.1),
        from: &from,
        profile,
    };
    let text = appended(&text, &parsed, &new).map_err(|says| wrong(format!("{says}; nothing was written")))?;
    replace(&path, &text)?;
    let what = if port.is_some() { "instrument and profile" } else { "profile (say --port PATH for the instrument too)" };
    Ok(format!("{name}: {what} \"{chosen}\" added at the end; `tarecup check --config {name}` shows it."))
}

fn lines(found: &Found) -> usize {
    found.learned.readings.len() + found.learned.counts.len() + found.learned.codes.len()
}

/// The kind and the first number that is free.
fn free_name(station: &Station, kind: &str) -> String {
    let taken = |name: &str| {
        let profile = format!("learned-{name}");
        station.instruments.iter().any(|i| i.name.as_str() == name) || station.profiles.keys().any(|p| p.as_str() == profile)
    };
    (1..1000).map(|n| format!("{kind}-{n}")).find(|n| !taken(n)).unwrap_or_else(|| kind.into())
}

/// Checks the whole text beside its place, then puts it there at once.
fn replace(path: &Path, text: &str) -> Result<(), (u8, String)> {
    let failed =
        |e: std::io::Error| (FAILED, format!("{}: cannot be written ({e}); look at its folder's permissions", path.display()));
    // A link stays a link: its file is replaced.
    let place = std::fs::canonicalize(path).unwrap_or_else(|_| path.to_path_buf());
    let folder = place.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
    let beside = folder.join(format!(".tarecup-learn-{}.toml", std::process::id()));
    let put = || -> std::io::Result<()> {
        let mut file = std::fs::OpenOptions::new().write(true).create_new(true).open(&beside)?;
        if let Ok(meta) = std::fs::metadata(&place) {
            file.set_permissions(meta.permissions())?;
        }
        file.write_all(text.as_bytes())?;
        file.sync_all()
    };
    let done = put().map_err(failed).and_then(|()| {
        // Paths in it are relative to its folder, which is the same.
        station::load(&beside)
            .map_err(|e| (WRONG_INPUT, format!("{e}\nNothing was written: with these tables the config would be wrong")))?;
        std::fs::rename(&beside, &place).map_err(failed)
    });
    if done.is_err() {
        let _ = std::fs::remove_file(&beside);
    }
    done
}
