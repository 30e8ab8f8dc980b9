//! A method's own contradictions, found when its file is read.

use super::windows::MOST_WINDOWS;
use crate::method::{Device, LiquidHow, Method};
use alloc::borrow::ToOwned;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// More decimals than this in a reported limit are a mistake.
const MOST_DECIMALS: u32 = 3;
/// More trials or containers than this are a mistake.
const MOST_TRIALS: u32 = 100;

type Faults = Vec<(String, String)>;

impl Method {
    /// What is wrong with the method itself: key path and a sentence with the
    /// remedy. Empty for a method that can be worked by.
    pub fn faults(&self) -> Vec<(String, String)> {
        let mut faults = Faults::new();
        self.liquid_counts(&mut faults);
        match self.device() {
            Device::Cup => self.liquid_windows(&mut faults),
            Device::Cone => self.no_cup(&mut faults),
        }
        self.cone(&mut faults);
        self.exponent(&mut faults);
        self.severities(&mut faults);
        self.ranges(&mut faults);
        self.positive(&mut faults);
        self.sources(&mut faults);
        faults
    }

    fn liquid_counts(&self, faults: &mut Faults) {
        let liquid = &self.liquid;
        let least = if liquid.how == LiquidHow::OnePoint { 1 } else { 2 };
        if !(least..=MOST_TRIALS).contains(&liquid.trials) {
            fault(faults, "liquid.trials", format!("{} trials: write a number from {least} to {MOST_TRIALS}", liquid.trials));
        }
        if liquid.how == LiquidHow::FlowLine && (liquid.trials as usize) < liquid.windows.len() {
            let says = format!(
                "{} trials cannot fill {} windows, each of which wants one of its own: raise it",
                liquid.trials,
                liquid.windows.len()
            );
            fault(faults, "liquid.trials", says);
        }
        if !(1..=MOST_TRIALS).contains(&self.plastic.containers) {
            let says = format!("{} containers: write a number from 1 to {MOST_TRIALS}", self.plastic.containers);
            fault(faults, "plastic.containers", says);
        }
        if self.rounding.decimals > MOST_DECIMALS {
            let says = format!("{} decimals: write a number from 0 to {MOST_DECIMALS}", self.rounding.decimals);
            fault(faults, "rounding.decimals", says);
        }
    }

    fn liquid_windows(&self, faults: &mut Faults) {
        let [low, high] = self.liquid.drops;
        if [low, high] == [0, 0] {
            let says = "nothing is said of the drops that a trial may have: add drops = [FROM, TO]";
            fault(faults, "liquid.drops", says.to_owned());
        } else if low == 0 || low >= high {
            let says = format!("from {low} to {high} drops is no range: write the smaller first, 1 or more");
            fault(faults, "liquid.drops", says);
        }
        if self.liquid.windows.len() > MOST_WINDOWS {
            let says = format!("{} windows: at most {MOST_WINDOWS} are looked at", self.liquid.windows.len());
            fault(faults, "liquid.windows", says);
        }
        for [from, to] in self.liquid.windows.iter().take(MOST_WINDOWS) {
            if from >= to {
                fault(
                    faults,
                    "liquid.windows",
                    format!("the window {from} to {to} is reversed or empty: write the smaller first"),
                );
            } else if *from < low || *to > high {
                let says = format!(
                    "the window {from} to {to} lies outside the permitted drops {low} to {high}: widen `drops` or mend the window"
                );
                fault(faults, "liquid.windows", says);
            }
        }
        if let Some(spread) = self.liquid.spread_at_least.filter(|&s| s > high.saturating_sub(low)) {
            let says = format!("a spread of {spread} does not fit between {low} and {high} drops: lower it or widen `drops`");
            fault(faults, "liquid.spread_at_least", says);
        }
        if self.liquid.both_sides && !(low < 25 && high > 25) {
            let says = format!("trials on both sides of 25 cannot lie within {low} to {high} drops: widen `drops`");
            fault(faults, "liquid.both_sides", says);
        }
    }

