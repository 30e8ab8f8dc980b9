//! The time between drops shows that some were missed or counted twice.

use super::{Worked, count_text, facts, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    for t in worked.of(Kind::Liquid) {
        let total = |n: fn(&crate::sheet::Closure) -> u32| t.trial.closures.iter().map(|c| u64::from(n(c))).sum::<u64>() as usize;
        let (gaps, doubles) = (total(|c| c.gaps), total(|c| c.doubles));
        if gaps == 0 && doubles == 0 {
            continue;
        }
        let says = format!(
            "the drops show {} (a drop may have been missed) and {} (one may have been counted twice); compare with the counter's own number and look at its switch and cable.",
            count_text(gaps, "gap"),
            count_text(doubles, "doubled drop")
        );
        rows.push(note("gaps", &t.about, says, facts(t.trial)));
    }
}
