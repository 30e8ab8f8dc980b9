//! Loose things: weighings and counts tied to nothing, for a person to tie, explain or set aside.

use super::Lab;
use super::entities::{Loose, LooseWhat};
use crate::names::{BenchName, InstrumentName};
use crate::quantity::Mass;
use crate::sense::InputNo;
use crate::sheet::Seq;
use crate::stamp::Stamp;
use alloc::string::String;
use serde::Serialize;

/// A loose weighing or count, as a person needs to see it.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct LooseThing {
    /// The fact.
    pub seq: Seq,
    /// Where, when that is clear.
    pub bench: Option<BenchName>,
    /// Which balance or counter; `None` when typed.
    pub instrument: Option<InstrumentName>,
    /// The mass as printed, of a weighing.
    #[serde(rename = "mass_ug")]
    pub mass: Option<Mass>,
    /// Drops, of a count.
    pub drops: Option<u32>,
    /// Why it is loose.
    pub why: String,
    /// What a person said it was; it needs nobody any more.
    pub explained: Option<String>,
    /// When.
    pub at: Stamp,
    /// First and last line of its instrument that it rests on: what to draw when its trace is shown.
    pub inputs: Option<[InputNo; 2]>,
}

impl Lab {
    /// Loose things at hand, oldest first.
    pub fn loose_list(&self) -> impl Iterator<Item = LooseThing> {
        self.loose.values().map(thing)
    }

    /// Loose things that still want a person.
    pub fn loose_open(&self) -> impl Iterator<Item = &Loose> {
        self.loose.values().filter(|l| l.explained.is_none())
    }
}

fn thing(loose: &Loose) -> LooseThing {
    let (instrument, mass, drops) = match &loose.what {
        LooseWhat::Weighing { weighing, .. } => (weighing.balance.clone(), Some(weighing.mass), None),
        LooseWhat::Count(count) => (count.cup.clone(), None, Some(count.drops)),
    };
    LooseThing {
        seq: loose.seq,
        bench: loose.bench.clone(),
        instrument,
        mass,
        drops,
        why: loose.why.clone(),
        explained: loose.explained.as_ref().map(|s| s.why.clone()),
        at: loose.at,
        inputs: loose.inputs,
    }
}
