//! `tarecup learn`: work out a profile by listening to an instrument, or from captures of one.

mod keep;
mod live;

use super::{FAILED, WRONG_INPUT};
use serde_json::{Value, json};
use std::io::Read;
use std::os::unix::fs::FileTypeExt;
use std::path::{Path, PathBuf};
use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::signal::Basis;
use tarecup_drivers::learn::{BYTES_MAX, Hints, Learned, LearnedReading, Piece, learn};
use tarecup_drivers::port::CharFrame;
use tarecup_drivers::profile::Kind;

/// Arguments of `learn`.
#[derive(clap::Args)]
#[command(
    after_help = "Nothing is ever sent to the port.\n\nExamples:\n  tarecup learn /dev/ttyUSB0\n  tarecup learn /dev/ttyUSB0 --mass 0 --mass 100.00g --name pan-1 --bench north --write\n  tarecup learn morning.raw afternoon.raw --json"
)]
pub struct LearnArgs {
    /// A serial port, or files with raw bytes of one instrument: the pieces of one recording, in order.
    #[arg(required = true, value_name = "PORT|CAPTURE")]
    from: Vec<PathBuf>,
    /// A known mass that was put on the pan, such as 0 or 100.00g; may be given several times.
    #[arg(long, value_name = "MASS", value_parser = mass)]
    mass: Vec<Mass>,
    /// Unit of lines that name none.
    #[arg(long, value_name = "UNIT", value_parser = unit)]
    unit: Option<MassUnit>,
    /// What the instrument is, where its lines leave it open.
    #[arg(long, value_enum)]
    kind: Option<KindArg>,
    /// Name of the instrument to be written to the configuration. Default: its kind and a number.
    #[arg(long, value_name = "NAME")]
    name: Option<String>,
    /// The bench it serves.
    #[arg(long, value_name = "BENCH")]
    bench: Option<String>,
    /// Port of the instrument, when it is learned from files.
    #[arg(long, value_name = "PATH")]
    port: Option<String>,
    /// Config file to write to. Default: the first of the usual places that exists.
    #[arg(long, value_name = "FILE")]
    config: Option<PathBuf>,
    /// Write instrument and profile to the config file without asking.
    #[arg(long)]
    write: bool,
    /// The answer as one JSON object.
    #[arg(long)]
    json: bool,
    /// How long a port is listened to at most.
    #[arg(long, value_name = "SECONDS", default_value_t = 180, value_parser = clap::value_parser!(u64).range(1..=3600))]
    seconds: u64,
}

/// Kinds of instrument, as they are written.
#[derive(Clone, Copy, PartialEq, Eq, clap::ValueEnum)]
enum KindArg {
    /// Shows masses.
    Balance,
    /// Counts the drops of a cup.
    Counter,
    /// Reads codes.
    Scanner,
}

fn mass(text: &str) -> Result<Mass, String> {
    let at = text.find(|c: char| c.is_ascii_alphabetic()).unwrap_or(text.len());
    let (number, word) = text.split_at(at);
    let unit = if word.is_empty() { Some(MassUnit::Gram) } else { MassUnit::parse(word) };
    let unit = unit.ok_or_else(|| format!("'{word}' is no unit of mass; write g, kg or mg"))?;
    Mass::parse(number.trim(), unit).map_err(|e| format!("{e}; write a mass such as 100.00g"))
}

fn unit(text: &str) -> Result<MassUnit, String> {
    MassUnit::parse(text).ok_or_else(|| "write g, kg, mg or ug".into())
}

/// What was learned, and of which line.
struct Found {
    learned: Learned,
    line: Option<(u32, CharFrame)>,
    /// What a person said of the reading shown: `None` when nobody was asked.
    confirmed: Option<bool>,
}

/// Runs `learn`.
pub fn run(args: &LearnArgs) -> u8 {
    let kind = args.kind.map(|k| match k {
        KindArg::Balance => Kind::Balance,
        KindArg::Counter => Kind::Counter,
        KindArg::Scanner => Kind::Scanner,
    });
    let hints = Hints { masses: args.mass.clone(), unit: args.unit, kind };
    let found = match port_of(&args.from) {
        Some(port) => live::listen(args, port, &hints),
        None => from_files(&args.from).map(|pieces| {
            let pieces: Vec<Piece<'_>> = pieces.iter().map(|bytes| Piece { at_us: None, bytes }).collect();
            Found { learned: learn(&pieces, &hints), line: None, confirmed: None }
        }),
    };
    match found {
        Ok(found) => told(args, &found),
        Err(says) => {
            eprintln!("{says}");
            WRONG_INPUT
        }
    }
}

/// The port, where one path was given and it is no plain file.
fn port_of(from: &[PathBuf]) -> Option<&Path> {
    let [one] = from else { return None };
    let device = std::fs::metadata(one).is_ok_and(|m| m.file_type().is_char_device());
    (device || one.starts_with("/dev")).then_some(one)
}

