//! A lid that was on the container at one weighing and off at another.

use super::fit::{apart, mends, misfit, pieces};
use super::{Worked, container_text, facts, hold};
use crate::limits::CheckRow;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let pieces = pieces(worked);
    let Some(now) = misfit(worked, &pieces).filter(|m| apart(*m)) else { return };
    for (i, (n, piece)) in pieces.iter().enumerate() {
        let t = &worked.trials[*n];
        let Some(lid) = t.trial.readings[0].lid else { continue };
        for (which, at) in [(1, "wet"), (2, "dry")] {
            let mut tried = pieces.clone();
            tried[i].1.masses[which] = piece.masses[which] - lid;
            if misfit(worked, &tried).is_some_and(|tried| mends(tried, now)) {
                let says = format!(
                    "without the {lid} g of its lid the {at} mass of {} would fit: was the lid on at that weighing alone? Weigh again without it, or correct the mass.",
                    container_text(t.trial)
                );
                rows.push(hold("lid", &t.about, says, facts(t.trial)));
            }
        }
    }
}
