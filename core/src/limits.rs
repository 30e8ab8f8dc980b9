//! The result of a specimen, in the shape in which it is stored and published.

use crate::names::{ContainerId, InstrumentName, MethodName, Operator, SpecimenId};
use crate::sheet::{Kind, Seq};
use alloc::string::String;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize, Serializer};

/// Limits and indices of one specimen with all they rest on.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Limits {
    /// The specimen.
    pub specimen: SpecimenId,
    /// Whether the result stands.
    pub state: State,
    /// The method.
    pub method: MethodName,
    /// The edition, as the laboratory states it.
    pub edition: String,
    /// Liquid limit, percent of dry mass.
    pub liquid_limit: Option<LiquidLimit>,
    /// Plastic limit, percent of dry mass.
    pub plastic_limit: Option<PlasticLimit>,
    /// Plasticity index.
    pub plasticity_index: PlasticityIndex,
    /// Natural water content, percent of dry mass: mean of its determinations.
    pub natural_water_percent: Option<f64>,
    /// (w − PL) / PI.
    pub liquidity_index: Option<f64>,
    /// (LL − w) / PI.
    #[serde(default)]
    pub consistency_index: Option<f64>,
    /// Fall of water content per tenfold number of drops.
    #[serde(default)]
    pub flow_index: Option<f64>,
    /// PI / flow index.
    #[serde(default)]
    pub toughness_index: Option<f64>,
    /// PI / clay percent.
    #[serde(default)]
    pub activity: Option<f64>,
    /// Group by the plasticity chart.
    pub group: Option<String>,
    /// Plasticity by EN ISO 14688-2: low, intermediate, high or non-plastic.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub group_en_iso_14688_2: Option<String>,
    /// Group by AASHTO M 145, where the share passing 0.075 mm is known and decides it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub group_m145: Option<String>,
    /// Group index of AASHTO M 145, a whole number.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub group_index: Option<u32>,
    /// Every determination.
    pub trials: Vec<TrialRow>,
    /// What the checks say.
    pub checks: Vec<CheckRow>,
}

/// Whether a result stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum State {
    /// Something is missing or a hold is unanswered.
    Provisional,
    /// Everything the method asks for is there.
    Complete,
    /// A second person has looked at it.
    Reviewed,
}

/// Liquid limit.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct LiquidLimit {
    /// Unrounded.
    pub value: f64,
    /// As reported.
    #[serde(serialize_with = "whole_when_whole")]
    pub rounded: f64,
    /// Standard uncertainty, where there is one to tell.
    pub u: Option<f64>,
    /// 95 % interval that goes with it.
    pub interval_95: Option<[f64; 2]>,
    /// What `u` and `interval_95` rest on.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_from: Option<String>,
    /// Student interval from these trials alone, where they tell one.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub interval_95_classical: Option<[f64; 2]>,
    /// Trials used.
    pub points: u32,
    /// Change of water content per tenfold number of drops (negative for a fall), or per tenfold
    /// penetration of a cone on a logarithmic axis.
    pub slope_per_decade: Option<f64>,
    /// Change of water content per millimetre of penetration, on linear axes.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub slope_per_mm: Option<f64>,
    /// Residual standard deviation about the line.
    pub residual_sd: Option<f64>,
    /// `flow line`, `one point` or `cone`.
    pub how: String,
}

/// Plastic limit.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct PlasticLimit {
    /// Unrounded mean.
    pub value: f64,
    /// As reported.
    #[serde(serialize_with = "whole_when_whole")]
    pub rounded: f64,
    /// Standard uncertainty of the mean, where there is one to tell.
    pub u: Option<f64>,
    /// 95 % interval that goes with it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub interval_95: Option<[f64; 2]>,
    /// What they rest on.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_from: Option<String>,
    /// Determinations used.
    pub points: u32,
}

/// Plasticity index; always an object.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct PlasticityIndex {
    /// LL − PL, unrounded; `None` when non-plastic or when a limit is missing.
    pub value: Option<f64>,
    /// As reported.
    #[serde(serialize_with = "whole_when_whole_option")]
    pub rounded: Option<f64>,
    /// Standard uncertainty.
    pub u: Option<f64>,
    /// 95 % interval that goes with it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub interval_95: Option<[f64; 2]>,
    /// The soil is non-plastic.
    pub non_plastic: bool,
}

/// One determination in the result.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct TrialRow {
    /// Liquid, thread, natural or cone.
    pub kind: Kind,
    /// Number within its kind.
    pub no: u32,
    /// Drops that count.
    #[serde(serialize_with = "whole_when_whole_option")]
    pub drops: Option<f64>,
    /// All closures of the paste.
    pub closures: Vec<u32>,
    /// Drops per second of the closure that counts.
    pub rate_per_s: Option<f64>,
    /// Cone penetration that counts: the mean of those of the paste.
    pub penetration_mm: Option<f64>,
    /// All penetrations of the paste.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub penetrations_mm: Vec<f64>,
    /// The container.
    pub container: Option<ContainerId>,
    /// Mass of the empty container, grams.
    pub tare_g: Option<f64>,
    /// With wet soil, grams.
    pub wet_g: Option<f64>,
    /// With dried soil, grams; the last dry weighing.
    pub dry_g: Option<f64>,
    /// Water content, percent of dry mass.
    pub water_percent: Option<f64>,
    /// Standard uncertainty of the water content that comes from the balance, percent of dry mass.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub water_u: Option<f64>,
    /// Whether the determination entered the result.
    pub used: bool,
    /// Why a person set it aside.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub set_aside: Option<String>,
    /// Some value was typed.
    pub typed: bool,
    /// Who.
    pub by: Option<Operator>,
    /// Which balance.
    pub balance: Option<InstrumentName>,
    /// Which cup counter.
    pub cup: Option<InstrumentName>,
    /// When, RFC 3339 UTC.
    pub at: Option<String>,
}

/// How much a check weighs.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Severity {
    /// Worth knowing.
    Note,
    /// Keeps the result provisional until a person answers.
    Hold,
}

/// What one check says.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct CheckRow {
    /// Stable name of the check.
    pub check: String,
    /// Note or hold.
    pub severity: Severity,
    /// What it is about: `liquid 1`, `thread 2`, `liquid limit`, `specimen`.
    pub about: String,
    /// In words, with what to do.
    pub says: String,
    /// What a person answered.
    pub answered: Option<String>,
    /// Facts it rests on.
    pub facts: Vec<Seq>,
}

/// Writes 41.0 as `41`, so that a whole number reads as one.
fn whole_when_whole<S: Serializer>(value: &f64, to: S) -> Result<S::Ok, S::Error> {
    if libm::trunc(*value) == *value && libm::fabs(*value) < 9e15 {
        to.serialize_i64(*value as i64)
    } else {
        to.serialize_f64(*value)
    }
}

fn whole_when_whole_option<S: Serializer>(value: &Option<f64>, to: S) -> Result<S::Ok, S::Error> {
    match value {
        Some(v) => whole_when_whole(v, to),
        None => to.serialize_none(),
    }
}
