//! Thread containers that disagree.

use super::{PLASTIC_LIMIT, Worked, note};
use crate::limits::CheckRow;
use crate::sheet::Kind;
use crate::soil::limits::waters;
use crate::soil::stats;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(within) = worked.method.plastic.agree_within_percent else { return };
    let Some((low, high)) = stats::range(waters(worked.trials, Kind::Thread)) else { return };
    // Half of the sixth decimal: the difference of two quotients, not of soils.
    if high - low > within + 5e-7 {
        let says = format!(
            "the thread containers lie between {low:.2} and {high:.2} %, further apart than {within} %; repeat the plastic limit with fresh threads."
        );
        rows.push(note("threads", PLASTIC_LIMIT, says, worked.facts_of(Kind::Thread)));
    }
}
