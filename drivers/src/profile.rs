//! Instrument profiles: data that says what an instrument's lines mean.
//!
//! A profile names how frames end and one or more line patterns, regular
//! expressions with named groups:
//!
//! | group | of | says |
//! |---|---|---|
//! | `mass` | balance | the number, with its sign |
//! | `sign` | balance | the sign, where it stands apart from the number: `-` is below zero |
//! | `unit` | balance | `ug`, `mg`, `g` or `kg` |
//! | `steady`, `moving` | balance | present when the balance marks the mass so |
//! | `basis` | balance | a text that the table `basis` maps to gross or net |
//! | `total` | counter | running count since the counter was at zero |
//! | `drops` | counter | final count; the line ends the count |
//! | `end` | counter | present when the line ends the count |
//! | `code` | scanner | the text that was read |
//!
//! An instrument that is read over Modbus has a table of registers instead of
//! lines: see [`crate::modbus`].
//!
//! A dialect with only one of the two marks means the other by its absence.
//! A pattern must match the whole line, without terminator.

mod check;
mod compile;
mod guess;
pub mod text;

pub use compile::{LARGEST_G_DEFAULT, ProfileFault};
pub use text::ProfileText;

use crate::frame::{Framing, How, Piece};
use crate::heard::{Reject, What};
use crate::modbus::Plan;
use regex::bytes::{CaptureLocations, Regex};
use serde::{Deserialize, Serialize};
use std::sync::Arc;
use std::time::Duration;
use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::signal::{Basis, Mark, Reading, Signal};
use text::{CheckPlace, SerialText};

/// Longest code a scanner may read, in characters.
pub const CODE_MAX: usize = 64;
/// The longest number whose decimal point may be left out, in characters.
const NUMBER_MAX: usize = 32;
/// The largest count that is believed.
pub const COUNT_MAX: u32 = 999_999;

/// Kinds of instrument.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// Shows masses.
    Balance,
    /// Counts the drops of a cup.
    Counter,
    /// Reads codes.
    Scanner,
}

impl Kind {
    /// The stable word.
    pub fn word(self) -> &'static str {
        match self {
            Self::Balance => "balance",
            Self::Counter => "counter",
            Self::Scanner => "scanner",
        }
    }
}

/// When an instrument speaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Talks {
    /// By itself.
    Stream,
    /// Once, when a person presses its print key.
    PrintOnKey,
    /// When it is asked.
    Asked,
}

/// What to send to be answered.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Ask {
    /// The request.
    pub send: Vec<u8>,
    /// Time between requests.
    pub every: Duration,
}

/// A profile that can be run.
#[derive(Clone, Debug)]
pub struct Profile {
    framing: Framing,
    lines: Vec<Line>,
    unit: Option<MassUnit>,
    largest: Mass,
    talks: Talks,
    ask: Option<Ask>,
    modbus: Option<Plan>,
    text: ProfileText,
}

#[derive(Clone, Debug)]
struct Line {
    regex: Regex,
    groups: Groups,
    means: LineMeans,
    basis: Basis,
    width: Option<usize>,
}

/// Places of the named groups in a pattern.
#[derive(Clone, Copy, Debug, Default)]
struct Groups {
    mass: Option<usize>,
    sign: Option<usize>,
    unit: Option<usize>,
    steady: Option<usize>,
    moving: Option<usize>,
    basis: Option<usize>,
    drops: Option<usize>,
    total: Option<usize>,
    end: Option<usize>,
    code: Option<usize>,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum LineMeans {
    Mass,
    Count,
    Code,
    Drop,
    End,
    Nothing,
    Overload,
    Underload,
    NotReady,
    OtherKind,
}

impl LineMeans {
    /// Whether the line is what an instrument of this kind is for.
    fn serves(self, kind: Kind) -> bool {
        match kind {
            Kind::Balance => self == Self::Mass,
            Kind::Counter => matches!(self, Self::Count | Self::Drop),
            Kind::Scanner => self == Self::Code,
        }
    }
}

impl Profile {
    /// Checks a profile and makes it ready to run.
    pub fn compile(text: ProfileText) -> Result<Self, ProfileFault> {
        compile::compile(text)
    }
    /// The profile as written.
    pub fn text(&self) -> &ProfileText {
        &self.text
    }
    /// Its name, empty when it was written without.
    pub fn name(&self) -> &str {
        self.text.name.as_deref().unwrap_or("")
    }
    /// The kind of instrument.
    pub fn kind(&self) -> Kind {
        self.text.kind
    }
    /// One line for people.
    pub fn about(&self) -> &str {
        &self.text.about
    }
    /// When the instrument speaks.
    pub fn talks(&self) -> Talks {
        self.talks
    }
    /// What to send to be answered, if anything: the only bytes ever written to the port.
    pub fn ask(&self) -> Option<&Ask> {
        self.ask.as_ref()
    }
    /// Registers to ask for, of an instrument that is read over Modbus.
    pub fn modbus(&self) -> Option<&Plan> {
        self.modbus.as_ref()
    }
    /// How frames begin and end.
    pub fn framing(&self) -> &Framing {
        &self.framing
    }
    /// How the serial line is usually set.
    pub fn serial(&self) -> SerialText {
        self.text.serial.clone().unwrap_or_default()
    }
    /// A decoder of its own, for one port.
    pub fn decoder(self: &Arc<Self>) -> Decoder {
        Decoder::new(Arc::clone(self))
    }
    /// Decodes one whole frame, terminator included. For many frames use a [`Decoder`].
    pub fn decode(&self, frame: &[u8]) -> What {
        let mut places: Vec<_> = self.lines.iter().map(|l| l.regex.capture_locations()).collect();
        self.decode_in(frame, self.lines.iter().map(|l| &l.regex).zip(&mut places))
    }

