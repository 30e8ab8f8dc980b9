//! Checks: one file each. A check looks at what was worked and speaks in plain
//! words: what is the matter and what to do next.
//!
//! A *note* is worth knowing. A *hold* keeps the result provisional until a
//! person answers it. What is simply not there yet is a note named `missing`
//! or `tare_owed`, and keeps the result provisional until it comes; no answer
//! replaces a mass. No check ever leaves a trial out.

mod arithmetic;
mod balances;
mod closures;
mod cone;
mod constant_mass;
mod display;
mod drops;
mod drying;
mod exchanged;
mod fit;
mod gaps;
mod interrupted;
mod leftover;
mod lid;
mod line;
mod masses;
mod method;
mod missing;
mod nobody;
mod non_plastic;
mod not_obtainable;
mod organic;
mod outlier;
mod oven_record;
mod pairing;
mod pan;
mod rate;
mod same_container;
mod scatter;
mod shares;
mod slope;
mod small_mass;
mod spread;
mod standing;
mod steep;
mod tare_owed;
mod tares;
mod threads;
mod typed;
mod u_line;
pub(crate) mod windows;

pub use windows::missing as windows_missing;

use crate::limits::{CheckRow, LiquidLimit, PlasticLimit, PlasticityIndex, Severity};
use crate::method::Method;
use crate::sheet::{Kind, Seq, Sheet, Trial};
use crate::soil::determined::Determined;
use crate::soil::flow::FlowLine;
use crate::soil::limits::NoLiquid;
use crate::soil::uncertainty::Laboratory;
use alloc::borrow::ToOwned;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// What a check is about when it is about the liquid limit.
pub const LIQUID_LIMIT: &str = "liquid limit";
/// … the plastic limit.
pub const PLASTIC_LIMIT: &str = "plastic limit";
/// … the plasticity index.
pub const PLASTICITY_INDEX: &str = "plasticity index";
/// … the natural water content.
pub const NATURAL_WATER: &str = "natural water content";
/// … the specimen as a whole.
pub const SPECIMEN: &str = "specimen";

/// Everything a check may look at.
#[derive(Clone, Copy)]
pub struct Worked<'a> {
    /// The sheet.
    pub sheet: &'a Sheet,
    /// The method.
    pub method: &'a Method,
    /// Its determinations, in order.
    pub trials: &'a [Determined<'a>],
    /// The liquid limit, if there is one …
    pub liquid: Option<&'a LiquidLimit>,
    /// … and else why not.
    pub no_liquid: Option<NoLiquid>,
    /// The flow line, if the method draws one.
    pub line: Option<FlowLine>,
    /// The plastic limit, if there is one.
    pub plastic: Option<&'a PlasticLimit>,
    /// The plasticity index.
    pub index: &'a PlasticityIndex,
    /// What the laboratory's own record says. It moves with every finished specimen: no hold may rest on it.
    pub laboratory: &'a Laboratory,
}

/// Every check, in the order in which a person works: what is missing, single
/// determinations, the limits, the record.
const ALL: &[fn(&Worked, &mut Vec<CheckRow>)] = &[
    missing::check,
    tare_owed::check,
    tares::check,
    masses::check,
    arithmetic::check,
    pan::check,
    balances::check,
    interrupted::check,
    drops::check,
    rate::check,
    gaps::check,
    closures::check,
    drying::check,
    constant_mass::check,
    standing::check,
    small_mass::check,
    display::check,
    line::check,
    slope::check,
    scatter::check,
    exchanged::check,
    lid::check,
    steep::check,
    windows::check,
    spread::check,
    threads::check,
    outlier::check,
    not_obtainable::check,
    non_plastic::check,
    u_line::check,
    pairing::check,
    organic::check,
    cone::check,
    same_container::check,
    leftover::check,
    shares::check,
    oven_record::check,
    typed::check,
    nobody::check,
];

/// Runs every check, weighs it as the method says and puts persons' answers to them.
pub fn all(worked: &Worked) -> Vec<CheckRow> {
    let mut rows = Vec::new();
    for check in ALL {
        check(worked, &mut rows);
    }
    for row in &mut rows {
        if let Some(severity) = worked.method.severity.get(&row.check) {
            row.severity = *severity;
        }
        let answer = worked.sheet.answers.iter().rev().find(|a| a.check == row.check && a.about == row.about);
        row.answered = answer.map(|a| a.says.clone());
    }
    rows
}

/// Checks that, although notes, keep a result provisional: something is not there.
pub fn keeps_provisional(check: &str) -> bool {
    matches!(check, "missing" | "tare_owed")
}

/// Checks that look at other specimens: only ever notes, and no reason to change a result that stands.
pub fn rests_on_the_record(row: &CheckRow) -> bool {
    let looks = matches!(
        row.check.as_str(),
        "scatter" | "outlier" | "steep" | "threads_apart" | "pairing" | "left_over" | "exchanged_across"
    );
    looks && row.severity == Severity::Note
}

impl<'a> Worked<'a> {
    /// Determinations that count.
    fn active(&self) -> impl Iterator<Item = &'a Determined<'a>> + use<'a> {
        self.trials.iter().filter(|t| t.active)
    }
    /// Determinations of a kind that count.
    fn of(&self, kind: Kind) -> impl Iterator<Item = &'a Determined<'a>> + use<'a> {
        self.active().filter(move |t| t.trial.kind == kind)
    }
    /// Facts under every determination of a kind that counts.
    fn facts_of(&self, kind: Kind) -> Vec<Seq> {
        in_order(self.of(kind).flat_map(|t| facts(t.trial)).collect())
    }
}

/// Facts a determination rests on.
fn facts(trial: &Trial) -> Vec<Seq> {
    let closures = trial.closures.iter().filter_map(|c| c.fact);
    let penetrations = trial.penetrations.iter().filter_map(|p| p.fact);
    let dry = trial.dry.iter().filter_map(|d| d.fact);
    in_order(trial.facts.iter().copied().chain(closures).chain(penetrations).chain(dry).collect())
}

fn in_order(mut facts: Vec<Seq>) -> Vec<Seq> {
    facts.sort_unstable();
    facts.dedup();
    facts
}

fn note(check: &str, about: &str, says: String, facts: Vec<Seq>) -> CheckRow {
    CheckRow { check: check.to_owned(), severity: Severity::Note, about: about.to_owned(), says, answered: None, facts }
}

fn hold(check: &str, about: &str, says: String, facts: Vec<Seq>) -> CheckRow {
    CheckRow { severity: Severity::Hold, ..note(check, about, says, facts) }
}

/// A number of drops as people write it: whole, or with one decimal for a mean.
fn drops_text(drops: f64) -> String {
    if libm::trunc(drops) == drops { format!("{drops:.0}") } else { format!("{drops:.1}") }
}

/// The container of a trial, for a sentence.
fn container_text(trial: &Trial) -> String {
    trial.container.as_ref().map_or_else(|| "its container".to_owned(), |c| format!("container {c}"))
}

/// `1 trial`, `3 trials`.
fn count_text(n: usize, what: &str) -> String {
    if n == 1 { format!("1 {what}") } else { format!("{n} {what}s") }
}

/// `a, b and c`.
fn list_text(items: &[String]) -> String {
    match items {
        [] => String::new(),
        [one] => one.clone(),
        [most @ .., last] => format!("{} and {last}", most.join(", ")),
    }
}
