//! Less soil in a thread container than the method asks for.

use super::{Worked, container_text, facts, note};
use crate::limits::CheckRow;
use crate::quantity::Mass;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(least) = worked.method.plastic.mass_from_g else { return };
    for t in worked.of(Kind::Thread) {
        let (Some(tare), Some(wet)) = (t.trial.tare, t.trial.wet) else { continue };
        let moist = wet - tare;
        if moist > Mass::ZERO && moist.grams() < least {
            let says = format!(
                "{} holds {moist} g of threads, the method asks for {least} g at least; roll more threads into it, or add a container.",
                container_text(t.trial)
            );
            rows.push(note("small_mass", &t.about, says, facts(t.trial)));
        }
    }
}
