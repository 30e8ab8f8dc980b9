//! What the balance showed around a weighing: a pan that was not empty, a load
//! that did not stand still, something left behind. A balance with a print key
//! shows none of it, and then nothing is said.

use super::{Worked, container_text, facts, hold, list_text, note};
use crate::limits::CheckRow;
use crate::quantity::Mass;
use crate::soil::determined::Determined;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// An empty pan may show so many steps of the last digit: what a balance at rest wanders by (common practice, no source).
const STEPS: i64 = 3;
/// A change of the water content that is no longer scatter, percent: careful lines scatter by less `[calc]`, as `scatter` says.
const MOVES: f64 = 0.5;
const WEIGHINGS: [&str; 3] = ["empty", "wet", "dry"];

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active() {
        zero(t, rows);
        left(t, rows);
        drift(t, rows);
    }
}

fn beyond(mass: Mass, step: Option<Mass>) -> bool {
    let step = step.map_or(10_000, Mass::ug).max(1_000);
    mass.ug().unsigned_abs() > step.unsigned_abs().saturating_mul(STEPS as u64)
}

fn zero(t: &Determined, rows: &mut Vec<CheckRow>) {
    let zero = |n: usize| t.trial.readings[n].seen.and_then(|s| s.zero).unwrap_or(Mass::ZERO);
    let off: Vec<usize> = (0..3).filter(|&n| beyond(zero(n), t.trial.readings[n].step)).collect();
    if off.is_empty() {
        return;
    }
    let shown: Vec<String> = off.iter().map(|&n| format!("{} g before the {} weighing", zero(n), WEIGHINGS[n])).collect();
    let moved = moved_by(t, [0, 1, 2].map(zero));
    let effect = match moved {
        Some(percent) => format!("; without it the water content would be {percent:+.2} % other"),
        None => String::new(),
    };
    let says = format!(
        "the empty pan showed {}{effect}. Clean the pan, zero it and weigh {} again, or correct the mass.",
        list_text(&shown),
        container_text(t.trial)
    );
    let weighs = moved.is_some_and(|m| m.abs() > MOVES);
    let row = if weighs { hold } else { note };
    rows.push(row("zero", &t.about, says, facts(t.trial)));
}

/// Change of the water content when what the empty pan showed is taken off each mass.
fn moved_by(t: &Determined, zero: [Mass; 3]) -> Option<f64> {
    let (tare, wet, dry) = (t.trial.tare?, t.trial.wet?, t.trial.dry.last()?.mass);
    let bare = crate::soil::water::water_percent(tare - zero[0], wet - zero[1], dry - zero[2]).ok()?;
    Some(bare - t.water()?)
}

fn left(t: &Determined, rows: &mut Vec<CheckRow>) {
    for (reading, which) in t.trial.readings.iter().zip(WEIGHINGS) {
        let Some(left) = reading.seen.and_then(|s| s.left).filter(|left| beyond(*left, reading.step)) else { continue };
        let (verb, remedy) = match left > Mass::ZERO {
            true => ("stayed on the pan", "soil fell off the container, or the pan was touched: look, and zero the balance"),
            false => ("left the pan with the load", "something lay there before: weigh the container again on a clean pan"),
        };
        let says = format!("{} g {verb} after the {which} weighing of {}; {remedy}.", left.abs(), container_text(t.trial));
        rows.push(note("left_on_pan", &t.about, says, facts(t.trial)));
    }
}

fn drift(t: &Determined, rows: &mut Vec<CheckRow>) {
    for (n, reading) in t.trial.readings.iter().enumerate() {
        let Some(stay) = reading.seen.and_then(|s| s.stay) else { continue };
        let change = Mass::from_ug(stay.drift_ug_per_s.saturating_mul(i64::from(stay.watched_ms)) / 1_000);
        if !beyond(change, reading.step) {
            continue;
        }
        let why = match (n, change > Mass::ZERO) {
            (2, true) => "it was still warm, or takes up moisture: cool it with the lid on and weigh it again",
            (1, false) => "wet soil loses water: put the lid on and weigh at once",
            (_, true) => "draught, a warm container or something added: weigh it again",
            (_, false) => "draught, or something was lost: weigh it again",
        };
        let (verb, which) = (if change > Mass::ZERO { "rose" } else { "fell" }, WEIGHINGS[n]);
        let says = format!(
            "the {which} reading of {} {verb} by {} g within {:.0} s on the pan; {why}.",
            container_text(t.trial),
            change.abs(),
            f64::from(stay.watched_ms) / 1e3
        );
        rows.push(note("drift", &t.about, says, facts(t.trial)));
    }
}
