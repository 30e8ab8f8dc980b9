//! Works out a profile from what an instrument says, by listening alone.
//!
//! Pure: bytes in, a profile or what is missing out. Every reading that is
//! shown is what the learned profile makes of the bytes by the decoder that
//! the service uses. What the lines do not prove is never guessed: the answer
//! then says what to do at the instrument to make it plain.

mod balance;
mod behave;
mod checksum;
mod columns;
mod counter;
mod digits;
mod frames;
mod numbers;
mod parity;
mod pattern;
mod periodic;
mod pick;
mod read;
mod scanner;
mod slots;
mod tokens;
mod words;

use crate::profile::{Kind, ProfileText};
use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::signal::Basis;

/// The most that is looked at, in bytes; later bytes are not heard.
pub const BYTES_MAX: usize = 4 << 20;

/// What a person has told beforehand.
#[derive(Clone, Debug, Default)]
pub struct Hints {
    /// Masses that were put on the pan, in any order.
    pub masses: Vec<Mass>,
    /// Unit of numbers that have none.
    pub unit: Option<MassUnit>,
    /// What the instrument is.
    pub kind: Option<Kind>,
}

/// Bytes as they were read.
#[derive(Clone, Copy, Debug)]
pub struct Piece<'a> {
    /// Microseconds of any clock when they were read; `None` from a file.
    pub at_us: Option<i64>,
    /// The bytes.
    pub bytes: &'a [u8],
}

/// What was learned.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Learned {
    /// What the instrument is, where that is certain.
    pub kind: Option<Kind>,
    /// How it speaks; `None` when something is missing.
    pub profile: Option<ProfileText>,
    /// Every mass line in order, as the profile reads it.
    pub readings: Vec<LearnedReading>,
    /// Every running or final count in order, as the profile reads it.
    pub counts: Vec<u32>,
    /// Every code in order, as the profile reads it.
    pub codes: Vec<String>,
    /// From 0, nothing understood, to 1.
    pub confidence: f64,
    /// What to do so that it can be told; empty with a profile.
    pub missing: Vec<String>,
}

/// A mass as the learned profile reads it.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct LearnedReading {
    /// The mass.
    pub mass: Mass,
    /// Whether the balance says that it is steady; `None` when it says nothing.
    pub steady: Option<bool>,
    /// What it includes.
    pub basis: Basis,
}

/// Why there is no profile: what the instrument is, if that is certain, and what would help.
#[derive(Clone, Debug, PartialEq, Eq)]
struct Refusal {
    kind: Option<Kind>,
    missing: String,
    /// How far it got: the refusal of the framing that explains most is told.
    depth: u8,
}

impl Refusal {
    fn new(kind: Option<Kind>, depth: u8, missing: impl Into<String>) -> Self {
        Self { kind, missing: missing.into(), depth }
    }
}

/// Works out a profile. Deterministic; without times, the same however the bytes are cut into pieces.
pub fn learn(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    let heard = frames::Heard::new(pieces);
    if heard.bytes.iter().filter(|b| !b.is_ascii_whitespace()).count() == 0 {
        return refused(Refusal::new(
            None,
            0,
            "nothing was heard: see that the instrument sends by itself, or press its print key",
        ));
    }
    let (heard, serial) = match parity::stripped(heard) {
        Ok(found) => found,
        Err(refusal) => return refused(refusal),
    };
    let mut best: Option<Refusal> = None;
    let mut keep = |refusal: Refusal| {
        if best.as_ref().is_none_or(|b| refusal.depth > b.depth) {
            best = Some(refusal);
        }
    };
    let mut endless: Option<Learned> = None;
    let mut confirmed = true;
    for framing in frames::candidates(&heard) {
        match understand(&heard, &framing, hints) {
            Ok(mut learned) => {
                if let (Some(profile), Some(serial)) = (&mut learned.profile, &serial) {
                    profile.serial = Some(serial.clone());
                }
                // Where frames have no end, only one beginning may make sense.
                match &endless {
                    _ if framing.frame.length.is_none() && !framing.doubtful => return learned,
                    None => {
                        // Where frames begin is no matter only where nothing but the mass is read of them.
                        let plain = learned.readings.iter().all(|r| r.steady.is_none() && r.basis == Basis::Unmarked);
                        confirmed = !framing.doubtful || plain;
                        endless = Some(learned);
                    }
                    Some(first) if within(&first.readings, &learned.readings) => {
                        confirmed = true;
                        endless = Some(learned);
                    }
                    Some(first) if within(&learned.readings, &first.readings) => confirmed = true,
                    Some(_) => return refused(Refusal::new(first_kind(&endless), 9, NO_BEGINNING)),
                }
            }
            Err(refusal) => keep(refusal),
        }
    }
    if let Some(learned) = endless {
        return if confirmed { learned } else { refused(Refusal::new(learned.kind, 9, NO_BEGINNING)) };
    }
    refused(best.unwrap_or_else(|| {
        Refusal::new(
            None,
            0,
            "no line end was found: see that speed and character frame are those of the instrument, and send more lines",
        )
    }))
}

