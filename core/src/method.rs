//! A test method as data. The numbers live in method files that a laboratory
//! can edit; nothing here knows a standard's value.

use crate::limits::Severity;
use crate::names::MethodName;
use crate::sheet::Kind;
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
    /// The falling cone, of a method that uses one.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub cone: Option<Cone>,
    /// The plastic limit.
    pub plastic: Plastic,
    /// When a container counts as dry.
    pub drying: Drying,
    /// How results are rounded.
    pub rounding: Rounding,
    /// When a soil is non-plastic.
    pub non_plastic: NonPlastic,
    /// What uncertainties rest on until the laboratory's own results tell.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub uncertainty: Option<Uncertainty>,
    /// By how much two results of one soil may differ.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub precision: Option<Precision>,
    /// Checks that weigh otherwise than the program has them: name to `note` or `hold`.
    #[serde(default, skip_serializing_if = "BTreeMap::is_empty")]
    pub severity: BTreeMap<String, Severity>,
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
    /// Water content at one penetration of a falling cone, on a line fitted to all trials.
    Cone,
}

/// What the paste of the liquid limit is tried with.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Device {
    /// The cup.
    Cup,
    /// The falling cone.
    Cone,
}

impl Method {
    /// What its liquid limit is tried with.
    pub fn device(&self) -> Device {
        match self.liquid.how {
            LiquidHow::FlowLine | LiquidHow::OnePoint => Device::Cup,
            LiquidHow::Cone => Device::Cone,
        }
    }
    /// Determinations that its liquid limit rests on.
    pub fn limit_kind(&self) -> Kind {
        match self.device() {
            Device::Cup => Kind::Liquid,
            Device::Cone => Kind::Cone,
        }
    }
}

/// Axes of the line through cone trials.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Axes {
    /// Water content against penetration.
    Linear,
    /// Water content against the logarithm of the penetration.
    Log,
}

/// The falling cone.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Cone {
    /// Mass that falls, grams.
    pub mass_g: f64,
    /// Angle at the tip, degrees.
    pub angle_degrees: f64,
    /// Penetration at which the limit is read off the line, millimetres.
    pub at_mm: f64,
    /// Axes of the line.
    pub axes: Axes,
    /// Penetrations that a trial may have, millimetres.
    pub range_mm: [f64; 2],
    /// Penetrations of one paste that are needed; their mean counts.
    pub repeats: u32,
    /// They may differ by this much, millimetres.
    pub repeat_within_mm: f64,
    /// Trials must lie on both sides of the penetration of the limit.
    #[serde(default)]
    pub both_sides: bool,
    /// What the gauge shows at least, millimetres.
    pub gauge_reads_mm: f64,
}

/// What uncertainties rest on until the laboratory's own results tell, and what is known of its balances.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Uncertainty {
    /// Standard deviation of trials about their line, percent water. By one point: of the limit itself.
    pub residual_sd: f64,
    /// How much is known of it: degrees of freedom.
    pub residual_df: u32,
    /// Standard deviation of the thread containers of one specimen, percent water.
    pub thread_sd: f64,
    /// How much is known of it: degrees of freedom.
    pub thread_df: u32,
    /// From so many degrees of freedom on, the laboratory's own results take the place of these.
    pub history_from_df: u32,
    /// Standard deviation of a balance's repeated readings, grams, where nothing else is stated for it.
    pub balance_repeatability_g: f64,
    /// Largest departure of a balance from a straight line, grams, where nothing else is stated for it.
    pub balance_linearity_g: f64,
}

/// By how much two results of one soil may differ, percent of their mean.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Precision {
    /// Liquid limit, one operator.
    pub liquid_one_operator_percent: f64,
    /// Liquid limit, two laboratories.
    pub liquid_two_laboratories_percent: f64,
    /// Plastic limit, one operator.
    pub plastic_one_operator_percent: f64,
    /// Plastic limit, two laboratories.
    pub plastic_two_laboratories_percent: f64,
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

/// Liquid limit. What only the cup has is left out by a cone method.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Liquid {
    /// How the limit follows from the trials.
    pub how: LiquidHow,
    /// Trials that are needed.
    pub trials: u32,
    /// Drop windows, each of which wants a trial of its own; a window that stands twice wants two.
    /// With `one-point`: where every trial must lie.
    #[serde(default)]
    pub windows: Vec<[u32; 2]>,
    /// Drops that any trial may have.
    #[serde(default)]
    pub drops: [u32; 2],
    /// Least difference between the largest and the smallest number of drops.
    #[serde(default)]
    pub spread_at_least: Option<u32>,
    /// Trials must lie on both sides of 25 drops.
    #[serde(default)]
    pub both_sides: bool,
    /// Drop rate, drops per second, from–to.
    #[serde(default)]
    pub rate_per_s: [f64; 2],
    /// Length over which the groove closes, millimetres.
    #[serde(default)]
    pub closure_mm: f64,
    /// Successive closures of one paste may differ by this many drops.
    #[serde(default)]
    pub closures_within: u32,
    /// Which closure counts.
    #[serde(default)]
    pub closure_counts: ClosureCounts,
    /// Exponent of the one-point formula `LL = w · (N/25)^exponent`.
    #[serde(default)]
    pub exponent: Option<f64>,
    /// Exponent in its place where the limit comes to 50 % or more by the first.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub exponent_from_50_percent: Option<f64>,
    /// What the balance must show at least, grams.
    pub balance_reads_g: f64,
    /// Wet soil of a slice, grams, at least.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub mass_from_g: Option<f64>,
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
    /// Which soils want another temperature, for people.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub note: Option<String>,
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