    /// A cone method says nothing of drops.
    fn no_cup(&self, faults: &mut Faults) {
        let liquid = &self.liquid;
        for (key, set) in [
            ("liquid.drops", liquid.drops != [0, 0]),
            ("liquid.windows", !liquid.windows.is_empty()),
            ("liquid.spread_at_least", liquid.spread_at_least.is_some()),
            ("liquid.both_sides", liquid.both_sides),
            ("liquid.rate_per_s", liquid.rate_per_s != [0.0, 0.0]),
            ("liquid.closure_mm", liquid.closure_mm != 0.0),
            ("liquid.closures_within", liquid.closures_within != 0),
        ] {
            if set {
                fault(
                    faults,
                    key,
                    "the method uses the cone, which has no drops: leave it out, or set it under [cone]".to_owned(),
                );
            }
        }
    }

    fn cone(&self, faults: &mut Faults) {
        let cone = match (self.device(), &self.cone) {
            (Device::Cup, None) => return,
            (Device::Cup, Some(_)) => {
                let says = "the method uses the cup: leave [cone] out, or write how = \"cone\" under [liquid]";
                return fault(faults, "cone", says.to_owned());
            }
            (Device::Cone, None) => {
                return fault(faults, "liquid.how", "a cone method says which cone: add [cone] with its numbers".to_owned());
            }
            (Device::Cone, Some(cone)) => cone,
        };
        for (key, value) in [
            ("cone.mass_g", cone.mass_g),
            ("cone.angle_degrees", cone.angle_degrees),
            ("cone.at_mm", cone.at_mm),
            ("cone.repeat_within_mm", cone.repeat_within_mm),
            ("cone.gauge_reads_mm", cone.gauge_reads_mm),
        ] {
            if !(value > 0.0 && value.is_finite()) {
                fault(faults, key, format!("{value} makes no sense here: write a number above 0"));
            }
        }
        if cone.angle_degrees >= 180.0 {
            fault(faults, "cone.angle_degrees", format!("{} degrees is no cone: write an angle below 180", cone.angle_degrees));
        }
        let [low, high] = cone.range_mm;
        if !(low > 0.0 && low < high && high.is_finite()) {
            let says = format!("from {low} to {high} mm is no range: write the smaller first, above 0");
            fault(faults, "cone.range_mm", says);
        } else if !(low < cone.at_mm && cone.at_mm < high) {
            let says = format!(
                "the limit is read at {} mm, which does not lie within the permitted {low} to {high} mm: mend one of the two",
                cone.at_mm
            );
            fault(faults, "cone.at_mm", says);
        }
        if !(1..=MOST_TRIALS).contains(&cone.repeats) {
            let says = format!("{} penetrations of a paste: write a number from 1 to {MOST_TRIALS}", cone.repeats);
            fault(faults, "cone.repeats", says);
        }
    }

    fn severities(&self, faults: &mut Faults) {
        for name in self.severity.keys().filter(|k| !WEIGHED.contains(&k.as_str())) {
            let says = format!("no check of this name may weigh otherwise: write one of {}", WEIGHED.join(", "));
            fault(faults, &format!("severity.{name}"), says);
        }
    }

    fn exponent(&self, faults: &mut Faults) {
        match (self.liquid.how, self.liquid.exponent) {
            (LiquidHow::OnePoint, None) => {
                fault(faults, "liquid.exponent", "the one-point formula needs an exponent: add it".to_owned());
            }
            (LiquidHow::FlowLine | LiquidHow::Cone, Some(_)) => {
                fault(faults, "liquid.exponent", "a line has no use for an exponent: leave it out".to_owned());
            }
            (LiquidHow::OnePoint, Some(e)) if !(e > 0.0 && e < 1.0) => {
                fault(
                    faults,
                    "liquid.exponent",
                    format!("{e} is no exponent of the one-point formula: write a number between 0 and 1"),
                );
            }
            _ => {}
        }
        let wetter = self.liquid.exponent_from_50_percent;
        if wetter.is_some() && self.liquid.exponent.is_none() {
            let says = "the method has no exponent that this one could take the place of: leave it out";
            fault(faults, "liquid.exponent_from_50_percent", says.to_owned());
        } else if let Some(e) = wetter.filter(|e| !(*e > 0.0 && *e < 1.0)) {
            let says = format!("{e} is no exponent of the one-point formula: write a number between 0 and 1");
            fault(faults, "liquid.exponent_from_50_percent", says);
        }
    }

