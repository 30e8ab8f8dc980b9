//! The laboratory page and imports.

use super::{Connected, Frame, Time};
use serde::Serialize;

/// The laboratory at a glance.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Laboratory {
    /// The frame.
    pub frame: Frame,
    /// Open specimens.
    pub open: Vec<SpecimenRow>,
    /// Results of the day.
    pub results: Vec<SpecimenRow>,
    /// Every instrument.
    pub instruments: Vec<InstrumentRow>,
    /// What is to be checked: balances, cups, ovens.
    pub due: Vec<DueCheck>,
    /// When a backup was last proven by restoring it.
    pub backup_proven: Option<Time>,
    /// Register of containers.
    pub containers: Vec<ContainerRow>,
    /// Methods that a new specimen may have: name and title, the default first.
    pub methods: Vec<(String, String)>,
}

/// A specimen in a list.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct SpecimenRow {
    /// Its identifier.
    pub id: String,
    /// For people.
    pub description: Option<String>,
    /// `provisional`, `complete` or `reviewed`.
    pub state: String,
    /// Liquid trials done and wanted.
    pub liquid: (u32, u32),
    /// Thread containers done and wanted.
    pub threads: (u32, u32),
    /// Reported liquid limit.
    pub liquid_limit: Option<String>,
    /// Reported plastic limit.
    pub plastic_limit: Option<String>,
    /// Reported index, or `NP`.
    pub index: Option<String>,
    /// Group.
    pub group: Option<String>,
    /// Unanswered holds.
    pub holds: usize,
}

/// An instrument in a list.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct InstrumentRow {
    /// Its name.
    pub name: String,
    /// `balance`, `counter` or `scanner`.
    pub kind: String,
    /// Benches it serves.
    pub benches: Vec<String>,
    /// How it is connected.
    pub connected: Connected,
    /// Why, in words.
    pub detail: Option<String>,
    /// When it was last heard.
    pub last_heard: Option<Time>,
    /// Lines not understood.
    pub rejects: u64,
}

/// A check of equipment.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct DueCheck {
    /// What is to be checked.
    pub what: String,
    /// Last done.
    pub last: Option<Time>,
    /// Due at.
    pub due: Option<Time>,
    /// That time is over.
    pub overdue: bool,
}

/// A container in the register.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct ContainerRow {
    /// Its number.
    pub id: String,
    /// Where it stands: `unknown`, `free`, `wet`, `in_oven`, `drying` or `dry`.
    pub standing: String,
    /// Empty mass in force, grams.
    pub tare_g: Option<String>,
    /// Mass of its lid, grams.
    pub lid_g: Option<String>,
    /// When it was last weighed empty.
    pub weighed: Option<Time>,
    /// Whose soil it holds.
    pub specimen: Option<String>,
}

/// What an imported file would do, line by line, before anything is taken.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Import {
    /// The frame.
    pub frame: Frame,
    /// `containers` or `specimens`.
    pub what: String,
    /// The text as it came, to be sent again when it is taken.
    pub text: String,
    /// Its lines.
    pub lines: Vec<ImportLine>,
    /// What is wrong with the file as a whole.
    pub refused: Option<String>,
}

/// One line of an imported file.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct ImportLine {
    /// Its number in the file, from 1.
    pub no: usize,
    /// Its fields as they were read.
    pub fields: Vec<String>,
    /// What is wrong with it and what to write; `None` when it can be taken.
    pub refused: Option<String>,
    /// Worth knowing, though it can be taken.
    pub note: Option<String>,
}
