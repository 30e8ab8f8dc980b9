//! A flow line far steeper or flatter than this laboratory's soils have at such a
//! liquid limit: two points that are off in opposite directions can still lie
//! on a line. A note, since the record moves with every finished specimen.

use super::{LIQUID_LIMIT, Worked, note};
use crate::limits::CheckRow;
use crate::soil::flow::Across;
use crate::soil::student;
use alloc::format;
use alloc::vec::Vec;

/// Specimens in the record before it says anything of a new one (our own choice, no source).
const FROM: u64 = 8;
/// Honest lines are told so once in two hundred times (our own choice, no source).
const CONFIDENCE: f64 = 0.995;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let Some(line) = worked.line.filter(|l| l.across() == Across::Drops && l.across().behaves(l.slope())) else { return };
    let Some(limit) = worked.liquid.map(|l| l.value) else { return };
    let Some(usual) = worked.laboratory.slopes.predicted(limit, FROM) else { return };
    let off = (line.slope() - usual.mean).abs() / usual.sd;
    if student::two_sided(CONFIDENCE, usual.freedom).is_some_and(|t| off > t) {
        let says = format!(
            "the flow line falls by {:.1} % per tenfold number of drops, where this laboratory's soils of such a liquid limit fall by {:.1}, give or take {:.1}. Look for exchanged containers, an altered digit or drops that were miscounted.",
            -line.slope(),
            -usual.mean,
            usual.sd
        );
        rows.push(note("steep", LIQUID_LIMIT, says, worked.facts_of(worked.method.limit_kind())));
    }
}
