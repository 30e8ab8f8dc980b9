//! From the laboratory's state to what the pages show. Pure functions: what the
//! laboratory does not know (readings, the head, who sits at the screen) comes
//! in as [`Around`].

mod advice;
mod bench;
mod history;
mod import;
mod laboratory;
mod loose;
mod shelf;
mod specimen;

pub use bench::bench;
pub use history::history;
pub use import::import;
pub use laboratory::laboratory;
pub use loose::{correction, loose, trial_correction};
pub use shelf::shelf;
pub use specimen::specimen;

use super::view;
use std::collections::BTreeMap;
use tarecup_core::fact::Connection;
use tarecup_core::lab::Lab;
use tarecup_core::lab::entities::Standing;
use tarecup_core::lab::role::Role;
use tarecup_core::names::InstrumentName;
use tarecup_core::sheet::{Kind, Seq};
use tarecup_core::stamp::Stamp;

/// What the laboratory's state does not hold.
#[derive(Clone, Debug, Default)]
pub struct Around {
    /// The frame; `benches`, `loose` and `ready` are filled in.
    pub frame: view::Frame,
    /// Each instrument as the desk hears it.
    pub instruments: BTreeMap<InstrumentName, Heard>,
    /// Readings around loose weighings, by their facts.
    pub traces: BTreeMap<Seq, view::Trace>,
    /// The ledger's end, for the printed sheet.
    pub head: Option<view::Head>,
    /// Every change of the specimen shown, from [`history()`].
    pub history: Vec<view::Change>,
    /// Checks of equipment.
    pub due: Vec<view::DueCheck>,
    /// When a backup was last proven by restoring it.
    pub backup_proven: Option<view::Time>,
    /// Oven temperature for the next containers, °C; 110 where nobody said otherwise.
    pub celsius: Option<f64>,
    /// The oven was reported off at this time.
    pub off_since: Option<view::Time>,
    /// The service can keep a running outage.
    pub holds_outage: bool,
    /// Paste mass that the operator typed, grams.
    pub paste_g: Option<String>,
    /// Where a correction goes afterwards: a path of this station.
    pub then: String,
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

/// The frame with what the laboratory knows.
fn frame(lab: &Lab, now: &Stamp, around: &Around) -> view::Frame {
    view::Frame {
        benches: lab.benches().map(|b| b.name.to_string()).collect(),
        loose: lab.loose_things().count(),
        ready: shelf::rows(lab, now).iter().filter(|r| r.due != view::Due::NotYet).count(),
        now: now.rfc3339(),
        ..around.frame.clone()
    }
}

fn connected(state: Connection) -> view::Connected {
    match state {
        Connection::Waiting => view::Connected::Waiting,
        Connection::Speaking => view::Connected::Speaking,
        Connection::Silent => view::Connected::Silent,
        Connection::WrongLanguage => view::Connected::WrongLanguage,
        Connection::PortLost => view::Connected::PortLost,
    }
}

/// A kind that the pages show; there is no cone at a bench.
fn kind(kind: Kind) -> Option<view::Kind> {
    match kind {
        Kind::Liquid => Some(view::Kind::Liquid),
        Kind::Thread => Some(view::Kind::Thread),
        Kind::Natural => Some(view::Kind::Natural),
        Kind::Cone => None,
    }
}

/// The stable word of a role, as asks have it.
fn role_word(role: Role) -> &'static str {
    match role {
        Role::Tare => "tare",
        Role::TareCheck => "tare_check",
        Role::TareWithLid => "tare_with_lid",
        Role::Wet => "wet",
        Role::Repeat => "repeat",
        Role::Grown => "grown",
        Role::Dry => "dry",
        Role::FurtherDry => "further_dry",
        Role::Emptied => "emptied",
    }
}

fn standing_word(standing: Standing) -> &'static str {
    match standing {
        Standing::Unknown => "unknown",
        Standing::Free => "free",
        Standing::Wet => "wet",
        Standing::InOven => "in_oven",
        Standing::Drying => "drying",
        Standing::Dry => "dry",
    }
}

fn text(value: Option<&impl ToString>) -> Option<String> {
    value.map(ToString::to_string)
}
