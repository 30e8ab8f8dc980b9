//! Measured here while nobody was signed in.

use super::{Worked, facts, note};
use crate::limits::CheckRow;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.active().filter(|t| t.trial.by.is_none() && t.trial.balance.is_some()) {
        let says = "nobody was signed in at the bench for the wet weighing; sign in before the next one, and note who it was.";
        rows.push(note("nobody", &t.about, says.into(), facts(t.trial)));
    }
}
