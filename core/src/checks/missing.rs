//! What is not there yet. Keeps the result provisional.

use super::{LIQUID_LIMIT, NATURAL_WATER, PLASTIC_LIMIT, Worked, container_text, count_text, facts, list_text, note};
use crate::fact::Intention;
use crate::limits::CheckRow;
use crate::method::Device;
use crate::sheet::{Kind, Trial};
use crate::soil::determined::{Determined, Water};
use crate::soil::limits::{liquid_trials_needed, threads_needed};
use alloc::borrow::ToOwned;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active() {
        let lacks = lacks(t);
        if !lacks.is_empty() {
            let says = format!("{} still missing for {}; {}.", list_text(&lacks), container_text(t.trial), next(t.trial));
            rows.push(note("missing", &t.about, says, facts(t.trial)));
        }
    }
    liquid_limit(worked, rows);
    plastic_limit(worked, rows);
    natural_water(worked, rows);
}

/// What a determination lacks, apart from a tare owed, which has its own check.
fn lacks(t: &Determined) -> Vec<String> {
    let mut lacks = Vec::new();
    if t.trial.kind == Kind::Liquid && t.trial.closures.is_empty() {
        lacks.push("the count of drops".to_owned());
    }
    if t.trial.kind == Kind::Cone && t.trial.penetrations.is_empty() {
        lacks.push("the penetration of the cone".to_owned());
    }
    if t.water == Water::Open {
        if t.trial.wet.is_none() {
            lacks.push("the wet mass".to_owned());
        }
        if t.trial.dry.is_empty() {
            lacks.push("the dry mass".to_owned());
        }
        if t.trial.wet.is_none() && t.trial.tare.is_none() {
            lacks.push("the mass of the empty container".to_owned());
        }
    }
    lacks
}

fn next(trial: &Trial) -> &'static str {
    if trial.wet.is_some() && trial.dry.is_empty() {
        "dry it in the oven, cool it with the lid on and weigh it"
    } else {
        "complete it or set the determination aside"
    }
}

fn liquid_limit(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let (sheet, begun) = (worked.sheet, worked.of(worked.method.limit_kind()).count());
    let spared = begun == 0 && (sheet.plastic_not_obtainable.is_some() || !sheet.wants(Intention::Liquid));
    if sheet.liquid_not_obtainable.is_some() || spared {
        return;
    }
    let needed = liquid_trials_needed(worked.method);
    let finished = worked.trials.iter().filter(|t| t.liquid_point().is_some()).count();
    if finished < needed {
        let (what, rest) = match worked.method.device() {
            Device::Cup => ("liquid trial", "count and take a slice for the rest"),
            Device::Cone => ("cone trial", "read the cone and take a slice for the rest"),
        };
        let next = if begun >= needed { "finish those that are begun" } else { rest };
        let says = format!(
            "{finished} of the method's {} finished, {begun} begun; {next}, or state that the limit cannot be obtained.",
            count_text(needed, what)
        );
        rows.push(note("missing", LIQUID_LIMIT, says, worked.facts_of(worked.method.limit_kind())));
    }
}

fn plastic_limit(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let (sheet, begun) = (worked.sheet, worked.of(Kind::Thread).count());
    let spared = begun == 0 && (sheet.liquid_not_obtainable.is_some() || !sheet.wants(Intention::Plastic));
    if sheet.plastic_not_obtainable.is_some() || spared {
        return;
    }
    let needed = threads_needed(worked.method);
    let finished = worked.of(Kind::Thread).filter(|t| t.water().is_some()).count();
    if finished < needed {
        let next = if begun >= needed { "finish those that are begun" } else { "roll threads for the rest" };
        let says = format!(
            "{finished} of the method's {} of threads finished, {begun} begun; {next}, or state that the limit cannot be obtained.",
            count_text(needed, "container")
        );
        rows.push(note("missing", PLASTIC_LIMIT, says, worked.facts_of(Kind::Thread)));
    }
}

fn natural_water(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let finished = worked.of(Kind::Natural).any(|t| t.water().is_some());
    if !worked.sheet.wants(Intention::Natural) || finished {
        return;
    }
    let next = match worked.of(Kind::Natural).next() {
        Some(_) => "finish what is begun",
        None => "weigh some of the soil as it came",
    };
    let says = format!("the natural water content is wanted and not determined yet; {next}.");
    rows.push(note("missing", NATURAL_WATER, says, worked.facts_of(Kind::Natural)));
}
