//! Drying times that rest on something weaker than an oven record and a running clock.

use super::{SPECIMEN, Worked, list_text, note};
use crate::limits::CheckRow;
use crate::sheet::DryWeighing;
use crate::stamp::Basis;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let which = |weak: fn(&DryWeighing) -> bool| -> Vec<String> {
        let timed = worked.active().filter(|t| t.trial.dry.last().is_some_and(|d| d.oven_hours.is_some() && weak(d)));
        timed.map(|t| t.about.clone()).collect()
    };
    let unrecorded = which(|d| !d.oven_recorded);
    if !unrecorded.is_empty() {
        let says = format!(
            "nobody recorded when {} went into the oven, so the hours count from the wet weighing; record the oven to make them true.",
            list_text(&unrecorded)
        );
        rows.push(note("oven_record", SPECIMEN, says, Vec::new()));
    }
    let wall = which(|d| d.basis == Some(Basis::Wall));
    if !wall.is_empty() {
        let says = format!(
            "the machine was started again while {} dried, so the hours rest on the wall clock; check that it was right.",
            list_text(&wall)
        );
        rows.push(note("oven_clock", SPECIMEN, says, Vec::new()));
    }
    let doubtful = which(|d| d.basis == Some(Basis::Doubtful));
    if !doubtful.is_empty() {
        let says = format!(
            "the machine was started again while {} dried, and its clock was wrong: only the hours since that start are counted; weigh again later, or say what the hours were.",
            list_text(&doubtful)
        );
        rows.push(note("oven_clock", SPECIMEN, says, Vec::new()));
    }
}
