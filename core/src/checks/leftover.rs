//! The same masses in two determinations: values of another one that stayed on the form.

use super::{Worked, facts, in_order, note};
use crate::limits::CheckRow;
use crate::quantity::Mass;
use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// Masses of three that are the same. One alone is common among containers of one size; two are the same by chance
/// in one of some fifty thousand pairs of determinations on a balance that shows 0.01 g, when containers differ by
/// tenths of a gram and slices by grams `[calc]`. In the same row of two forms that is enough; elsewhere there are
/// many pairs, and it takes all three.
const SAME: usize = 2;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let all: Vec<_> = worked.active().map(|t| (t, [t.trial.tare, t.trial.wet, t.trial.dry.last().map(|d| d.mass)])).collect();
    // What a balance sent cannot have stayed on a form.
    for (n, (t, masses)) in all.iter().enumerate().filter(|(_, (t, _))| t.trial.typed) {
        if let Some((first, _)) = all[..n].iter().find(|(_, other)| same(masses, other) >= SAME) {
            let both = facts(first.trial).into_iter().chain(facts(t.trial)).collect();
            rows.push(note("same_masses", &t.about, says(&first.about), in_order(both)));
        }
        for other in &worked.laboratory.beside {
            // A container keeps its empty mass from one specimen to the next.
            let left = |b: &&crate::beside::BesideTrial| {
                let own = t.trial.container.as_ref() == Some(&b.container);
                same(masses, &b.masses) >= SAME + usize::from(own || b.about != t.about)
            };
            if let Some(left) = other.trials.iter().find(left) {
                let of = format!("{} of specimen {}", left.about, other.specimen);
                rows.push(note("left_over", &t.about, says(&of), facts(t.trial)));
            }
        }
    }
}

fn says(of: &str) -> String {
    format!(
        "its masses are those of {of}: were they left over on the form? Compare with the containers, and correct the one that is wrong."
    )
}

fn same(a: &[Option<Mass>; 3], b: &[Option<Mass>; 3]) -> usize {
    a.iter().zip(b).filter(|(a, b)| a.is_some() && a == b).count()
}
