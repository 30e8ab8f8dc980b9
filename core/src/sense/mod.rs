//! From a stream of signals to what happened: a mass was taken, a count ended.

pub mod count;
mod intervals;
pub mod settle;
mod time;

use crate::quantity::Mass;
use crate::signal::Basis;
use crate::stamp::Stamp;
use alloc::string::String;
use serde::{Deserialize, Serialize};

/// Number of a row of the input table: which bytes something rests on.
pub type InputNo = u64;

/// How a balance tells a weighing.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Talks {
    /// It sends readings all the time (or is asked all the time).
    #[default]
    Continuous,
    /// It sends a line when somebody presses its print key: each line is a weighing.
    PrintOnKey,
}

/// Limits of the *settle* sense. All have defaults; all can be set per instrument.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct SettleLimits {
    /// How the balance tells a weighing.
    pub talks: Talks,
    /// Readings in a row that must agree before a mass is taken.
    pub steady_readings: u32,
    /// Largest difference among those readings, µg. `None`: two printed steps, at least 2 mg.
    pub steady_span: Option<Mass>,
    /// Smallest mass that counts as something on the pan.
    pub load_from: Mass,
    /// A change of load beyond this makes the pan ready for the next mass.
    pub change_from: Mass,
    /// Without a steady mark, readings must also agree for this long, milliseconds.
    pub steady_ms: u32,
}

impl Default for SettleLimits {
    fn default() -> Self {
        Self {
            talks: Talks::Continuous,
            steady_readings: 8,
            steady_span: None,
            load_from: Mass::from_ug(500_000),
            change_from: Mass::from_ug(50_000),
            steady_ms: 700,
        }
    }
}

/// Limits of the *count* sense.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct CountLimits {
    /// Two unnumbered drops closer than this are one drop heard twice, milliseconds.
    pub debounce_ms: u32,
    /// A run without end line is over after this pause, milliseconds.
    pub pause_ms: u32,
    /// An interval this many percent of the usual one is a gap.
    pub gap_percent: u32,
    /// The counter is asked in a rhythm of its own: the same total again says nothing.
    #[serde(skip_serializing_if = "core::ops::Not::not")]
    pub polled: bool,
}

impl Default for CountLimits {
    fn default() -> Self {
        Self { debounce_ms: 150, pause_ms: 5_000, gap_percent: 160, polled: false }
    }
}

/// What a sense has made of a stream.
#[derive(Clone, Debug, PartialEq)]
pub enum Happening {
    /// A balance settled on a mass, or printed one.
    MassTaken(MassTaken),
    /// The pan went back to zero (or to what it showed before loading).
    Unloaded {
        /// The line that showed it.
        input: InputNo,
        /// When.
        at: Stamp,
        /// What the balance showed while the mass taken lay on it, when it was watched long enough.
        stayed: Option<Stayed>,
    },
    /// The empty pan shows something else than before the mass was put on it.
    LeftOnPan(LeftOnPan),
    /// A drop fell in a run that goes on (for live display; never a fact).
    Drops {
        /// Drops so far.
        drops: u32,
        /// Drops per second so far, from the first to the latest drop.
        rate_per_s: Option<f64>,
        /// When.
        at: Stamp,
    },
    /// A run of the cup counter is over.
    CountEnded(CountRun),
}

/// One mass taken from a balance: the value of one line, never a mean.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct MassTaken {
    /// The mass as printed on that line.
    pub mass: Mass,
    /// One step of its last digit.
    pub step: Mass,
    /// Gross, net or unmarked.
    pub basis: Basis,
    /// True when the line itself was the weighing (print key), false when the stream settled.
    pub printed: bool,
    /// The line whose value it is.
    pub input: InputNo,
    /// First of the agreeing lines.
    pub first_input: InputNo,
    /// How many lines agreed.
    pub readings: u32,
    /// Largest difference among them.
    pub span: Mass,
    /// What the empty pan showed before loading, if it was seen, and on which line.
    pub zero: Option<Zero>,
    /// When the line was heard.
    pub at: Stamp,
    /// How the load settled; none with a print key.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub trace: Option<Trace>,
}

/// How a load settled before its mass was taken. A container that is still warm
/// reads low and rises while it cools; wet soil that loses water falls.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Trace {
    /// From the first loaded line of the placement to the line taken, ms.
    pub settling_ms: u32,
    /// From the first of the agreeing lines to the line taken, ms.
    pub watched_ms: u32,
    /// Change over these lines, µg a second, from the first and the last of them. One
    /// printed step within the time watched is the least that can show.
    pub drift_ug_per_s: i64,
}

/// What the balance showed from the mass taken until it was lifted, by a line
/// fitted to all agreeing readings in between.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Stayed {
    /// When the mass was taken: tells which weighing it was.
    pub taken_at: Stamp,
    /// One printed step of the balance.
    pub step: Mass,
    /// Readings that it rests on.
    pub readings: u32,
    /// From the mass taken to the last of these readings, ms.
    pub watched_ms: u32,
    /// Slope of the line, µg a second.
    pub drift_ug_per_s: i64,
}

/// What lay on the pan after a mass was lifted, against what lay there before.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct LeftOnPan {
    /// When the mass was taken: tells which weighing it was.
    pub taken_at: Stamp,
    /// What the empty pan shows now, less what it showed before.
    pub left: Mass,
    /// What it shows now, and on which line.
    pub zero: Zero,
    /// When.
    pub at: Stamp,
}

/// An empty pan's reading.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Zero {
    /// What the pan showed.
    pub mass: Mass,
    /// On which line.
    pub input: InputNo,
}

/// How a count run came to its end.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum EndedBy {
    /// The counter sent its end line.
    EndLine,
    /// No drop came for the set pause.
    Pause,
    /// The counter began again at a lower number.
    Restart,
}

/// One run of the cup counter: one closure of the groove.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct CountRun {
    /// Drops counted.
    pub drops: u32,
    /// Drops per second, from first to last drop; `None` below two drops or when interrupted.
    pub rate_per_s: Option<f64>,
    /// From first to last drop, microseconds.
    pub duration_us: i64,
    /// Intervals that were too long, or numbers that were skipped.
    pub gaps: u32,
    /// Drops heard twice (within the debounce) or numbers repeated; not counted.
    pub doubles: u32,
    /// Drops heard one by one, where this differs from `drops`.
    pub heard: u32,
    /// How the run ended.
    pub ended_by: EndedBy,
    /// Why part of the run may be missing, when no running or final total covers it.
    pub interrupted: Option<String>,
    /// First line of the run.
    pub first_input: InputNo,
    /// Last line of the run.
    pub last_input: InputNo,
    /// When the first drop was heard.
    pub began: Stamp,
    /// When the run was over: its last drop or its end line, not the end of the pause.
    pub at: Stamp,
}
