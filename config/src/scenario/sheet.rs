//! From a row of the file to the common form that is computed.

use super::{LiquidRow, ScenarioSpecimen, Water, Weighed};
use tarecup_core::fact::Intention;
use tarecup_core::sheet::{Closure, DryWeighing, Kind, Penetration, Sheet, Trial};

/// The sheet of one specimen, as a person typed it: no clocks, no facts, no
/// oven record. A drop rate that the file does not state stays unknown.
pub fn to_sheet(specimen: &ScenarioSpecimen) -> Sheet {
    let mut trials = Vec::new();
    for (no, row) in (1..).zip(&specimen.liquid) {
        trials.push(trial(Kind::Liquid, no, &row.weighed, closures(row)));
    }
    for (no, row) in (1..).zip(&specimen.cone) {
        let mut trial = trial(Kind::Cone, no, &row.weighed, Vec::new());
        trial.penetrations = row.penetration_mm.iter().map(|p| Penetration { mm: p.value, typed: true, fact: None }).collect();
        trials.push(trial);
    }
    for (no, row) in (1..).zip(&specimen.plastic) {
        trials.push(trial(Kind::Thread, no, row, Vec::new()));
    }
    for (no, row) in (1..).zip(&specimen.natural) {
        trials.push(trial(Kind::Natural, no, row, Vec::new()));
    }
    Sheet {
        specimen: specimen.id.clone(),
        trials,
        liquid_not_obtainable: specimen.liquid_not_obtainable.clone(),
        plastic_not_obtainable: specimen.plastic_not_obtainable.clone(),
        passing_75um_percent: specimen.passing_75um_percent,
        clay_percent: specimen.clay_percent,
        liquid_limit_oven_dried: specimen.liquid_limit_oven_dried,
        answers: Vec::new(),
        reviewed: false,
        wanted: wanted(specimen),
    }
}

/// A file that gives natural water contents alone wants nothing else.
fn wanted(specimen: &ScenarioSpecimen) -> Vec<Intention> {
    let limits = !specimen.liquid.is_empty() || !specimen.plastic.is_empty();
    let stated = specimen.liquid_not_obtainable.is_some() || specimen.plastic_not_obtainable.is_some();
    if limits || stated { Vec::new() } else { vec![Intention::Natural] }
}

fn closures(row: &LiquidRow) -> Vec<Closure> {
    let one = |drops: u32| Closure {
        drops,
        rate_per_s: row.rate_per_s,
        gaps: 0,
        doubles: 0,
        interrupted: None,
        typed: true,
        fact: None,
    };
    row.drops.iter().map(|d| one(d.value)).collect()
}

fn trial(kind: Kind, no: u32, row: &Weighed, closures: Vec<Closure>) -> Trial {
    let (tare, wet, dry, water_percent) = match &row.water {
        Water::Percent(percent) => (None, None, Vec::new(), Some(*percent)),
        Water::Masses(m) => {
            let dry = m.dry.iter().map(|d| DryWeighing {
                mass: d.value,
                oven_hours: None,
                since_previous_hours: None,
                oven_recorded: false,
                basis: None,
                fact: None,
            });
            (Some(m.tare.value), Some(m.wet.value), dry.collect(), None)
        }
    };
    Trial {
        kind,
        no,
        closures,
        penetrations: Vec::new(),
        container: row.container.clone(),
        tare,
        wet,
        dry,
        water_percent,
        set_aside: row.set_aside.clone(),
        typed: true,
        by: None,
        balance: None,
        readings: Default::default(),
        cup: None,
        at_utc_us: None,
        facts: Vec::new(),
    }
}
