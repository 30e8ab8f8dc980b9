//! From a specimen's state to its result.

use super::entities::{Count, Entity, Specimen, TrialRecord, Weighing};
use super::statistics::Statistics;
use super::{Lab, New, Outcome, oven};
use crate::beside::{Beside, BesideTrial};
use crate::checks::rests_on_the_record;
use crate::evaluate::evaluate_with;
use crate::fact::{Counted, Fact, Limit, Recorded};
use crate::limits::{Limits, State};
use crate::method::Method;
use crate::quantity::Mass;
use crate::sheet::{Answer, Closure, Kind, Penetration, Reading, Sheet, Trial};
use crate::soil::determined::about;
use crate::soil::uncertainty::Laboratory;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

impl Lab {
    /// Results that have changed with what was just applied.
    pub(super) fn follow(&self, outcome: &Outcome) -> Vec<New> {
        let specimens = outcome.touched.iter().filter_map(|e| match e {
            Entity::Specimen(id) => self.specimens.get(id),
            _ => None,
        });
        let causes: Vec<String> = outcome.facts.iter().filter_map(cause).collect();
        specimens.filter_map(|s| self.new_result(s, &causes)).map(New::plain).collect()
    }

    fn new_result(&self, specimen: &Specimen, causes: &[String]) -> Option<Fact> {
        let method = self.setup.methods.get(&specimen.method)?;
        let sheet = self.sheet_of(specimen);
        let stated = sheet.liquid_not_obtainable.is_some() || sheet.plastic_not_obtainable.is_some();
        // Once there was a result, the specimen must not keep it when its determinations go.
        if sheet.trials.is_empty() && !stated && specimen.limits.is_none() {
            return None;
        }
        let mut limits = evaluate_with(&sheet, method, &self.record_without(specimen, method));
        limits.edition.clone_from(&specimen.edition);
        // What stands keeps the uncertainty it was told with: another specimen is no reason to change it.
        if let Some(old) = specimen.limits.as_ref().filter(|old| same_content(old, &limits)) {
            limits = Limits { state: limits.state, ..old.clone() };
        }
        let reviewed = specimen.reviewed.as_ref().is_some_and(|(of, _)| *of == specimen.revision);
        if reviewed && limits.state == State::Complete && specimen.limits.as_ref().is_some_and(|old| same_content(old, &limits)) {
            limits.state = State::Reviewed;
        }
        if specimen.limits.as_ref() == Some(&limits) {
            return None;
        }
        let changed = changes(specimen.limits.as_ref(), &limits, causes);
        Some(Fact::LimitsComputed {
            specimen: specimen.id.clone(),
            revision: specimen.revision + 1,
            changed,
            limits: alloc::boxed::Box::new(limits),
        })
    }
}

impl Lab {
    /// What the laboratory's record says, this specimen left out.
    fn record_without(&self, specimen: &Specimen, method: &Method) -> Laboratory {
        let own = specimen.limits.as_ref().map_or(Statistics::default(), Statistics::of);
        let others = self.statistics.minus(own);
        Laboratory {
            lines: others.lines(method.device()).pooled(),
            threads: others.threads.pooled(),
            slopes: others.slopes,
            balances: self.setup.balances.clone(),
            pairs: others.pairs,
            beside: self.beside(specimen),
            balance_rule: self.setup.balance_rule,
        }
    }
}

/// Whether a result is the same but for its state and what the record of other specimens puts in it.
fn same_content(old: &Limits, new: &Limits) -> bool {
    let bare = |limits: &Limits| Limits { state: State::Provisional, ..without_the_record(limits.clone()) };
    bare(old) == bare(new)
}

fn without_the_record(mut limits: Limits) -> Limits {
    if let Some(limit) = &mut limits.liquid_limit {
        (limit.u, limit.interval_95, limit.u_from) = (None, None, None);
    }
    if let Some(limit) = &mut limits.plastic_limit {
        (limit.u, limit.interval_95, limit.u_from) = (None, None, None);
    }
    (limits.plasticity_index.u, limits.plasticity_index.interval_95) = (None, None);
    limits.checks.retain(|c| c.answered.is_some() || !rests_on_the_record(c));
    limits
}

