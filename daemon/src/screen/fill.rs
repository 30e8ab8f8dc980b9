//! From the laboratory's state to what the pages show. Pure functions: what the
//! laboratory does not know (readings, the head, who sits at the screen) comes
//! in as [`Around`].

use super::view;
use std::collections::BTreeMap;
use tarecup_core::lab::Lab;
use tarecup_core::names::{BenchName, InstrumentName, SpecimenId};
use tarecup_core::stamp::Stamp;

/// What the laboratory's state does not hold.
#[derive(Clone, Debug, Default)]
pub struct Around {
    /// The frame, all but `loose`, `ready` and `benches`, which are filled in.
    pub frame: view::Frame,
    /// Each instrument as the desk hears it.
    pub instruments: BTreeMap<InstrumentName, Heard>,
}

/// An instrument as the desk hears it.
#[derive(Clone, Debug, Default)]
pub struct Heard {
    /// `balance`, `counter` or `scanner`.
    pub kind: &'static str,
    /// The latest reading of a balance.
    pub reading: Option<view::Reading>,
    /// Drops and drops per second of a counter's run.
    pub drops: Option<(u32, Option<f64>)>,
    /// That run lasts.
    pub running: bool,
    /// When it was last heard.
    pub last_heard: Option<Stamp>,
    /// Lines not understood.
    pub rejects: u64,
}

/// A bench's page; `None` when there is no such bench.
pub fn bench(lab: &Lab, name: &BenchName, _now: &Stamp, around: &Around) -> Option<view::Bench> {
    lab.bench(name).map(|b| view::Bench { frame: around.frame.clone(), name: b.name.to_string(), ..Default::default() })
}
/// The oven shelf.
pub fn shelf(_lab: &Lab, _now: &Stamp, around: &Around) -> view::Shelf {
    view::Shelf { frame: around.frame.clone(), ..Default::default() }
}
/// Loose things.
pub fn loose(_lab: &Lab, _now: &Stamp, around: &Around) -> view::LoosePage {
    view::LoosePage { frame: around.frame.clone(), ..Default::default() }
}
/// A specimen; `None` when it is not at hand.
pub fn specimen(lab: &Lab, id: &SpecimenId, _now: &Stamp, around: &Around) -> Option<view::SpecimenPage> {
    lab.specimen(id).map(|s| view::SpecimenPage { frame: around.frame.clone(), id: s.id.to_string(), ..Default::default() })
}
/// The laboratory.
pub fn laboratory(_lab: &Lab, _now: &Stamp, around: &Around) -> view::Laboratory {
    view::Laboratory { frame: around.frame.clone(), ..Default::default() }
}
