//! Less soil in a container than the method asks for.

use super::{Worked, container_text, facts, note};
use crate::limits::CheckRow;
use crate::quantity::Mass;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let method = worked.method;
    let asked = [
        (Kind::Thread, method.plastic.mass_from_g, "threads", "roll more threads into it, or add a container"),
        (method.limit_kind(), method.liquid.mass_from_g, "wet soil", "take a larger slice next time"),
    ];
    for (kind, least, of, remedy) in asked {
        let Some(least) = least else { continue };
        for t in worked.of(kind) {
            let (Some(tare), Some(wet)) = (t.trial.tare, t.trial.wet) else { continue };
            let moist = wet - tare;
            if moist > Mass::ZERO && moist.grams() < least {
                let says = format!(
                    "{} holds {moist} g of {of}, the method asks for {least} g at least; {remedy}.",
                    container_text(t.trial)
                );
                rows.push(note("small_mass", &t.about, says, facts(t.trial)));
            }
        }
    }
}
