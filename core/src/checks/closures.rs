//! Successive closures of one paste that differ by too much.

use super::{Worked, facts, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let within = worked.method.liquid.closures_within;
    for t in worked.of(Kind::Liquid) {
        // The last pair is the one after which the slice was taken.
        let [.., before, last] = t.trial.closures.as_slice() else { continue };
        if before.drops.abs_diff(last.drops) > within {
            let says = format!(
                "the last two closures took {} and {} drops, the method allows a difference of {within}; the paste was not yet even. Mix more and repeat until two closures agree.",
                before.drops, last.drops
            );
            rows.push(note("closures", &t.about, says, facts(t.trial)));
        }
    }
}