/// Whether these are those, but for one at either end that may be cut.
fn within(these: &[LearnedReading], those: &[LearnedReading]) -> bool {
    let less = those.len().saturating_sub(these.len());
    !these.is_empty() && less <= 2 && those.windows(these.len()).any(|w| w == these)
}

fn first_kind(learned: &Option<Learned>) -> Option<Kind> {
    learned.as_ref().and_then(|l| l.kind)
}

fn refused(refusal: Refusal) -> Learned {
    Learned { kind: refusal.kind, missing: vec![refusal.missing], ..Learned::default() }
}

/// One way to cut frames, through all kinds of instrument.
fn understand(heard: &frames::Heard, framing: &frames::Guess, hints: &Hints) -> Result<Learned, Refusal> {
    if frames::digits_behind(heard, framing) {
        return Err(Refusal::new(None, 2, UNREAD_CHECK));
    }
    let cut = frames::cut(heard, framing)?;
    let checked = checksum::find(&cut, framing)?;
    let lines = columns::Lines::new(&checked)?;
    let wanted = |kind: Kind| hints.kind.is_none_or(|k| k == kind);
    let mut tried: Vec<Refusal> = Vec::new();
    let mut attempt = |found: Result<read::Draft, Refusal>| -> Option<Learned> {
        match found.and_then(|draft| read::read(heard, draft, &lines, hints)) {
            Ok(learned) => Some(learned),
            Err(refusal) => {
                tried.push(refusal);
                None
            }
        }
    };
    // A byte for each drop is for counters alone; frames of one length are for masses alone.
    let (single, fixed) = (!framing.frame.single.is_empty(), framing.frame.length.is_some());
    if wanted(Kind::Balance) && !single {
        // Known masses must leave one way to read the numbers, and no second.
        let ways: Vec<Learned> = balance::learn(&lines, hints).into_iter().filter_map(&mut attempt).collect();
        if let Some(first) = ways.first() {
            return match ways.iter().all(|w| w.readings == first.readings) {
                true => Ok(first.clone()),
                false => Err(Refusal::new(Some(Kind::Balance), 10, TWO_WAYS)),
            };
        }
    }
    if !lines.weighs() && !fixed {
        if wanted(Kind::Counter)
            && let Some(learned) = attempt(counter::learn(&lines, hints))
        {
            return Ok(learned);
        }
        if wanted(Kind::Scanner)
            && !single
            && let Some(learned) = attempt(scanner::learn(&lines, hints))
        {
            return Ok(learned);
        }
    }
    Err(tried.into_iter().max_by_key(|r| r.depth).unwrap_or_else(|| Refusal::new(None, 0, NOT_UNDERSTOOD)))
}

/// What is said of frames that could begin in two places.
const NO_BEGINNING: &str = "lines have no end and could begin in two places: listen at the port itself, where pauses tell, or set the instrument to send a line end";
/// What is said of check digits that were not found to be such.
const UNREAD_CHECK: &str = "characters after the line end agree with no known check: send a few more different lines";
/// What is said when known masses fit two ways to read the numbers.
const TWO_WAYS: &str = "the known masses fit the numbers in two ways: say another mass that was put on the pan with --mass, with all its digits, or the unit with --unit";
/// What is said when nothing fits.
const NOT_UNDERSTOOD: &str = "the lines are not understood: see that speed and frame are right, and load and unload the pan once more, or make a few drops";
