//! What a port delivers: the exact bytes, when they were heard, and what the
//! profile made of them.

use std::time::Instant;
use tarecup_core::signal::Signal;
use tarecup_core::stamp::Stamp;

/// Which configured instrument, by its place in the settings.
pub type InstrumentId = u16;

/// Frames cut from one read of one port, in order.
#[derive(Clone, Debug)]
pub struct Batch {
    /// Whose port.
    pub instrument: InstrumentId,
    /// The bytes of all frames, one after the other, terminators included.
    pub bytes: Vec<u8>,
    /// The frames.
    pub frames: Vec<Frame>,
    /// When the read returned, for measuring only.
    pub read_at: Option<Instant>,
}

/// One frame of a [`Batch`].
#[derive(Clone, Debug, PartialEq)]
pub struct Frame {
    /// End of this frame in `Batch::bytes`; it begins where the previous ends.
    pub end: u32,
    /// When its last byte was read.
    pub at: Stamp,
    /// What the profile made of it.
    pub what: What,
}

/// What a profile made of a frame.
#[derive(Clone, Debug, PartialEq)]
pub enum What {
    /// A signal.
    Signal(Signal),
    /// A line the profile knows and that means nothing (banner, blank line, echo).
    Nothing,
    /// Not understood; kept raw and counted under its reason.
    Reject(Reject),
}

/// Why a frame was not understood. The words are stable: they are counters' names.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Reject {
    /// No line pattern of the profile matches.
    NoPattern,
    /// A checksum does not agree.
    Checksum,
    /// Longer than a frame of this profile may be.
    TooLong,
    /// The mass cannot be kept exactly, or is beyond what a balance of this kind weighs.
    Mass,
    /// A unit that is not one of mass.
    Unit,
    /// A number of drops that is not one.
    Number,
    /// A code that is empty, too long or holds control characters.
    Code,
    /// First line after opening, begun before we listened.
    FirstPartial,
    /// The port was lost in mid-line.
    CutOff,
    /// A frame of an instrument of another kind.
    WrongKind,
    /// Bytes without a line end, for longer than any line takes.
    Unended,
}

impl Reject {
    /// Stable word for counters, records and topics.
    pub fn word(self) -> &'static str {
        match self {
            Self::NoPattern => "no_pattern",
            Self::Checksum => "checksum",
            Self::TooLong => "too_long",
            Self::Mass => "mass",
            Self::Unit => "unit",
            Self::Number => "number",
            Self::Code => "code",
            Self::FirstPartial => "first_partial",
            Self::CutOff => "cut_off",
            Self::WrongKind => "wrong_kind",
            Self::Unended => "unended",
        }
    }
    /// All reasons.
    pub const ALL: [Reject; 11] = [
        Self::NoPattern,
        Self::Checksum,
        Self::TooLong,
        Self::Mass,
        Self::Unit,
        Self::Number,
        Self::Code,
        Self::FirstPartial,
        Self::CutOff,
        Self::WrongKind,
        Self::Unended,
    ];
    /// The reason with this word.
    pub fn from_word(word: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|r| r.word() == word)
    }
}

/// How a port is doing.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum PortState {
    /// The path is not there, or nothing has been heard since it was opened.
    Waiting,
    /// Opened; nothing heard yet.
    Opened,
    /// Gone while it was open; will be reopened.
    Lost,
    /// Cannot be opened, because …, with what to try.
    Refused(String),
    /// Open, but perhaps not the instrument that is meant, because …: nothing is taken from it until a person has confirmed it.
    Unconfirmed(String),
}

/// Takes what ports deliver. Implementations never block: they take it or say that they are full.
pub trait Deliver: Send + Sync {
    /// Takes a batch, or gives it back when there is no room.
    fn heard(&self, batch: Batch) -> Result<(), Batch>;
    /// Lines of this instrument that had to be dropped while there was no room.
    fn overrun(&self, instrument: InstrumentId, lines: u64, at: Stamp);
    /// The port's state has changed.
    fn state(&self, instrument: InstrumentId, state: PortState, at: Stamp);
}

/// Where stamps come from: the machine's clocks, or a virtual day.
pub trait Clock: Send + Sync {
    /// The present moment.
    fn now(&self) -> Stamp;
}
