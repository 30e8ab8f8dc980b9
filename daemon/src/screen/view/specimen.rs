//! A specimen with all its result rests on.

use super::{Frame, Kind, Time};
use serde::Serialize;

/// One specimen.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct SpecimenPage {
    /// The frame.
    pub frame: Frame,
    /// Its identifier.
    pub id: String,
    /// For people.
    pub description: Option<String>,
    /// How the soil was prepared.
    pub preparation: Option<String>,
    /// The method's title.
    pub method: String,
    /// The edition as the laboratory states it.
    pub edition: String,
    /// Opened at.
    pub opened: Time,
    /// `provisional`, `complete` or `reviewed`.
    pub state: String,
    /// Revision of the result, 0 before the first.
    pub revision: u32,
    /// Who reviewed it.
    pub reviewed_by: Option<String>,
    /// Its determinations.
    pub trials: Vec<Trial>,
    /// Counts after which no slice was taken, or that were set aside.
    pub other_counts: Vec<OtherCount>,
    /// What the checks say.
    pub checks: Vec<Check>,
    /// The limits.
    pub results: Results,
    /// Its flow line.
    pub flow: Flow,
    /// The plasticity chart.
    pub chart: Chart,
    /// Every change, oldest first.
    pub history: Vec<Change>,
    /// The ledger's end when the page was made, for the printed sheet.
    pub head: Option<Head>,
}

/// One determination.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Trial {
    /// What it is for.
    pub kind: Kind,
    /// Number within its kind.
    pub no: u32,
    /// The container.
    pub container: Option<String>,
    /// Drops of each closure, oldest first, with its fact.
    pub drops: Vec<(u32, u64)>,
    /// Drops per second of the closure that counts.
    pub rate_per_s: Option<f64>,
    /// Empty, grams.
    pub tare: Option<Weighed>,
    /// With wet soil.
    pub wet: Option<Weighed>,
    /// With dried soil, the last one.
    pub dry: Option<Weighed>,
    /// Water content, percent of dry mass, unrounded.
    pub water_percent: Option<f64>,
    /// It entered the result.
    pub used: bool,
    /// Why a person set it aside.
    pub set_aside: Option<String>,
    /// Some value was typed or corrected by a person.
    pub typed: bool,
    /// Who.
    pub by: Option<String>,
}

/// A mass of a determination.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Weighed {
    /// Grams, as recorded.
    pub mass_g: String,
    /// The fact.
    pub seq: u64,
    /// Typed or corrected by a person.
    pub typed: bool,
}

/// A count without a slice.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct OtherCount {
    /// The fact.
    pub seq: u64,
    /// Drops.
    pub drops: u32,
    /// Why no slice was taken, or why it was set aside.
    pub why: String,
    /// When.
    pub at: Time,
}

/// What a check says.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Check {
    /// Its stable name.
    pub check: String,
    /// It keeps the result provisional until a person answers.
    pub hold: bool,
    /// What it is about.
    pub about: String,
    /// In words.
    pub says: String,
    /// What a person answered.
    pub answered: Option<String>,
}

/// The limits as they are shown.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Results {
    /// Liquid limit.
    pub liquid: Option<Figure>,
    /// Plastic limit.
    pub plastic: Option<Figure>,
    /// Plasticity index.
    pub index: Option<Figure>,
    /// The soil is non-plastic.
    pub non_plastic: bool,
    /// Group by the chart.
    pub group: Option<String>,
    /// Natural water content, percent.
    pub natural_percent: Option<f64>,
    /// Liquidity index.
    pub liquidity: Option<f64>,
    /// Consistency index.
    pub consistency: Option<f64>,
    /// Flow index.
    pub flow: Option<f64>,
    /// Activity.
    pub activity: Option<f64>,
    /// Why the liquid limit cannot be obtained.
    pub liquid_not_obtainable: Option<String>,
    /// Why the plastic limit cannot be obtained.
    pub plastic_not_obtainable: Option<String>,
}

/// A limit.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Figure {
    /// As reported.
    pub rounded: String,
    /// Unrounded, percent.
    pub value: f64,
    /// Standard uncertainty, percent.
    pub u: Option<f64>,
}

/// A flow line with its points.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Flow {
    /// Trials that have drops and water content.
    pub points: Vec<FlowPoint>,
    /// Trials that have drops and wait for the oven: drops.
    pub waiting: Vec<f64>,
    /// The fit.
    pub fit: Option<Fit>,
}

/// A point of a flow line.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct FlowPoint {
    /// Trial.
    pub no: u32,
    /// Drops.
    pub drops: f64,
    /// Water content, percent.
    pub water_percent: f64,
    /// It entered the line.
    pub used: bool,
}

/// A fitted flow line `w = at_one + slope · log10 N`.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Fit {
    /// Water content on the line at one drop, percent.
    pub at_one: f64,
    /// Percent for each tenfold number of drops.
    pub slope: f64,
    /// Drops, lower and upper end of the 95 % band in percent, in order of drops; empty where the trials tell none.
    pub band: Vec<(f64, f64, f64)>,
}

/// The plasticity chart.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Chart {
    /// This specimen: liquid limit and plasticity index.
    pub this: Option<(f64, f64)>,
    /// Others of the laboratory: identifier, liquid limit, plasticity index.
    pub others: Vec<(String, f64, f64)>,
}

/// One change of the record.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Change {
    /// The fact.
    pub seq: u64,
    /// When.
    pub at: Time,
    /// Who.
    pub who: Option<String>,
    /// What happened, in words.
    pub what: String,
    /// What it was before.
    pub was: Option<String>,
    /// What it is now.
    pub is: Option<String>,
    /// Why.
    pub why: Option<String>,
    /// It changes something that stood in the record.
    pub correction: bool,
}

/// The ledger's end, as a witness on paper.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Head {
    /// Epoch of the ledger.
    pub epoch: u32,
    /// Its last fact.
    pub seq: u64,
    /// Hash of that fact, hexadecimal.
    pub hash: String,
    /// When the page was made.
    pub at: Time,
}
