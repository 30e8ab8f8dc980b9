//! Determinations by the cone: penetrations, and trials by the other device.

use super::{LIQUID_LIMIT, Worked, facts, hold, note};
use crate::limits::CheckRow;
use crate::method::Device;
use crate::sheet::Kind;
use crate::soil::determined::Determined;
use crate::soil::stats;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.trials.iter().filter(|t| t.other_device) {
        let (name, device) = match worked.method.device() {
            Device::Cup => ("cone", "the cup's"),
            Device::Cone => ("cup", "the cone's"),
        };
        let says = format!(
            "the method of this specimen is {device}; cone and cup points are never mixed in one line, so this one is not used."
        );
        rows.push(note(name, &t.about, says, facts(t.trial)));
    }
    if worked.method.device() == Device::Cone {
        worked.of(Kind::Cone).for_each(|t| penetrations(worked, t, rows));
        both_sides(worked, rows);
    }
}

fn penetrations(worked: &Worked, t: &Determined, rows: &mut Vec<CheckRow>) {
    let Some(cone) = &worked.method.cone else { return };
    let read = &t.trial.penetrations;
    if !read.is_empty() && t.penetration.is_none() {
        let says = "a penetration is no depth above 0 mm, so the trial has no place on the line; read the gauge again, or set the trial aside.";
        rows.push(hold("no_penetration", &t.about, says.into(), facts(t.trial)));
    }
    let Some(mean) = t.penetration else { return };
    let Some((least, most)) = stats::range(read.iter().map(|p| p.mm)) else { return };
    // A ten-thousandth of a millimetre is the arithmetic of doubles.
    if most - least > cone.repeat_within_mm + 1e-4 {
        let says = format!(
            "the penetrations of the paste lie between {least:.1} and {most:.1} mm, further apart than {} mm; mix it again and repeat. Their mean is used.",
            cone.repeat_within_mm
        );
        rows.push(note("penetrations", &t.about, says, facts(t.trial)));
    }
    if read.len() < cone.repeats as usize {
        let says = format!(
            "the paste was penetrated once where the method wants {} penetrations that agree; refill the cup and repeat before the slice is taken.",
            cone.repeats
        );
        rows.push(note("single_penetration", &t.about, says, facts(t.trial)));
    }
    let [low, high] = cone.range_mm;
    if mean < low || mean > high {
        let remedy = if mean < low { "add water and mix well" } else { "let the paste dry by mixing, never add dry soil" };
        let says = format!(
            "a penetration of {mean:.1} mm, the method permits {low} to {high}; {remedy}, then try again. The trial is used as it is."
        );
        rows.push(note("penetration_range", &t.about, says, facts(t.trial)));
    }
}

fn both_sides(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(cone) = worked.method.cone.as_ref().filter(|c| c.both_sides) else { return };
    let depths: Vec<f64> = worked.of(Kind::Cone).filter_map(|t| t.penetration).collect();
    let Some((least, most)) = stats::range(depths.iter().copied()).filter(|_| depths.len() > 1) else { return };
    if least < cone.at_mm && most > cone.at_mm {
        return;
    }
    let remedy = if most <= cone.at_mm { "add water and mix well" } else { "let the paste dry by mixing, never add dry soil" };
    let says = format!(
        "the trials do not lie on both sides of {} mm ({least:.1} to {most:.1}), so the limit is read beyond them; {remedy}, then try again.",
        cone.at_mm
    );
    rows.push(note("both_sides", LIQUID_LIMIT, says, worked.facts_of(Kind::Cone)));
}
