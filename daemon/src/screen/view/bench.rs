//! The bench page.

use super::{Connected, Frame, Freshness, Time, Trial};
use super::{Flow, Results};
use serde::Serialize;

/// One bench.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Bench {
    /// The frame; its `bench` is this one.
    pub frame: Frame,
    /// Its name.
    pub name: String,
    /// Initials of who is signed in at the bench, so that recordings carry them.
    pub signed_in: Option<String>,
    /// What comes next.
    pub next: Next,
    /// Balances that serve the bench.
    pub balances: Vec<Balance>,
    /// Cup counters that serve the bench.
    pub cups: Vec<Cup>,
    /// The container in hand, when its mass is awaited.
    pub hand: Option<String>,
    /// A slice is owed.
    pub owed: Option<Owed>,
    /// The specimen in work.
    pub work: Option<Work>,
    /// What was recorded here, newest first.
    pub recorded: Vec<Recorded>,
    /// Open specimens that can be chosen with a finger.
    pub specimens: Vec<SpecimenKey>,
    /// Containers that can be taken in hand with a finger.
    pub containers: Vec<ContainerKey>,
    /// What the method and the counts so far suggest.
    pub advice: Advice,
    /// Things tied to nothing at this bench.
    pub loose: usize,
}

/// What comes next, in one sentence.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Next {
    /// The sentence.
    pub sentence: String,
    /// Something was refused or is owed for long: a person is needed now.
    pub urgent: bool,
    /// What the next step is, for its picture.
    pub step: Step,
}

/// The kind of the next step.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Step {
    /// Read a code.
    #[default]
    Scan,
    /// Put the container on the pan.
    Weigh,
    /// Take it off.
    TakeOff,
    /// Take a slice.
    Slice,
    /// Run the cup.
    Cup,
    /// Look at what was refused.
    Refused,
}

/// A balance as it is shown.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Balance {
    /// Its name.
    pub name: String,
    /// How it is connected.
    pub connected: Connected,
    /// Why, in words.
    pub detail: Option<String>,
    /// Whether its reading is the present one.
    pub freshness: Freshness,
    /// The latest reading; `None` before the first.
    pub reading: Option<Reading>,
    /// Benches that share it, this one left out.
    pub shared_with: Vec<String>,
}

/// One reading of a balance.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Reading {
    /// Grams, as printed.
    pub mass_g: String,
    /// Whether it is at rest.
    pub steady: Steady,
}

/// Whether a reading is at rest.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Steady {
    /// At rest, by the balance's own mark.
    Steady,
    /// Moving, by the balance's own mark.
    Moving,
    /// The balance marks neither.
    #[default]
    Unmarked,
}

/// A cup counter as it is shown.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Cup {
    /// Its name.
    pub name: String,
    /// How it is connected.
    pub connected: Connected,
    /// Why, in words.
    pub detail: Option<String>,
    /// Whether the count is the present one.
    pub freshness: Freshness,
    /// Drops of the run, while it lasts and until the next one.
    pub drops: Option<u32>,
    /// Drops per second.
    pub rate_per_s: Option<f64>,
    /// Drops per second that the method wants, from–to.
    pub rate_wanted: Option<[f64; 2]>,
    /// The run lasts.
    pub running: bool,
}

/// A slice is owed.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Owed {
    /// For which specimen.
    pub specimen: String,
    /// Drops of its count.
    pub drops: u32,
    /// Since when.
    pub since: Time,
    /// For so long that it is said aloud.
    pub overdue: bool,
}

/// The specimen in work.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Work {
    /// Its identifier.
    pub specimen: String,
    /// For people.
    pub description: Option<String>,
    /// `liquid`, `plastic` or `natural`.
    pub intention: String,
    /// Liquid trials that the method wants.
    pub liquid_wanted: u32,
    /// Thread containers that the method wants.
    pub threads_wanted: u32,
    /// Its determinations.
    pub trials: Vec<Trial>,
    /// Its flow line, growing.
    pub flow: Flow,
    /// Limits as far as they go.
    pub results: Results,
}

/// Something that was recorded.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Recorded {
    /// The fact.
    pub seq: u64,
    /// Grams, for a weighing.
    pub mass_g: Option<String>,
    /// Drops, for a count.
    pub drops: Option<u32>,
    /// The container.
    pub container: Option<String>,
    /// What the mass is of: a role's word such as `wet`; `None` when loose.
    pub role: Option<String>,
    /// For which specimen.
    pub specimen: Option<String>,
    /// Typed by a person.
    pub typed: bool,
    /// Why it is tied to nothing.
    pub loose: Option<String>,
    /// Why it does not count.
    pub set_aside: Option<String>,
    /// When.
    pub at: Time,
    /// Who was signed in.
    pub by: Option<String>,
}

/// A specimen to choose.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct SpecimenKey {
    /// Its identifier.
    pub id: String,
    /// For people.
    pub description: Option<String>,
    /// It is the one in work.
    pub chosen: bool,
}

/// A container to take in hand.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct ContainerKey {
    /// Its number.
    pub id: String,
    /// Where it stands: `unknown`, `free`, `wet`, `in_oven`, `drying` or `dry`.
    pub standing: String,
}

/// What the laboratory advises at this bench. Nothing of it is recorded.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Advice {
    /// Sentences, most pressing first.
    pub says: Vec<String>,
    /// The latest paste is of no use: the first sentence says so.
    pub loud: bool,
    /// Thread containers that are still needed.
    pub threads_needed: u32,
    /// Water to add, when the latest paste is drier than the next trial wants.
    pub water: Option<Water>,
    /// Paste mass that the operator typed, grams.
    pub paste_g: Option<String>,
}

/// Water to add.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Water {
    /// Grams of water for each gram of paste.
    pub per_gram: f64,
    /// ± grams for each gram of paste.
    pub per_gram_u: f64,
    /// What the slope that it rests on is of, in words.
    pub from: String,
}
