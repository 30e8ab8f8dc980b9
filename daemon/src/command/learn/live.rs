//! Listening to a port until what it says is understood.

use super::{Found, LearnArgs, spoken};
use crate::signals::{self, StopFlag};
use std::io::{IsTerminal, Write};
use std::path::Path;
use std::time::{Duration, Instant};
use tarecup_core::quantity::Mass;
use tarecup_drivers::learn::{Hints, Learned, Piece, learn};
use tarecup_drivers::port::CharFrame;
use tarecup_drivers::port::listen::{Ear, SPEEDS, Sound, likeness};

/// How long one setting is tried once something is heard.
const TRY: Duration = Duration::from_millis(1_500);
/// Bytes that are enough to tell text from a wrong speed.
const ENOUGH: usize = 48;
/// How often all is worked out anew.
const AGAIN: Duration = Duration::from_millis(500);
/// A profile that stays the same for so long is taken.
const SAME: Duration = Duration::from_millis(2_500);
/// The most that is kept, in bytes.
const KEPT: usize = 400_000;

/// What one read gave, and when.
struct Read {
    at: Duration,
    bytes: Vec<u8>,
}

/// Prints for people: to standard error with `--json`, so that the answer stands alone.
fn note(args: &LearnArgs, text: &str) {
    if args.json {
        eprintln!("{text}");
    } else {
        say!("{text}");
    }
}

/// Listens until a profile is certain, the time is over, or the person stops.
pub(super) fn listen(args: &LearnArgs, port: &Path, hints: &Hints) -> Result<Found, String> {
    let path = port.display().to_string();
    let mut ear = Ear::open(&path)?;
    let (stop, _told) = signals::listen().map_err(|e| format!("the system gives no signals ({e}); try again"))?;
    let end = Instant::now() + Duration::from_secs(args.seconds);
    note(
        args,
        &format!("Listening to {path}; nothing is sent. Load and unload the pan, or let it count, or read codes. Ctrl-C ends."),
    );
    let Some((line, first)) = tune(args, &mut ear, end, &stop)? else {
        let mut learned = Learned::default();
        learned.missing.push(format!(
            "no text was heard at {path} at any usual speed: see that the instrument sends by itself, or press its print key while this listens"
        ));
        return Ok(Found { learned, line: None, confirmed: None });
    };
    note(args, &format!("Text is heard at {} baud, {}.", line.0, String::from(line.1)));
    understand(args, &mut ear, line, first, hints, end, &stop)
}

/// Finds speed and frame; silence says nothing about them, so it is waited for the first bytes.
#[expect(clippy::type_complexity, reason = "a pair of what was found and what was heard of it")]
fn tune(args: &LearnArgs, ear: &mut Ear, end: Instant, stop: &StopFlag) -> Result<Option<((u32, CharFrame), Vec<u8>)>, String> {
    let plain = CharFrame::default();
    let parities = ['N', 'E', 'O'].map(|parity| CharFrame { parity, ..plain });
    let mut spoke = false;
    loop {
        for baud in SPEEDS {
            for frame in parities {
                ear.tune(baud, frame)?;
                let heard = taste(ear, end, stop, spoke)?;
                if stop.asked() || Instant::now() >= end {
                    return Ok(None);
                }
                spoke |= !heard.bytes.is_empty() || heard.errors > 0;
                let text = likeness(&heard);
                if text >= 0.95 && heard.errors * 50 <= heard.bytes.len() {
                    return settled(ear, baud, frame, heard.bytes).map(Some);
                }
                // Parity bits read as stop bits: mostly text, some errors.
                if frame.parity == 'N' && (text < 0.4 || heard.errors == 0) {
                    break;
                }
            }
            if spoke {
                note(args, &format!("No text at {baud} baud."));
            }
        }
    }
}

/// Seven bits with parity are set as such once they are seen.
fn settled(ear: &mut Ear, baud: u32, frame: CharFrame, bytes: Vec<u8>) -> Result<((u32, CharFrame), Vec<u8>), String> {
    let high = bytes.iter().any(|b| *b >= 0x80);
    let all = |odd: u32| bytes.iter().all(|b| b.count_ones() % 2 == odd);
    let parity = match (high, all(0), all(1)) {
        (true, true, _) => 'E',
        (true, _, true) => 'O',
        _ => return Ok(((baud, frame), bytes)),
    };
    let seven = CharFrame { data_bits: 7, parity, stop_bits: 1 };
    ear.tune(baud, seven)?;
    Ok(((baud, seven), Vec::new()))
}

