//! A container that was filled before it was ever weighed empty.

use super::{Worked, container_text, facts, note};
use crate::limits::CheckRow;
use crate::soil::determined::Water;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active().filter(|t| t.water == Water::Open) {
        if t.trial.wet.is_some() && t.trial.tare.is_none() {
            let says = format!(
                "{} was never weighed empty; after the dry weighing empty it, clean it and weigh it.",
                container_text(t.trial)
            );
            rows.push(note("tare_owed", &t.about, says, facts(t.trial)));
        }
    }
}