/// What is different from the revision before, and which correction led to it, in words.
fn changes(old: Option<&Limits>, new: &Limits, causes: &[String]) -> Vec<String> {
    let Some(old) = old else { return Vec::new() };
    let mut words = Vec::new();
    let mut number = |name: &str, a: Option<f64>, b: Option<f64>| {
        let show = |v: Option<f64>| v.map_or(String::from("none"), |v| format!("{v:.2}"));
        if a != b {
            words.push(format!("{name}: {} → {}", show(a), show(b)));
        }
    };
    number("liquid limit", old.liquid_limit.as_ref().map(|l| l.value), new.liquid_limit.as_ref().map(|l| l.value));
    number("plastic limit", old.plastic_limit.as_ref().map(|l| l.value), new.plastic_limit.as_ref().map(|l| l.value));
    number("plasticity index", old.plasticity_index.value, new.plasticity_index.value);
    number("natural water content", old.natural_water_percent, new.natural_water_percent);
    if old.plasticity_index.non_plastic != new.plasticity_index.non_plastic {
        words.push(String::from(if new.plasticity_index.non_plastic { "now non-plastic" } else { "no longer non-plastic" }));
    }
    let aside = |l: &Limits| l.trials.iter().filter(|t| t.set_aside.is_some()).count();
    if aside(old) != aside(new) {
        words.push(format!("determinations set aside: {} → {}", aside(old), aside(new)));
    }
    if old.state != new.state {
        words.push(format!("{} → {}", state_word(old.state), state_word(new.state)));
    }
    words.extend(causes.iter().cloned());
    words
}

fn state_word(state: State) -> &'static str {
    match state {
        State::Provisional => "provisional",
        State::Complete => "complete",
        State::Reviewed => "reviewed",
    }
}

/// Why a result changed, where a person changed something that was already there.
fn cause(r: &Recorded) -> Option<String> {
    let says = match &r.fact {
        Fact::MassAmended { weighing, was, mass, why } => {
            format!("mass of weighing {weighing} corrected, {was} → {mass} g: {why}")
        }
        Fact::DropsAmended { count, was, drops, why } => format!("drops of count {count} corrected, {was} → {drops}: {why}"),
        Fact::PenetrationAmended { penetration, was_mm, penetration_mm, why } => {
            format!("penetration {penetration} corrected, {was_mm} → {penetration_mm} mm: {why}")
        }
        Fact::SetAside { what, why, .. } => format!("fact {what} set aside: {why}"),
        Fact::TrialMoved { specimen, trial, no, to, to_no, why } => {
            format!("{} of {specimen} moved to {to} as {}: {why}", about(*trial, *no), about(*trial, *to_no))
        }
        Fact::TrialSetAside { trial, no, why, .. } => format!("{} set aside: {why}", about(*trial, *no)),
        Fact::WeighingTied { weighing, link, why, .. } => format!("weighing {weighing} tied to {}: {why}", link.container),
        Fact::CountTied { count, why, .. } => format!("count {count} tied: {why}"),
        Fact::Counted(Counted { replaces: Some(old), drops, .. }) => {
            format!("the counter told count {old} again, now {drops} drops")
        }
        Fact::OvenOff { why, .. } => format!("the oven was off: {why}"),
        Fact::NotObtainable { limit: Limit::Liquid, because, .. } => format!("liquid limit not obtainable: {because}"),
        Fact::NotObtainable { limit: Limit::Plastic, because, .. } => format!("plastic limit not obtainable: {because}"),
        Fact::CheckAnswered { check, about, .. } => format!("check {check} about {about} answered"),
        _ => return None,
    };
    Some(match &r.who {
        Some(who) => format!("{says} ({who})"),
        None => says,
    })
}

/// A specimen's state as a sheet that can be computed.
pub fn sheet(specimen: &Specimen) -> Sheet {
    let answer = |a: &super::entities::CheckAnswer| Answer {
        check: a.check.clone(),
        about: a.about.clone(),
        says: a.says.clone(),
        by: a.by.clone(),
    };
    Sheet {
        specimen: specimen.id.clone(),
        trials: specimen.trials.iter().map(|t| trial(specimen, t)).collect(),
        liquid_not_obtainable: specimen.liquid_not_obtainable.as_ref().map(|s| s.why.clone()),
        plastic_not_obtainable: specimen.plastic_not_obtainable.as_ref().map(|s| s.why.clone()),
        passing_75um_percent: specimen.passing_75um_percent,
        clay_percent: specimen.clay_percent,
        liquid_limit_oven_dried: specimen.liquid_limit_oven_dried,
        answers: specimen.answers.iter().map(answer).collect(),
        reviewed: false,
        wanted: specimen.wanted.clone(),
    }
}

