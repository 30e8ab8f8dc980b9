//! A method's own contradictions, found when its file is read.

use super::windows::MOST_WINDOWS;
use crate::method::{LiquidHow, Method};
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
        self.liquid_windows(&mut faults);
        self.exponent(&mut faults);
        self.ranges(&mut faults);
        self.positive(&mut faults);
        self.sources(&mut faults);
        faults
    }

    fn liquid_counts(&self, faults: &mut Faults) {
        let liquid = &self.liquid;
        let least = if liquid.how == LiquidHow::FlowLine { 2 } else { 1 };
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
        if low == 0 || low >= high {
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

    fn exponent(&self, faults: &mut Faults) {
        match (self.liquid.how, self.liquid.exponent) {
            (LiquidHow::OnePoint, None) => {
                fault(faults, "liquid.exponent", "the one-point formula needs an exponent: add it".to_owned());
            }
            (LiquidHow::FlowLine, Some(_)) => {
                fault(faults, "liquid.exponent", "a flow line has no use for an exponent: leave it out".to_owned());
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
    }

    fn ranges(&self, faults: &mut Faults) {
        let paste = self.liquid.paste_water_percent.map(|range| ("liquid.paste_water_percent", range));
        let always = [
            ("liquid.rate_per_s", self.liquid.rate_per_s),
            ("plastic.thread_mm", self.plastic.thread_mm),
            ("drying.oven_celsius", self.drying.oven_celsius),
        ];
        for (key, [low, high]) in always.into_iter().chain(paste) {
            if !(low > 0.0 && low <= high && high.is_finite()) {
                fault(faults, key, format!("from {low} to {high} is no range: write two numbers above 0, the smaller first"));
            }
        }
    }

    fn positive(&self, faults: &mut Faults) {
        for (key, value) in [
            ("liquid.closure_mm", Some(self.liquid.closure_mm)),
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
            ("liquid.slope_per_decade", self.liquid.slope_per_decade.is_some()),
            ("liquid.slope_sd", self.liquid.slope_sd.is_some()),
            ("liquid.paste_water_percent", self.liquid.paste_water_percent.is_some()),
            ("plastic.mass_from_g", self.plastic.mass_from_g.is_some()),
            ("plastic.agree_within_percent", self.plastic.agree_within_percent.is_some()),
        ];
        let set = optional.into_iter().filter(|(_, set)| *set).map(|(key, _)| key);
        ALWAYS.iter().copied().chain(set).collect()
    }
}

/// Numbers that every method sets.
const ALWAYS: [&str; 13] = [
    "liquid.trials",
    "liquid.drops",
    "liquid.rate_per_s",
    "liquid.closure_mm",
    "liquid.closures_within",
    "liquid.balance_reads_g",
    "plastic.thread_mm",
    "plastic.containers",
    "drying.hours",
    "drying.constant_percent",
    "drying.constant_hours",
    "drying.oven_celsius",
    "rounding.decimals",
];

/// Choices, which may have a source too.
const CHOICES: [&str; 6] =
    ["liquid.how", "liquid.both_sides", "liquid.closure_counts", "rounding.tie", "rounding.index_from", "non_plastic.compare"];

fn fault(faults: &mut Faults, key: &str, says: String) {
    faults.push((key.to_owned(), says));
}
