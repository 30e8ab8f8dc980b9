//! What the pages of the bench screen are given: plain data, ready to be
//! shown. Nothing here is decided, and nothing knows HTML.
//!
//! Times are RFC 3339 UTC; masses are texts in grams with `.` as decimal sign,
//! exactly as recorded; water contents are percent of dry mass.

mod bench;
mod laboratory;
mod loose;
mod shelf;
mod specimen;

pub use bench::*;
pub use laboratory::*;
pub use loose::*;
pub use shelf::*;
pub use specimen::*;

use serde::Serialize;

/// A moment, RFC 3339 UTC.
pub type Time = String;

/// What stands around every page.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Frame {
    /// Name of the laboratory.
    pub lab: String,
    /// Name of the station: one running service.
    pub station: String,
    /// Every bench.
    pub benches: Vec<String>,
    /// The bench this screen stands at, when it stands at one.
    pub bench: Option<String>,
    /// Initials of the person signed in at this screen.
    pub who: Option<String>,
    /// Corrections, answers and reviews ask for the PIN.
    pub asks_pin: bool,
    /// Why nothing is being recorded; `None` while recording.
    pub not_recording: Option<String>,
    /// The fact that the page reflects; what comes later arrives as an event with a higher number.
    pub seq: u64,
    /// When the page was made.
    pub now: Time,
    /// Goes back with every form as `token`; empty where none is used.
    pub token: String,
    /// Things tied to nothing, over all benches.
    pub loose: usize,
    /// Containers that may be weighed dry now.
    pub ready: usize,
}

/// How much a value shown can be trusted to be the present one.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(tag = "state", rename_all = "snake_case")]
pub enum Freshness {
    /// It is what the instrument says now.
    Live,
    /// Nothing newer has come since then.
    Stale {
        /// Since when.
        since: Option<Time>,
    },
    /// Nothing was ever heard.
    #[default]
    Never,
}

/// Connection of an instrument.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Connected {
    /// Nothing heard yet.
    #[default]
    Waiting,
    /// Heard and understood.
    Speaking,
    /// Has spoken, and is silent.
    Silent,
    /// Heard and not understood.
    WrongLanguage,
    /// Its port is gone.
    PortLost,
}

/// What a determination is for.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Kind {
    /// A slice from the cup.
    #[default]
    Liquid,
    /// Threads of the plastic limit.
    Thread,
    /// Natural water content.
    Natural,
}

/// A page that says that something went wrong, and what to try.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Problem {
    /// The frame.
    pub frame: Frame,
    /// What went wrong and what to try, in words for a person.
    pub says: String,
}

/// Sign-in.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct SignIn {
    /// The frame.
    pub frame: Frame,
    /// Initials that can be chosen with a finger.
    pub operators: Vec<String>,
    /// Where to go afterwards: a path of this station.
    pub then: String,
    /// Why the last try failed.
    pub refused: Option<String>,
    /// No try is taken before this moment.
    pub locked_until: Option<Time>,
}

#[cfg(test)]
#[allow(missing_docs)]
pub(crate) mod sample;
