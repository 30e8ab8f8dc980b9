//! Method files: a test method's numbers as data, shipped ones and the laboratory's own.

use crate::embedded;
use crate::fault::Faults;
use crate::reader::{Table, read};
use serde::Deserialize;
use std::borrow::Cow;
use std::collections::BTreeMap;
use std::sync::OnceLock;
use tarecup_core::method::{LiquidHow, Method};
use tarecup_core::names::MethodName;
use toml::Spanned;
use toml::de::DeValue;

/// Methods by name.
pub type Methods = BTreeMap<MethodName, Method>;

/// The methods that come with the program.
///
/// # Errors
/// Only when a shipped file is broken, which a test excludes.
pub fn shipped() -> Result<Methods, Faults> {
    static SHIPPED: OnceLock<Result<Methods, Faults>> = OnceLock::new();
    let read = || embedded::METHODS.iter().map(|(file, text)| parse(file, text).map(|m| (m.name.clone(), m))).collect();
    SHIPPED.get_or_init(read).clone()
}

/// Reads a method file: the keys of one method at the top level.
///
/// # Errors
/// What is wrong, with its place; a method that contradicts itself is refused too.
pub fn parse(file: &str, text: &str) -> Result<Method, Faults> {
    read(file, text, |table| method(table, None))
}

/// Reads the method in a table. In the configuration file its name is the table's: `[method.NAME]`.
pub(crate) fn method(table: &Table<'_>, name: Option<&MethodName>) -> Option<Method> {
    let mut tree = table.to_tree();
    if let Some(name) = name {
        if let Some(entry) = table.get("name") {
            entry.fault_of_key(
                "is given twice: the table's own name is the method's",
                "no name key here",
                "taking this line out",
            );
            return None;
        }
        let at = table.at..table.at;
        let value = Spanned::new(at.clone(), DeValue::String(Cow::Owned(name.as_str().into())));
        tree.as_mut().insert(Spanned::new(at, Cow::Borrowed("name")), value);
    }
    let method = match Method::deserialize(toml::Deserializer::from(tree)) {
        Ok(method) => method,
        Err(e) => {
            table.refuse(&e, "method");
            return None;
        }
    };
    let contradictions = contradictions(&method);
    for (key, says) in &contradictions {
        let path = table.path(key);
        let try_this = "correcting one of the two, or starting again from a shipped method";
        table.fault_at(table.locate(key), &path, says, "a method that does not contradict itself", try_this);
    }
    contradictions.is_empty().then_some(method)
}

/// Key path and words for every pair of numbers that cannot both hold.
fn contradictions(m: &Method) -> Vec<(String, String)> {
    let mut found = Vec::new();
    let mut say = |key: &str, wrong: bool, says: &str| {
        if wrong {
            found.push((key.to_string(), says.to_string()));
        }
    };
    let upside_down = |[from, to]: [f64; 2]| !(from.is_finite() && to.is_finite() && from > 0.0 && from <= to);
    let not_positive = |v: f64| !(v.is_finite() && v > 0.0);
    let (l, p, d) = (&m.liquid, &m.plastic, &m.drying);
    say("title", m.title.trim().is_empty(), "is empty");
    say("edition", m.edition.trim().is_empty(), "is empty");
    say("liquid.drops", l.drops[0] == 0 || l.drops[0] > l.drops[1], "does not run from a smaller to a larger number of drops");
    let outside = |w: &[u32; 2]| w[0] > w[1] || w[0] < l.drops[0] || w[1] > l.drops[1];
    say("liquid.windows", l.windows.iter().any(outside), "has a window that runs backwards or lies outside liquid.drops");
    let (windows, trials) = (u32::try_from(l.windows.len()).unwrap_or(u32::MAX), l.trials);
    let line = l.how == LiquidHow::FlowLine;
    say("liquid.trials", trials == 0 || trials > 50, "is not between 1 and 50");
    say("liquid.trials", line && trials == 1, "is 1, and a line needs two trials at least");
    say("liquid.trials", line && windows > trials, "is less than the number of liquid.windows, each of which wants a trial");
    say("liquid.exponent", !line && l.exponent.is_none(), "is missing, and the one-point formula needs it");
    say("liquid.exponent", l.exponent.is_some_and(|e| not_positive(e) || e >= 1.0), "is not between 0 and 1");
    let widest = l.drops[1].saturating_sub(l.drops[0]);
    say("liquid.spread_at_least", l.spread_at_least.is_some_and(|s| s > widest), "is more than liquid.drops can spread");
    say(
        "liquid.both_sides",
        l.both_sides && !(l.drops[0] < 25 && l.drops[1] > 25),
        "is asked for, but liquid.drops lies on one side of 25",
    );
    say("liquid.rate_per_s", upside_down(l.rate_per_s), "does not run from a smaller to a larger number above 0");
    say("liquid.closure_mm", not_positive(l.closure_mm), "is not above 0");
    say("liquid.balance_reads_g", not_positive(l.balance_reads_g), "is not above 0");
    say("plastic.thread_mm", upside_down(p.thread_mm), "does not run from a smaller to a larger number above 0");
    say("plastic.containers", p.containers == 0 || p.containers > 50, "is not between 1 and 50");
    say("plastic.mass_from_g", p.mass_from_g.is_some_and(not_positive), "is not above 0");
    say("plastic.agree_within_percent", p.agree_within_percent.is_some_and(not_positive), "is not above 0");
    say("drying.hours", not_positive(d.hours), "is not above 0");
    say("drying.constant_percent", not_positive(d.constant_percent), "is not above 0");
    say("drying.constant_hours", not_positive(d.constant_hours), "is not above 0");
    say("drying.oven_celsius", upside_down(d.oven_celsius), "does not run from a smaller to a larger number above 0");
    say("rounding.decimals", m.rounding.decimals > 6, "is more than 6");
    found
}
