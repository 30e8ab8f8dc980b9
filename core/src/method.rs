//! A test method as data. The numbers live in method files that a laboratory
//! can edit; nothing here knows a standard's value.

use crate::names::MethodName;
use alloc::collections::BTreeMap;
use alloc::string::String;
use alloc::vec::Vec;
use serde::{Deserialize, Serialize};

/// One method, as read from a method file.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Method {
    /// Name by which scenario, config and asks call it.
    pub name: MethodName,
    /// What it is, for people.
    pub title: String,
    /// Which edition the laboratory works to. The laboratory states it; results carry it.
    pub edition: String,
    /// The liquid limit.
    pub liquid: Liquid,
    /// The plastic limit.
    pub plastic: Plastic,
    /// When a container counts as dry.
    pub drying: Drying,
    /// How results are rounded.
    pub rounding: Rounding,
    /// When a soil is non-plastic.
    pub non_plastic: NonPlastic,
    /// Source of each number: key path (such as `liquid.rate_per_s`) to source and mark.
    pub source: BTreeMap<String, String>,
}

/// How the liquid limit follows from the trials.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum LiquidHow {
    /// Water content at 25 drops on a line fitted to all trials.
    FlowLine,
    /// Each trial brought to 25 drops by a fixed exponent, then the mean.
    OnePoint,
}

/// Which closure of one paste gives the drops of the trial.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum ClosureCounts {
    /// The one after which the slice was taken.
    #[default]
    Last,
    /// The mean of all closures of the paste.
    Mean,
}

/// Liquid limit in the cup.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Liquid {
    /// How the limit follows from the trials.
    pub how: LiquidHow,
    /// Trials that are needed.
    pub trials: u32,
    /// Drop windows, each of which wants a trial of its own. With `one-point`: where every trial must lie.
    #[serde(default)]
    pub windows: Vec<[u32; 2]>,
    /// Drops that any trial may have.
    pub drops: [u32; 2],
    /// Least difference between the largest and the smallest number of drops.
    #[serde(default)]
    pub spread_at_least: Option<u32>,
    /// Trials must lie on both sides of 25 drops.
    #[serde(default)]
    pub both_sides: bool,
    /// Drop rate, drops per second, from–to.
    pub rate_per_s: [f64; 2],
    /// Length over which the groove closes, millimetres.
    pub closure_mm: f64,
    /// Successive closures of one paste may differ by this many drops.
    pub closures_within: u32,
    /// Which closure counts.
    #[serde(default)]
    pub closure_counts: ClosureCounts,
    /// Exponent of the one-point formula `LL = w · (N/25)^exponent`.
    #[serde(default)]
    pub exponent: Option<f64>,
    /// What the balance must show at least, grams.
    pub balance_reads_g: f64,
    /// Fall of water content for ten times the drops, percent of dry mass: what is
    /// supposed of a soil of which nothing is known yet, for advice at the bench alone.
    #[serde(default)]
    pub slope_per_decade: Option<f64>,
    /// Standard deviation of that fall from soil to soil.
    #[serde(default)]
    pub slope_sd: Option<f64>,
    /// Water content of a paste near the liquid limit, percent of dry mass, from–to, while it is
    /// not known; for advice alone.
    #[serde(default)]
    pub paste_water_percent: Option<[f64; 2]>,
}

/// Plastic limit by rolling threads.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Plastic {
    /// Thread diameter at crumbling, millimetres, from–to.
    pub thread_mm: [f64; 2],
    /// Containers that are needed.
    pub containers: u32,
    /// Moist threads in each container, grams, at least.
    #[serde(default)]
    pub mass_from_g: Option<f64>,
    /// Water contents should agree within this many percent of dry mass.
    #[serde(default)]
    pub agree_within_percent: Option<f64>,
}

/// When a container counts as dry.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Drying {
    /// Hours in the oven after which drying counts as complete.
    pub hours: f64,
    /// Or: further drying changes the mass by less than this percentage …
    pub constant_percent: f64,
    /// … over at least this many hours back in the oven.
    pub constant_hours: f64,
    /// Oven temperature, °C, from–to.
    pub oven_celsius: [f64; 2],
}

/// What happens to a value exactly half way.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Tie {
    /// To the even neighbour.
    HalfEven,
    /// Away from zero.
    HalfUp,
}

/// Whether a rule looks at rounded or unrounded limits.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Digits {
    /// As reported.
    Rounded,
    /// As computed.
    Unrounded,
}

/// How results are rounded.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Rounding {
    /// Decimals of the reported liquid and plastic limit and of the index.
    pub decimals: u32,
    /// What happens half way.
    pub tie: Tie,
    /// The reported plasticity index is the difference of these limits.
    pub index_from: Digits,
}

/// When a soil is non-plastic although both limits were obtained.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct NonPlastic {
    /// Non-plastic when the plastic limit is not below the liquid limit, compared so.
    pub compare: Digits,
}
