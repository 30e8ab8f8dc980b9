//! An empty container that does not weigh what it weighed empty before.

use super::{Worked, container_text, facts, hold, in_order};
use crate::limits::CheckRow;
use crate::quantity::Mass;
use crate::soil::determined::Determined;
use crate::soil::uncertainty::reading_of;
use alloc::format;
use alloc::vec::Vec;

/// Two honest weighings of one thing are further apart than so many standard deviations of their difference once in
/// a thousand times (normal distribution `[calc]`).
const RARE: f64 = 3.29;
/// Exchanged must be so much likelier than not, for each pair that is tried: as a difference of chi squares, 2 ln of
/// 1000 `[calc]`.
const LIKELIER: f64 = 13.8;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let known = |t: &&Determined| t.trial.tare.is_some() && t.trial.readings[0].before.is_some();
    let all: Vec<&Determined> = worked.active().filter(known).collect();
    let exchanged = exchanged(worked, &all);
    for (i, t) in all.iter().enumerate() {
        let (Some(tare), Some(before)) = (t.trial.tare, t.trial.readings[0].before) else { continue };
        let with = exchanged.iter().find_map(|&(a, b)| (a == i).then_some(b).or((b == i).then_some(a)));
        if let Some(other) = with.map(|o| all[o]) {
            let says = format!(
                "{} weighs {tare} g empty, {before} g the time before, and {} the other way about: the two empty masses fit exchanged. Read each code again and weigh both empty once more.",
                container_text(t.trial),
                container_text(other.trial)
            );
            let both = facts(t.trial).into_iter().chain(facts(other.trial)).collect();
            rows.push(hold("tare_changed", &t.about, says, in_order(both)));
        } else if differs(worked, t) > RARE {
            let says = format!(
                "{} weighed {tare} g empty before this use and {before} g the time before, further apart than one container weighed twice: soil left in it, a lid, or another container's code. Clean it, weigh it empty again and correct the empty mass.",
                container_text(t.trial)
            );
            rows.push(hold("tare_changed", &t.about, says, facts(t.trial)));
        }
    }
}

/// Difference of two masses read as this one was, in its standard deviations.
fn in_sds(worked: &Worked, t: &Determined, a: Mass, b: Mass) -> f64 {
    let reading = &t.trial.readings[0];
    let step = reading.step.map(Mass::grams);
    let u = reading_of(worked.method, worked.laboratory, reading.balance.as_ref(), step);
    (a - b).abs().grams() / (u * core::f64::consts::SQRT_2)
}

fn differs(worked: &Worked, t: &Determined) -> f64 {
    match (t.trial.tare, t.trial.readings[0].before) {
        (Some(tare), Some(before)) => in_sds(worked, t, tare, before),
        _ => 0.0,
    }
}

/// Pairs whose empty masses are those of each other.
fn exchanged(worked: &Worked, all: &[&Determined]) -> Vec<(usize, usize)> {
    let mut pairs = Vec::new();
    for i in 0..all.len().min(24) {
        for j in i + 1..all.len().min(24) {
            let of = |a: &Determined, b: &Determined| match (a.trial.tare, b.trial.readings[0].before) {
                (Some(tare), Some(before)) => libm::pow(in_sds(worked, a, tare, before), 2.0),
                _ => f64::NAN,
            };
            let (a, b) = (all[i], all[j]);
            let (own, other) = (of(a, a) + of(b, b), of(a, b) + of(b, a));
            // Put back, each must be near what it was.
            if own - other > LIKELIER && other < LIKELIER {
                pairs.push((i, j));
            }
        }
    }
    pairs
}
