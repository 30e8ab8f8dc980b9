//! What is known of one specimen, ready to be computed: the common form of a
//! running test, a scenario file and an old paper sheet.

use crate::fact::Intention;
use crate::lab::entities::{Checked, Seen};
use crate::names::{ContainerId, InstrumentName, Operator, SpecimenId};
use crate::quantity::Mass;
use crate::stamp;
use alloc::string::String;
use alloc::vec::Vec;

/// Number of a fact in the ledger.
pub type Seq = u64;

/// One specimen's determinations in the order they were begun.
#[derive(Clone, Debug, PartialEq)]
pub struct Sheet {
    /// The specimen.
    pub specimen: SpecimenId,
    /// Every determination, set aside or not.
    pub trials: Vec<Trial>,
    /// A person stated that the liquid limit cannot be obtained, because …
    pub liquid_not_obtainable: Option<String>,
    /// A person stated that the plastic limit cannot be obtained, because …
    pub plastic_not_obtainable: Option<String>,
    /// Share passing 0.075 mm, percent of dry mass.
    pub passing_75um_percent: Option<f64>,
    /// Share finer than clay size, percent of dry mass.
    pub clay_percent: Option<f64>,
    /// Liquid limit of the same soil dried in the oven before the test, percent of dry mass.
    pub liquid_limit_oven_dried: Option<f64>,
    /// Checks a person has answered: check name, what it was about, the words.
    pub answers: Vec<Answer>,
    /// A second person has reviewed the result as it stands.
    pub reviewed: bool,
    /// What is wanted; empty: liquid and plastic limit.
    pub wanted: Vec<Intention>,
}

impl Sheet {
    /// Whether this is wanted of the specimen.
    pub fn wants(&self, what: Intention) -> bool {
        match self.wanted.is_empty() {
            true => what != Intention::Natural,
            false => self.wanted.contains(&what),
        }
    }
}

/// A person's answer to a check.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Answer {
    /// Which check.
    pub check: String,
    /// What it was about, as the check named it.
    pub about: String,
    /// What the person said.
    pub says: String,
    /// Who.
    pub by: Option<Operator>,
}

/// What a determination is for.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Kind {
    /// A slice from the cup.
    Liquid,
    /// Threads for the plastic limit.
    Thread,
    /// Natural water content.
    Natural,
    /// A fall-cone determination.
    Cone,
}

/// One determination: a container with its masses and, for a liquid trial, its closures.
#[derive(Clone, Debug, PartialEq)]
pub struct Trial {
    /// What it is for.
    pub kind: Kind,
    /// Number within its kind, from 1.
    pub no: u32,
    /// Closures of the paste, in order. Empty for threads and natural water.
    pub closures: Vec<Closure>,
    /// Cone penetrations of the paste, in order. Empty but for the cone.
    pub penetrations: Vec<Penetration>,
    /// The container.
    pub container: Option<ContainerId>,
    /// Mass of the empty container in force at the wet weighing; `None` while it is owed.
    pub tare: Option<Mass>,
    /// Container with wet soil.
    pub wet: Option<Mass>,
    /// Container with dried soil, in the order weighed.
    pub dry: Vec<DryWeighing>,
    /// A water content given in place of the masses (paper sheets), percent of dry mass.
    pub water_percent: Option<f64>,
    /// A person set the determination aside, because …
    pub set_aside: Option<String>,
    /// Some value was typed by a person rather than read from an instrument.
    pub typed: bool,
    /// Who was signed in at the wet weighing.
    pub by: Option<Operator>,
    /// Balance of the wet weighing.
    pub balance: Option<InstrumentName>,
    /// Where the empty, the wet and the latest dry mass were read.
    pub readings: [Reading; 3],
    /// Cup counter of the closures.
    pub cup: Option<InstrumentName>,
    /// When the wet weighing was taken, UTC µs.
    pub at_utc_us: Option<i64>,
    /// Facts the determination rests on.
    pub facts: Vec<Seq>,
}

/// Where a mass was read, and what is known around it.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Reading {
    /// Which balance; `None` when typed or not known.
    pub balance: Option<InstrumentName>,
    /// One step of its last printed digit.
    pub step: Option<Mass>,
    /// What the balance showed before, while and after it; none when typed or printed on a key.
    pub seen: Option<Seen>,
    /// Time since what went before: of a wet mass the count, of a dry one the oven, µs.
    pub after_us: Option<i64>,
    /// Of an empty container: what it weighed empty the time before.
    pub before: Option<Mass>,
    /// Of an empty container: mass of its lid.
    pub lid: Option<Mass>,
    /// How the balance stood when last checked with a reference mass.
    pub checked: Option<Checked>,
}

/// One penetration of the cone.
#[derive(Clone, Debug, PartialEq)]
pub struct Penetration {
    /// How deep, millimetres.
    pub mm: f64,
    /// Typed by a person.
    pub typed: bool,
    /// The fact, when there is a ledger.
    pub fact: Option<Seq>,
}

/// One closure of the groove.
#[derive(Clone, Debug, PartialEq)]
pub struct Closure {
    /// Drops counted.
    pub drops: u32,
    /// Drops per second.
    pub rate_per_s: Option<f64>,
    /// Gaps noticed in the drops.
    pub gaps: u32,
    /// Doubled drops noticed.
    pub doubles: u32,
    /// Why part of the count may be missing.
    pub interrupted: Option<String>,
    /// Typed by a person.
    pub typed: bool,
    /// The fact, when there is a ledger.
    pub fact: Option<Seq>,
}

/// One weighing of a dried container.
#[derive(Clone, Debug, PartialEq)]
pub struct DryWeighing {
    /// The mass.
    pub mass: Mass,
    /// Hours in the oven before it, as far as they are known.
    pub oven_hours: Option<f64>,
    /// Hours back in the oven since the previous dry weighing.
    pub since_previous_hours: Option<f64>,
    /// False when the hours are counted from the wet weighing for want of an oven record.
    pub oven_recorded: bool,
    /// Clock that the hours rest on.
    pub basis: Option<stamp::Basis>,
    /// The fact, when there is a ledger.
    pub fact: Option<Seq>,
}
