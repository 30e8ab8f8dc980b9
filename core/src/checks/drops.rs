//! Drops outside what the method permits for any trial, and counts of nothing.

use super::{Worked, drops_text, facts, hold, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let [low, high] = worked.method.liquid.drops;
    for t in worked.of(Kind::Liquid) {
        let Some(drops) = t.drops else {
            if !t.trial.closures.is_empty() {
                let says = "the count says no drops at all, so the trial has no place on the flow line; count again, or set the trial aside.";
                rows.push(hold("no_drops", &t.about, says.into(), facts(t.trial)));
            }
            continue;
        };
        let remedy = if drops < f64::from(low) {
            "the paste is too wet: let it dry by mixing and count again; never add dry soil"
        } else if drops > f64::from(high) {
            "the paste is too dry: add water, mix well and count again"
        } else {
            continue;
        };
        let says =
            format!("{} drops, the method permits {low} to {high}; {remedy}. The trial is used as it is.", drops_text(drops));
        rows.push(note("drops", &t.about, says, facts(t.trial)));
    }
}