    fn decode_in<'a>(&self, frame: &[u8], at: impl Iterator<Item = (&'a Regex, &'a mut CaptureLocations)>) -> What {
        if let Some(plan) = &self.modbus {
            return plan.decode(frame, self.largest);
        }
        let Some(parts) = self.framing.parts(frame) else {
            return self.unknown(frame);
        };
        let body = match self.text.check {
            // A blank line between checked ones carries no digits.
            Some(check) if check.place == CheckPlace::AfterEnd || !is_blank(parts.body) => match check.stripped(&parts) {
                Some(body) => body,
                None => return What::Reject(Reject::Checksum),
            },
            _ => parts.body,
        };
        if is_blank(body) {
            return What::Nothing;
        }
        for (line, (regex, places)) in self.lines.iter().zip(at) {
            if line.width.is_none_or(|w| w == body.len()) && regex.captures_read(places, body).is_some() {
                return self.read_line(line, places, body);
            }
        }
        self.unknown(body)
    }

    /// A frame that no pattern matches.
    fn unknown(&self, body: &[u8]) -> What {
        if is_blank(body) {
            return What::Nothing;
        }
        let other = match self.kind() {
            Kind::Balance => guess::looks_like_count(body),
            Kind::Counter => guess::looks_like_mass(body),
            Kind::Scanner => guess::looks_like_mass(body) || guess::looks_like_count(body),
        };
        What::Reject(if other { Reject::WrongKind } else { Reject::NoPattern })
    }

    fn read_line(&self, line: &Line, places: &CaptureLocations, body: &[u8]) -> What {
        let group = |at: Option<usize>| at.and_then(|i| places.get(i)).map(|(from, to)| &body[from..to]);
        let signal = match line.means {
            LineMeans::Mass => self.reading(line, group),
            LineMeans::Count | LineMeans::End => count(line, group),
            LineMeans::Code => code(body, group(line.groups.code).unwrap_or_default()),
            LineMeans::Drop => Ok(Signal::Drop),
            LineMeans::Overload => Ok(Signal::Overload),
            LineMeans::Underload => Ok(Signal::Underload),
            LineMeans::NotReady => Ok(Signal::NotReady),
            LineMeans::OtherKind => Err(Reject::WrongKind),
            LineMeans::Nothing => return What::Nothing,
        };
        signal.map_or_else(What::Reject, What::Signal)
    }

    /// The number with a sign that stands apart and a decimal point that is not printed.
    fn mass(&self, printed: &[u8], sign: Option<&[u8]>, unit: MassUnit) -> Result<(Mass, Mass), Reject> {
        let mut room = [0u8; NUMBER_MAX + 1];
        let printed = match self.text.decimals {
            Some(decimals) if !printed.iter().any(|b| matches!(b, b'.' | b',')) => {
                let point = printed.len().checked_sub(usize::from(decimals)).filter(|_| printed.len() <= NUMBER_MAX);
                let point = point.ok_or(Reject::Mass)?;
                room[..point].copy_from_slice(&printed[..point]);
                room[point] = b'.';
                room[point + 1..=printed.len()].copy_from_slice(&printed[point..]);
                &room[..=printed.len()]
            }
            _ => printed,
        };
        let (mass, step) = Mass::parse_bytes(printed, unit).map_err(|_| Reject::Mass)?;
        match sign.map(<[u8]>::trim_ascii) {
            Some(b"-") if printed.iter().any(|b| matches!(b, b'+' | b'-')) => Err(Reject::Mass),
            Some(b"-") => Ok((Mass::ZERO - mass, step)),
            None | Some(b"" | b"+") => Ok((mass, step)),
            Some(_) => Err(Reject::Mass),
        }
    }