/// Listens at one setting: while nothing was ever heard, for as long as it takes.
fn taste(ear: &mut Ear, end: Instant, stop: &StopFlag, spoke: bool) -> Result<Sound, String> {
    let mut all = Sound::default();
    let mut until = Instant::now() + TRY * 2;
    let mut begun = false;
    while !stop.asked() && Instant::now() < end {
        let sound = ear.hear(Duration::from_millis(50))?;
        let any = !sound.bytes.is_empty() || sound.errors > 0;
        all.bytes.extend(sound.bytes);
        all.errors += sound.errors;
        if any && !begun {
            begun = true;
            until = Instant::now() + TRY;
        }
        let silent_yet = !begun && !spoke;
        if all.bytes.len() + all.errors >= ENOUGH || (Instant::now() >= until && !silent_yet) {
            break;
        }
    }
    Ok(all)
}

/// Works it out anew as more is heard.
fn understand(
    args: &LearnArgs,
    ear: &mut Ear,
    line: (u32, CharFrame),
    first: Vec<u8>,
    hints: &Hints,
    end: Instant,
    stop: &StopFlag,
) -> Result<Found, String> {
    let began = Instant::now();
    let mut reads = vec![Read { at: Duration::ZERO, bytes: first }];
    let mut latest = Learned::default();
    let (mut since, mut next) = (Instant::now(), Instant::now() + AGAIN);
    let mut said = String::new();
    while !stop.asked() && Instant::now() < end {
        let sound = ear.hear(Duration::from_millis(40))?;
        if !sound.bytes.is_empty() {
            reads.push(Read { at: began.elapsed(), bytes: sound.bytes });
        }
        let size: usize = reads.iter().map(|r| r.bytes.len()).sum();
        if Instant::now() < next && size < KEPT {
            continue;
        }
        next = Instant::now() + AGAIN;
        let now = worked_out(&reads, hints);
        if now.profile != latest.profile {
            since = Instant::now();
        }
        latest = now;
        let says = progress(&latest);
        if says != said {
            note(args, &says);
            said = says;
        }
        if latest.profile.is_some() && since.elapsed() >= SAME && loaded(&latest) {
            return Ok(asked(args, latest, line));
        }
        if size >= KEPT {
            break;
        }
    }
    // What was heard last counts too.
    let learned = worked_out(&reads, hints);
    Ok(if stop.asked() { Found { learned, line: Some(line), confirmed: None } } else { asked(args, learned, line) })
}

/// A profile that stands was learned from a pan that was loaded.
fn loaded(l: &Learned) -> bool {
    l.readings.is_empty() || l.readings.iter().any(|r| r.mass.abs() > Mass::from_ug(0))
}

fn worked_out(reads: &[Read], hints: &Hints) -> Learned {
    let us = |d: Duration| i64::try_from(d.as_micros()).unwrap_or(i64::MAX);
    let pieces: Vec<Piece<'_>> = reads.iter().map(|r| Piece { at_us: Some(us(r.at)), bytes: &r.bytes }).collect();
    learn(&pieces, hints)
}

/// One line about how far it is.
fn progress(l: &Learned) -> String {
    match (&l.profile, l.readings.last()) {
        (Some(_), Some(reading)) => format!("It says {}.", spoken(reading)),
        (Some(_), None) => match (l.counts.last(), l.codes.last()) {
            (Some(n), _) => format!("It says {n} drops."),
            (_, Some(code)) => format!("It says {}.", code.escape_debug()),
            _ => "It speaks of drops.".into(),
        },
        (None, _) => format!("Not yet: {}.", l.missing.first().map_or("more lines are needed", String::as_str)),
    }
}

/// Asks whether the display shows the same, where a person sits there.
fn asked(args: &LearnArgs, learned: Learned, line: (u32, CharFrame)) -> Found {
    let sits = !args.json && std::io::stdin().is_terminal() && std::io::stdout().is_terminal();
    let confirmed = match learned.readings.last() {
        Some(reading) if sits => Some(yes(&format!("It says {}. Is that what its display shows?", spoken(reading)))),
        _ => None,
    };
    if confirmed == Some(false) {
        say!("Then nothing is written. Say what is on the pan with --mass 0 --mass 100.00g, and listen once more.");
    }
    Found { learned, line: Some(line), confirmed }
}

/// A question at the terminal; only a clear yes is one.
pub(super) fn yes(question: &str) -> bool {
    print!("{question} [y/n] ");
    let _ = std::io::stdout().flush();
    let mut answer = String::new();
    let read = std::io::stdin().read_line(&mut answer);
    read.is_ok() && matches!(answer.trim().to_ascii_lowercase().as_str(), "y" | "yes")
}