    fn ranges(&self, faults: &mut Faults) {
        let rate = (self.device() == Device::Cup).then_some(("liquid.rate_per_s", self.liquid.rate_per_s));
        for (key, [low, high]) in rate
            .into_iter()
            .chain(self.liquid.paste_water_percent.map(|range| ("liquid.paste_water_percent", range)))
            .chain([("plastic.thread_mm", self.plastic.thread_mm), ("drying.oven_celsius", self.drying.oven_celsius)])
        {
            if !(low > 0.0 && low <= high && high.is_finite()) {
                fault(faults, key, format!("from {low} to {high} is no range: write two numbers above 0, the smaller first"));
            }
        }
    }

    fn positive(&self, faults: &mut Faults) {
        let (unsure, precision) = (self.uncertainty.as_ref(), self.precision.as_ref());
        for (key, value) in [
            ("liquid.closure_mm", (self.device() == Device::Cup).then_some(self.liquid.closure_mm)),
            ("liquid.mass_from_g", self.liquid.mass_from_g),
            ("uncertainty.residual_sd", unsure.map(|u| u.residual_sd)),
            ("uncertainty.residual_df", unsure.map(|u| f64::from(u.residual_df))),
            ("uncertainty.thread_sd", unsure.map(|u| u.thread_sd)),
            ("uncertainty.thread_df", unsure.map(|u| f64::from(u.thread_df))),
            ("uncertainty.history_from_df", unsure.map(|u| f64::from(u.history_from_df))),
            ("precision.liquid_one_operator_percent", precision.map(|p| p.liquid_one_operator_percent)),
            ("precision.liquid_two_laboratories_percent", precision.map(|p| p.liquid_two_laboratories_percent)),
            ("precision.plastic_one_operator_percent", precision.map(|p| p.plastic_one_operator_percent)),
            ("precision.plastic_two_laboratories_percent", precision.map(|p| p.plastic_two_laboratories_percent)),
            ("liquid.balance_reads_g", Some(self.liquid.balance_reads_g)),
            ("liquid.slope_per_decade", self.liquid.slope_per_decade),
            ("liquid.slope_sd", self.liquid.slope_sd),
            ("plastic.mass_from_g", self.plastic.mass_from_g),
            ("plastic.agree_within_percent", self.plastic.agree_within_percent),
            ("drying.hours", Some(self.drying.hours)),
            ("drying.constant_percent", Some(self.drying.constant_percent)),
            ("drying.constant_hours", Some(self.drying.constant_hours)),
        ] {
            if let Some(value) = value.filter(|v| !(*v > 0.0 && v.is_finite())) {
                fault(faults, key, format!("{value} makes no sense here: write a number above 0"));
            }
        }
        for (key, value) in [
            ("uncertainty.balance_repeatability_g", unsure.map(|u| u.balance_repeatability_g)),
            ("uncertainty.balance_linearity_g", unsure.map(|u| u.balance_linearity_g)),
        ] {
            if let Some(value) = value.filter(|v| !(*v >= 0.0 && v.is_finite())) {
                fault(faults, key, format!("{value} makes no sense here: write 0 or a number above it"));
            }
        }
    }

    fn sources(&self, faults: &mut Faults) {
        let numbers = self.numbers();
        for key in &numbers {
            if self.source.get(*key).is_none_or(|s| s.trim().is_empty()) {
                fault(faults, key, format!("the number has no source: add \"{key}\" = \"where it comes from\" under [source]"));
            }
        }
        for key in self.source.keys().filter(|k| !numbers.contains(&k.as_str()) && !CHOICES.contains(&k.as_str())) {
            fault(
                faults,
                &format!("source.{key}"),
                format!("a source for {key}, which the method does not set: mend the name or leave it out"),
            );
        }
    }