fn trial(specimen: &Specimen, t: &TrialRecord) -> Trial {
    let counts: Vec<&Count> =
        t.counts.iter().filter_map(|&c| specimen.count(c)).filter(|c| c.set_aside.is_none() && c.superseded.is_none()).collect();
    let wet = t.wets.last();
    let weighings = t.tare.iter().chain(&t.wets).chain(t.dries.iter().map(|d| &d.weighing));
    let typed = weighings.clone().any(|w| w.typed) || counts.iter().any(|c| c.typed);
    Trial {
        kind: t.kind,
        no: t.no,
        closures: if t.kind == Kind::Liquid { counts.iter().map(|c| closure(c)).collect() } else { Vec::new() },
        penetrations: counts.iter().filter_map(|c| penetration(c)).collect(),
        container: Some(t.container.clone()),
        tare: t.tare.as_ref().map(|w| w.mass),
        wet: wet.map(|w| w.mass),
        dry: t.dries.iter().map(oven::dry_weighing).collect(),
        water_percent: None,
        set_aside: t.set_aside.as_ref().map(|s| s.why.clone()),
        typed,
        by: wet.and_then(|w| w.by.clone()),
        balance: wet.and_then(|w| w.balance.clone()),
        readings: readings(t, &counts),
        cup: counts.last().and_then(|c| c.cup.clone()),
        at_utc_us: wet.map(|w| w.at.utc_us),
        facts: counts.iter().map(|c| c.seq).chain(weighings.map(|w| w.seq)).collect(),
    }
}

fn readings(t: &TrialRecord, counts: &[&Count]) -> [Reading; 3] {
    let [tare, mut wet, mut dry] = [t.tare.as_ref(), t.wets.last(), t.dries.last().map(|d| &d.weighing)].map(reading);
    // A slice belongs to the moment of its count; a typed one was written down at another.
    let count = counts.last().filter(|c| !c.typed);
    let slice = t.wets.first().filter(|w| !w.typed);
    wet.after_us = count.zip(slice).map(|(c, w)| w.at.since(&c.at).us);
    dry.after_us = t.dries.last().filter(|d| !d.weighing.typed).and_then(|d| d.out_us);
    [tare, wet, dry]
}

fn reading(weighing: Option<&Weighing>) -> Reading {
    weighing.map_or(Reading::default(), |w| Reading {
        balance: w.balance.clone(),
        step: w.step,
        seen: w.seen,
        checked: w.checked,
        ..Reading::default()
    })
}

impl Lab {
    /// A specimen's sheet with what its containers tell: the empty weighing before, and the lid.
    fn sheet_of(&self, specimen: &Specimen) -> Sheet {
        let mut sheet = sheet(specimen);
        for (trial, record) in sheet.trials.iter_mut().zip(&specimen.trials) {
            let (Some(container), Some(tare)) = (self.containers.get(&record.container), &record.tare) else { continue };
            let before = container.tares.iter().rev().find(|t| t.seq < tare.seq);
            trial.readings[0].before = before.map(|w| w.mass);
            let with_lid = container.with_lid.last().map(|w| w.mass - tare.mass);
            trial.readings[0].lid = container.lid.or(with_lid).filter(|lid| *lid > Mass::ZERO);
        }
        sheet
    }

    /// Specimens that are tested at the same time: open ones, and those whose soil still lies in containers.
    fn beside(&self, specimen: &Specimen) -> Vec<Beside> {
        let needed = self.needed();
        let others = self.specimens.values().filter(|s| s.id != specimen.id && (s.open() || needed.contains(&s.id)));
        others.map(beside).collect()
    }
}

fn beside(s: &Specimen) -> Beside {
    let masses = |t: &TrialRecord| {
        let dry = t.dries.last().map(|d| d.weighing.mass);
        [t.tare.as_ref().map(|w| w.mass), t.wets.last().map(|w| w.mass), dry]
    };
    let active = || s.trials.iter().filter(|t| t.set_aside.is_none());
    let row = |t: &TrialRecord| {
        let about = about(t.kind, t.no);
        BesideTrial { about, container: t.container.clone(), masses: masses(t) }
    };
    let limits = s.limits.as_ref();
    let threads = active().filter(|t| t.kind == Kind::Thread);
    Beside {
        specimen: s.id.clone(),
        trials: active().map(row).collect(),
        liquid: limits.and_then(|l| l.liquid_limit.as_ref()).map(|l| l.value),
        plastic: limits.and_then(|l| l.plastic_limit.as_ref()).map(|l| l.value),
        threads_at_utc_us: threads.flat_map(|t| &t.wets).map(|w| w.at.utc_us).max(),
    }
}

fn penetration(count: &Count) -> Option<Penetration> {
    Some(Penetration { mm: count.penetration_mm?, typed: count.typed, fact: Some(count.seq) })
}

fn closure(count: &Count) -> Closure {
    Closure {
        drops: count.drops,
        rate_per_s: count.rate_per_s,
        gaps: count.gaps,
        doubles: count.doubles,
        interrupted: count.interrupted.clone(),
        typed: count.typed,
        fact: Some(count.seq),
    }
}
