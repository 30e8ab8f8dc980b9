//! A value typed by a person rather than read from an instrument.

use super::{Worked, facts, note};
use crate::limits::CheckRow;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked
        .active()
        .filter(|t| t.trial.typed || t.trial.closures.iter().any(|c| c.typed) || t.trial.penetrations.iter().any(|p| p.typed))
    {
        let says = "a value was typed, not read from an instrument; compare it with the note it was typed from.";
        rows.push(note("typed", &t.about, says.into(), facts(t.trial)));
    }
}
