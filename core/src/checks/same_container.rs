//! One container in two determinations of a specimen.

use super::{Worked, facts, in_order, note};
use crate::limits::CheckRow;
use crate::soil::determined::Determined;
use alloc::collections::BTreeMap;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let mut seen: BTreeMap<&str, &Determined> = BTreeMap::new();
    for t in worked.active() {
        let Some(container) = &t.trial.container else { continue };
        if let Some(first) = seen.get(container.as_str()) {
            let says = format!(
                "container {container} is also that of {}; look which of the two it really was, and correct the other.",
                first.about
            );
            let both = facts(first.trial).into_iter().chain(facts(t.trial)).collect();
            rows.push(note("same_container", &t.about, says, in_order(both)));
        } else {
            seen.insert(container.as_str(), t);
        }
    }
}