    fn reading<'a>(&self, line: &Line, group: impl Fn(Option<usize>) -> Option<&'a [u8]>) -> Result<Signal, Reject> {
        let unit = match group(line.groups.unit) {
            Some(printed) => std::str::from_utf8(printed).ok().and_then(MassUnit::parse).ok_or(Reject::Unit)?,
            None => self.unit.ok_or(Reject::Unit)?,
        };
        let printed = group(line.groups.mass).ok_or(Reject::NoPattern)?;
        let (mass, step) = self.mass(printed, group(line.groups.sign), unit)?;
        if mass.abs() > self.largest {
            return Err(Reject::Mass);
        }
        let basis = match group(line.groups.basis) {
            Some(printed) => {
                let word = std::str::from_utf8(printed).ok().and_then(|p| self.text.basis.get(p));
                word.map(|w| compile::basis_of(*w)).ok_or(Reject::NoPattern)?
            }
            None => line.basis,
        };
        let (steady, moving) = (group(line.groups.steady).is_some(), group(line.groups.moving).is_some());
        let mark = match (steady, moving, line.groups.steady.is_some(), line.groups.moving.is_some()) {
            (_, true, ..) | (false, _, true, false) => Mark::Moving,
            (true, ..) | (_, false, false, true) => Mark::Steady,
            _ => Mark::Unmarked,
        };
        Ok(Signal::Mass(Reading { mass, step, mark, basis }))
    }
}

fn is_blank(bytes: &[u8]) -> bool {
    bytes.iter().all(u8::is_ascii_whitespace)
}

fn count<'a>(line: &Line, group: impl Fn(Option<usize>) -> Option<&'a [u8]>) -> Result<Signal, Reject> {
    let last = group(line.groups.drops);
    let number = match last.or_else(|| group(line.groups.total)) {
        Some(digits) => Some(number(digits)?),
        None => None,
    };
    let ends = line.means == LineMeans::End || last.is_some() || group(line.groups.end).is_some();
    match (ends, number) {
        (true, number) => Ok(Signal::End(number)),
        (false, Some(number)) => Ok(Signal::Total(number)),
        (false, None) => Err(Reject::Number),
    }
}

fn number(digits: &[u8]) -> Result<u32, Reject> {
    let text = std::str::from_utf8(digits.trim_ascii()).map_err(|_| Reject::Number)?;
    if text.is_empty() || !text.bytes().all(|b| b.is_ascii_digit()) {
        return Err(Reject::Number);
    }
    text.parse().ok().filter(|n| *n <= COUNT_MAX).ok_or(Reject::Number)
}

fn code(body: &[u8], read: &[u8]) -> Result<Signal, Reject> {
    // A scanner's pattern accepts nearly every text, so another instrument's
    // line on its port has to be recognised before it becomes a code.
    if guess::looks_like_mass(body) || guess::looks_like_count(body) {
        return Err(Reject::WrongKind);
    }
    let text = std::str::from_utf8(read).map_err(|_| Reject::Code)?.trim();
    let length = text.chars().count();
    if !(1..=CODE_MAX).contains(&length) || text.chars().any(char::is_control) {
        return Err(Reject::Code);
    }
    Ok(Signal::Code(text.to_owned()))
}

/// Decodes the frames of one port without allocating, apart from codes.
#[derive(Debug)]
pub struct Decoder {
    profile: Arc<Profile>,
    // Copies of the patterns, so that ports do not share their scratch space.
    lines: Vec<(Regex, CaptureLocations)>,
}

impl Decoder {
    /// A decoder for one port.
    pub fn new(profile: Arc<Profile>) -> Self {
        let lines = profile.lines.iter().map(|l| (l.regex.clone(), l.regex.capture_locations())).collect();
        Self { profile, lines }
    }
    /// The profile it works by.
    pub fn profile(&self) -> &Arc<Profile> {
        &self.profile
    }
    /// Decodes one whole frame, terminator included.
    pub fn decode(&mut self, frame: &[u8]) -> What {
        self.profile.decode_in(frame, self.lines.iter_mut().map(|(r, p)| (&*r, p)))
    }
    /// Decodes what a framer cut out.
    pub fn decode_piece(&mut self, piece: Piece<'_>) -> What {
        let lost = |reason| if is_blank(piece.bytes) { What::Nothing } else { What::Reject(reason) };
        match piece.how {
            How::Whole => self.decode(piece.bytes),
            How::FirstPartial => lost(Reject::FirstPartial),
            How::CutOff => lost(Reject::CutOff),
            How::Unended => lost(Reject::Unended),
            How::Broken => self.profile.unknown(piece.bytes),
            How::TooLong => What::Reject(Reject::TooLong),
        }
    }
}
