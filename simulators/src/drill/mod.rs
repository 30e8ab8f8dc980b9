//! A laboratory at work with real spread, and the mistakes people make in it,
//! planted one at a time: what a set-up catches can then be counted.
//!
//! Nothing here knows the program's checks or their limits. How large spread
//! and mistakes are comes from what laboratories show (each figure with its
//! mark: `[pub]` read in a published text, `[calc]` computed from published
//! data, `[practice]` common practice, no source, `[mem]` from memory), not
//! from what would be noticed.
//!
//! A [`Session`] is two specimens tested side by side by one technician at one
//! bench, as a list of events in order of time: the bytes that instruments
//! sent and what was asked. The same seed with and without a mistake gives the
//! same soils, the same hands and the same noise, so that whatever differs is
//! the mistake.

mod mistake;
mod plan;
mod scale;
mod session;

pub use mistake::{Mistake, seen_how};
pub use plan::{Determination, Kind, Plan, Soil, SpecimenPlan};
pub use session::{BALANCE, BENCH, CUP, Event, Play, Session, session};

/// Kinds of balance.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Balance {
    /// Sends its reading all the time.
    Streaming,
    /// Sends a line when its print key is pressed.
    PrintOnKey,
}

impl Balance {
    /// Both.
    pub const ALL: [Balance; 2] = [Balance::Streaming, Balance::PrintOnKey];

    /// A stable word.
    pub fn word(self) -> &'static str {
        match self {
            Self::Streaming => "streaming",
            Self::PrintOnKey => "print-on-key",
        }
    }
}
