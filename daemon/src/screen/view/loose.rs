//! Things tied to nothing, and corrections.

use super::{Frame, Kind, SpecimenKey, Time};
use serde::Serialize;

/// Weighings and counts tied to nothing.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct LoosePage {
    /// The frame.
    pub frame: Frame,
    /// Newest first.
    pub things: Vec<LooseThing>,
    /// Open specimens that can be chosen.
    pub specimens: Vec<SpecimenKey>,
    /// Containers that can be chosen.
    pub containers: Vec<String>,
}

/// One weighing or count tied to nothing.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct LooseThing {
    /// What it is.
    pub subject: Subject,
    /// Why it is tied to nothing, and what to do.
    pub why: String,
    /// The balance around it.
    pub trace: Option<Trace>,
}

/// The weighing, count or determination that a correction is about, as it stands in the record.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Subject {
    /// The fact; 0 for a determination.
    pub seq: u64,
    /// Where, when that is clear.
    pub bench: Option<String>,
    /// What it is.
    pub what: What,
    /// The container.
    pub container: Option<String>,
    /// What the mass is of, a role's word.
    pub role: Option<String>,
    /// Of which specimen.
    pub specimen: Option<String>,
    /// Which determination.
    pub trial: Option<(Kind, u32)>,
    /// Which instrument; `None` when typed.
    pub instrument: Option<String>,
    /// Typed by a person.
    pub typed: bool,
    /// When.
    pub at: Time,
    /// Who was signed in.
    pub by: Option<String>,
    /// Why it does not count, when it was set aside.
    pub set_aside: Option<String>,
    /// What it was before, with who and why, oldest first.
    pub before: Vec<super::Change>,
}

/// What a subject is.
#[derive(Clone, Debug, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum What {
    /// A weighing.
    Weighing {
        /// Grams.
        mass_g: String,
    },
    /// A count.
    Count {
        /// Drops.
        drops: u32,
    },
    /// A whole determination.
    Trial,
}

impl Default for What {
    fn default() -> Self {
        Self::Weighing { mass_g: String::new() }
    }
}

/// Readings of a balance around a moment.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Trace {
    /// Seconds from the moment, and grams; in order of time.
    pub points: Vec<(f64, f64)>,
    /// Grams taken at second 0.
    pub taken_g: f64,
}

/// A correction: what stands in the record, and what may be said of it.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Correction {
    /// The frame.
    pub frame: Frame,
    /// What it is about.
    pub subject: Subject,
    /// Open specimens that can be chosen.
    pub specimens: Vec<SpecimenKey>,
    /// Containers that can be chosen.
    pub containers: Vec<String>,
    /// Where to go afterwards: a path of this station.
    pub then: String,
}
