//! The last two dry weighings differ, although the time in the oven was long enough
//! or is not known. (Too short a time is the hold `not_dry`.)

use super::drying::{last_change_percent, oven_hours};
use super::{Worked, container_text, facts, note};
use crate::limits::CheckRow;
use crate::soil::determined::Water;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let drying = &worked.method.drying;
    for t in worked.active().filter(|t| !matches!(t.water, Water::Wrong(_))) {
        if oven_hours(t.trial).is_some_and(|h| h < drying.hours) {
            continue;
        }
        let Some(change) = last_change_percent(t.trial).filter(|c| c.abs() >= drying.constant_percent) else { continue };
        let (verb, remedy) = if change > 0.0 {
            ("lost", "it was still drying: put it back and weigh it again")
        } else {
            ("gained", "dry soil takes up moisture, and a warm container reads low: cool it with the lid on and weigh it again")
        };
        let says = format!(
            "{} {verb} {:.2} % of its dry soil between the last two dry weighings, more than {} %; {remedy}.",
            container_text(t.trial),
            change.abs(),
            drying.constant_percent
        );
        rows.push(note("constant_mass", &t.about, says, facts(t.trial)));
    }
}