fn from_files(files: &[PathBuf]) -> Result<Vec<Vec<u8>>, String> {
    let mut left = BYTES_MAX as u64;
    let mut out = Vec::new();
    for path in files {
        let unreadable =
            |e: std::io::Error| format!("{}: cannot be read ({e}); name a file of raw bytes, or a port", path.display());
        let meta = std::fs::metadata(path).map_err(unreadable)?;
        if !meta.is_file() {
            let name = path.display();
            return Err(format!(
                "{name}: is not a plain file; name files of raw bytes, or one port (`tarecup ports` lists them)"
            ));
        }
        if meta.len() > left {
            return Err(format!(
                "{}: the captures are larger than 4 MiB together; a few minutes of lines are enough",
                path.display()
            ));
        }
        let mut bytes = Vec::new();
        std::fs::File::open(path).and_then(|f| f.take(left).read_to_end(&mut bytes)).map_err(unreadable)?;
        left -= bytes.len() as u64;
        out.push(bytes);
    }
    Ok(out)
}

/// Shows what was learned, and writes it where that is wanted.
fn told(args: &LearnArgs, found: &Found) -> u8 {
    if args.json {
        say!("{}", answer(found));
    } else {
        for line in shown(&found.learned, found.line) {
            say!("{line}");
        }
    }
    if found.learned.profile.is_none() || found.confirmed == Some(false) {
        return FAILED;
    }
    keep::keep(args, found)
}

/// The answer in JSON.
fn answer(found: &Found) -> Value {
    let l = &found.learned;
    let reading = |r: &LearnedReading| json!({"mass_g": r.mass.grams(), "steady": r.steady, "basis": basis_word(r.basis)});
    json!({
        "kind": l.kind.map_or("unknown", Kind::word),
        "profile": l.profile,
        "line": {"baud": found.line.map(|l| l.0), "frame": found.line.map(|l| String::from(l.1))},
        "readings": l.readings.iter().map(reading).collect::<Vec<_>>(),
        "counts": l.counts,
        "codes": l.codes,
        "confidence": l.confidence,
        "missing": l.missing,
    })
}

fn basis_word(basis: Basis) -> &'static str {
    match basis {
        Basis::Gross => "gross",
        Basis::Net => "net",
        Basis::Unmarked => "unmarked",
    }
}

/// One reading in words.
fn spoken(r: &LearnedReading) -> String {
    let steady = match r.steady {
        Some(true) => ", steady",
        Some(false) => ", moving",
        None => "",
    };
    let basis = if r.basis == Basis::Unmarked { String::new() } else { format!(", {}", basis_word(r.basis)) };
    format!("{} g{steady}{basis}", r.mass)
}

/// What was learned, for people.
fn shown(l: &Learned, line: Option<(u32, CharFrame)>) -> Vec<String> {
    let Some(profile) = &l.profile else {
        let mut out = vec![String::from("Not understood yet.")];
        out.extend(l.missing.iter().map(|m| format!("  Missing: {m}.")));
        return out;
    };
    let mut out = Vec::new();
    if let Some((baud, frame)) = line {
        out.push(format!("The line runs at {baud} baud, {}.", String::from(frame)));
    }
    let what = l.kind.map_or("unknown", Kind::word);
    out.push(format!(
        "It is a {what}; {} lines were read, confidence {:.2}.",
        l.readings.len() + l.counts.len() + l.codes.len(),
        l.confidence
    ));
    if let Some(check) = profile.check {
        out.push(format!("Check digits agree: {}.", serde_json::to_value(check.kind).unwrap_or_default().as_str().unwrap_or("")));
    }
    out.extend(profile.line.iter().map(|l| format!("  {}", l.pattern)));
    const SHOWN: usize = 10;
    out.extend(l.readings.iter().take(SHOWN).map(|r| format!("  says {}", spoken(r))));
    if l.readings.len() > SHOWN {
        out.push(format!("  … and {} more", l.readings.len() - SHOWN));
    }
    if let Some(last) = l.counts.last() {
        out.push(format!("  last count {last}"));
    }
    if let Some(last) = l.codes.last() {
        out.push(format!("  last code {}", last.escape_debug()));
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn masses_are_read_with_and_without_unit() {
        assert_eq!(mass("100.00g"), Ok(Mass::from_ug(100_000_000)));
        assert_eq!(mass("0"), Ok(Mass::ZERO));
        assert_eq!(mass("0.2 kg"), Ok(Mass::from_ug(200_000_000)));
        assert!(mass("5 lb").is_err() && mass("g").is_err());
    }

    #[test]
    fn the_answer_has_its_members() {
        let found = Found { learned: learn(&[], &Hints::default()), line: None, confirmed: None };
        let answer = answer(&found);
        assert_eq!(answer["kind"], "unknown");
        assert!(answer["profile"].is_null() && answer["line"]["baud"].is_null() && answer["line"]["frame"].is_null());
        assert_eq!(answer["readings"], json!([]));
        assert!(answer["missing"][0].as_str().is_some_and(|m| m.contains("nothing was heard")));
    }
}