    /// Key paths of every number that this method sets.
    pub fn numbers(&self) -> Vec<&'static str> {
        let optional = [
            ("liquid.windows", !self.liquid.windows.is_empty()),
            ("liquid.spread_at_least", self.liquid.spread_at_least.is_some()),
            ("liquid.exponent", self.liquid.exponent.is_some()),
            ("liquid.exponent_from_50_percent", self.liquid.exponent_from_50_percent.is_some()),
            ("liquid.mass_from_g", self.liquid.mass_from_g.is_some()),
            ("liquid.slope_per_decade", self.liquid.slope_per_decade.is_some()),
            ("liquid.slope_sd", self.liquid.slope_sd.is_some()),
            ("liquid.paste_water_percent", self.liquid.paste_water_percent.is_some()),
            ("plastic.mass_from_g", self.plastic.mass_from_g.is_some()),
            ("plastic.agree_within_percent", self.plastic.agree_within_percent.is_some()),
        ];
        let set = optional.into_iter().filter(|(_, set)| *set).map(|(key, _)| key);
        let groups: [(bool, &[&str]); 4] = [
            (self.device() == Device::Cup, &OF_THE_CUP),
            (self.cone.is_some(), &OF_THE_CONE),
            (self.uncertainty.is_some(), &OF_UNCERTAINTY),
            (self.precision.is_some(), &OF_PRECISION),
        ];
        let groups = groups.into_iter().filter(|(set, _)| *set).flat_map(|(_, keys)| keys.iter().copied());
        ALWAYS.iter().copied().chain(groups).chain(set).collect()
    }
}

/// Numbers that every method sets.
const ALWAYS: [&str; 9] = [
    "liquid.trials",
    "liquid.balance_reads_g",
    "plastic.thread_mm",
    "plastic.containers",
    "drying.hours",
    "drying.constant_percent",
    "drying.constant_hours",
    "drying.oven_celsius",
    "rounding.decimals",
];

/// Numbers that every method with the cup sets …
const OF_THE_CUP: [&str; 4] = ["liquid.drops", "liquid.rate_per_s", "liquid.closure_mm", "liquid.closures_within"];

/// … and every one with the cone.
const OF_THE_CONE: [&str; 7] = [
    "cone.mass_g",
    "cone.angle_degrees",
    "cone.at_mm",
    "cone.range_mm",
    "cone.repeats",
    "cone.repeat_within_mm",
    "cone.gauge_reads_mm",
];

const OF_UNCERTAINTY: [&str; 7] = [
    "uncertainty.residual_sd",
    "uncertainty.residual_df",
    "uncertainty.thread_sd",
    "uncertainty.thread_df",
    "uncertainty.history_from_df",
    "uncertainty.balance_repeatability_g",
    "uncertainty.balance_linearity_g",
];

const OF_PRECISION: [&str; 4] = [
    "precision.liquid_one_operator_percent",
    "precision.liquid_two_laboratories_percent",
    "precision.plastic_one_operator_percent",
    "precision.plastic_two_laboratories_percent",
];

/// Checks whose weight a method may say. What is missing or impossible is so in every method.
const WEIGHED: [&str; 43] = [
    "arithmetic",
    "balance_failed",
    "balance_overdue",
    "balances",
    "both_sides",
    "closures",
    "coarse_balance",
    "cone",
    "constant_mass",
    "cup",
    "display",
    "drift",
    "drops",
    "exchanged",
    "gaps",
    "interrupted",
    "left_on_pan",
    "lid",
    "nobody",
    "non_plastic",
    "not_dry",
    "organic",
    "oven_clock",
    "oven_record",
    "penetration_range",
    "penetrations",
    "rate",
    "same_container",
    "same_masses",
    "scatter",
    "single_penetration",
    "slope",
    "small_mass",
    "spread",
    "stood_dry",
    "stood_wet",
    "tare_changed",
    "threads",
    "typed",
    "u_line",
    "warm",
    "window",
    "zero",
];

/// Choices, which may have a source too.
const CHOICES: [&str; 9] = [
    "liquid.how",
    "liquid.both_sides",
    "liquid.closure_counts",
    "cone.axes",
    "cone.both_sides",
    "drying.note",
    "rounding.tie",
    "rounding.index_from",
    "non_plastic.compare",
];

fn fault(faults: &mut Faults, key: &str, says: String) {
    faults.push((key.to_owned(), says));
}
